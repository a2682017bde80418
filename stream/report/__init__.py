"""One page of figures and text, from the store alone."""

from stream.report.write import write_report

__all__ = ["write_report"]
