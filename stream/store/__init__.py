"""The one DuckDB file; all its SQL stands in `sql/`."""
