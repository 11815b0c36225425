"""The catalogue as DuckDB functions."""
