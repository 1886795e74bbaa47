"""The DuckDB store: schema, lock, publication."""
