"""The warehouse: tables and views in DuckDB, one writer, and the published copy that everyone else reads."""
