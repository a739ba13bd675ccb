"""The store: what is kept, published, asked and checked, and what becomes of it when it is broken."""
