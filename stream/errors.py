"""The exception tree; each kind carries the exit code that the command line returns.

::

    StreamError            1
    ├── ConfigError        2   a key or value of the configuration, or wrong usage
    ├── InputError         1   a file of pings, zones or tallies that can't be used
    ├── NetworkError       1   an extract without usable roads, a network that doesn't fit
    └── StoreError         1   the DuckDB file: missing, locked, of another format or content

A message has three parts: what is wrong with the value, where (file, row, key, batch), and the mend.
"""


class StreamError(Exception):
    """Base of every error that a user can cause and mend."""

    exit_code = 1


class ConfigError(StreamError):
    """A key or value of the configuration is unusable, or a command was used wrongly."""

    exit_code = 2


class InputError(StreamError):
    """A file given by the user can't be used; nothing of its batch was taken in."""


class NetworkError(StreamError):
    """An extract holds no usable roads, or a network doesn't fit the work asked of it."""


class StoreError(StreamError):
    """The store is missing, locked, of another format, or holds other content."""
