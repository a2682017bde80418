"""What the user gets to see: results on stdout, all else on stderr.

Guarantee: a reader that closes the pipe early ends the output, not the work.
"""

import json
import os
import sys
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any, TextIO

if TYPE_CHECKING:
    from stream.config import Settings

_WORKSPACE = Path("turntally.yaml")


@dataclass(frozen=True)
class Session:
    """The global options of one run.

    Attributes
    ----------
    store : the DuckDB file
    config : workspace file, None for `turntally.yaml` here, if there is one
    is_quiet, is_json : what to leave out, how to print results
    """

    store: Path
    config: Path | None
    is_quiet: bool
    is_json: bool

    def settings(self, over: dict[str, Any] | None = None) -> "Settings":
        """Load the configuration, checked whole.

        Raises
        ------
        ConfigError
            The file is missing, no YAML, or holds unusable keys.
        """
        from stream.config import load_settings

        path = self.config or (_WORKSPACE if _WORKSPACE.exists() else None)
        return load_settings(path, over)

    @property
    def has_bars(self) -> bool:
        """Progress is drawn on a terminal only, and for people only."""
        return sys.stderr.isatty() and not self.is_quiet and not self.is_json

    def note(self, text: str) -> None:
        """Tell people something on stderr, unless they asked for quiet."""
        if not self.is_quiet:
            _write(sys.stderr, text + "\n")

    def result(self, whole: dict[str, Any], text: str) -> None:
        """Print a result: the object itself with `--json`, else the text that was made from it."""
        _write(
            sys.stdout, (json.dumps(whole, default=_plain, allow_nan=False) if self.is_json else text) + "\n"
        )


def warn(text: str) -> None:
    """Print an error message to stderr, quiet or not."""
    _write(sys.stderr, f"turntally: {text}\n")


def _plain(value: object) -> Any:
    if isinstance(value, datetime):
        return value.isoformat().replace("+00:00", "Z")
    if isinstance(value, Path):
        return str(value)
    raise TypeError(f"{type(value).__name__} has no JSON form")


def _write(to: TextIO, text: str) -> None:
    try:
        to.write(text)
        to.flush()
    except BrokenPipeError:
        # Nobody reads on: send the rest, and what the interpreter flushes at its end, nowhere.
        nowhere = os.open(os.devnull, os.O_WRONLY)
        os.dup2(nowhere, to.fileno())
        os.close(nowhere)


def table(heads: Sequence[str], rows: Sequence[Sequence[str]], left: int = 1) -> str:
    """Lay out a table in plain text, never cut to a width.

    Parameters
    ----------
    heads
        One text per column.
    rows
        Cells as texts, as many as heads.
    left
        How many leading columns are flush left; the others, numbers, are flush right.
    """
    lines = [list(heads), *(list(r) for r in rows)]
    widths = [max(len(line[i]) for line in lines) for i in range(len(heads))]
    out = []
    for line in lines:
        cells = [
            c.ljust(w) if i < left else c.rjust(w) for i, (c, w) in enumerate(zip(line, widths, strict=True))
        ]
        out.append("  ".join(cells).rstrip())
    return "\n".join(out)


def counts(numbers: dict[str, int], *, is_sorted: bool = True) -> str:
    """Write counts by reason in one line without zeros; `none` where nothing is left.

    Parameters
    ----------
    numbers
        Reason to count.
    is_sorted
        The greatest first; else in the order given.
    """
    kept = [(reason.replace("_", " "), n) for reason, n in numbers.items() if n]
    if is_sorted:
        kept.sort(key=lambda pair: (-pair[1], pair[0]))
    return ", ".join(f"{n:,} {reason}" for reason, n in kept) or "none"
