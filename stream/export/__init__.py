"""What leaves the store: files with stated columns and units."""

from stream.export.write import ENDINGS, Written, export_table, write
from stream.store.ladder import quantile_rows

__all__ = ["ENDINGS", "Written", "export_table", "quantile_rows", "write"]
