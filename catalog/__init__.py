"""What is declared and what is published: the desk's declarations, the store, the catalog, the audit.

Belongs here: everything that writes a file, everything that asks DuckDB. Does not belong here: reading raw
text, rolling, splicing (`contracts/`), when a night runs and what a terminal shows (`flows/`).
"""
