"""The archive, read in chunks of typed columns."""
