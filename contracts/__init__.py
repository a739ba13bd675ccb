"""The craft: text in, tables out.

Belongs here: reading raw bytes, sessions, checks, repairs, rolls, splices, all as pure functions of their
arguments. Does not belong here: Prefect, DuckDB, writing a file, knowing where a store lies.
"""
