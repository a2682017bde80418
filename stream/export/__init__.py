"""What leaves the store: files with stated columns and units."""
