"""Progress on a terminal: one line per piece of work, on stderr, gone in a pipe."""

from types import TracebackType
from typing import TYPE_CHECKING, Self

from stream.cli.say import Session

if TYPE_CHECKING:
    from rich.progress import Progress, TaskID


class Bars:
    """Draws how far the work has come; silent where the session has no bars.

    Use it in a `with` block; a piece of work is known by its key and gets its line when first shown.
    """

    def __init__(self, session: Session) -> None:
        self._drawn: Progress | None = _drawing() if session.has_bars else None
        self._lines: dict[str, TaskID] = {}

    def show(self, key: str, done: float, total: float, note: str = "") -> None:
        """Move one line.

        Parameters
        ----------
        key
            Names the piece of work, and is its label.
        done, total
            In one unit; total 0 where it isn't known.
        note
            What else to say: rows, rate.
        """
        if self._drawn is None:
            return
        if key not in self._lines:
            self._lines[key] = self._drawn.add_task(key, total=total or None, note=note)
        self._drawn.update(self._lines[key], completed=done, total=total or None, note=note)

    def __enter__(self) -> Self:
        if self._drawn is not None:
            self._drawn.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._drawn is not None:
            self._drawn.stop()


def _drawing() -> "Progress":
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TaskProgressColumn, TextColumn, TimeRemainingColumn

    return Progress(
        TextColumn("{task.description}"),
        BarColumn(bar_width=24),
        TaskProgressColumn(),
        TextColumn("{task.fields[note]}"),
        TimeRemainingColumn(),
        console=Console(stderr=True),
        transient=True,
    )
