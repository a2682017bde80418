"""The one DuckDB file."""

from stream.store.database import FORMAT_VERSION, Store
from stream.store.network import put_network

__all__ = ["FORMAT_VERSION", "Store", "put_network"]
