"""The command line: parses, calls one function, prints, sets the exit code."""

from stream.cli.main import main

__all__ = ["main"]
