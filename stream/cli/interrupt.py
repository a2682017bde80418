"""Whether the user interrupted, whatever became of it on the way.

Guarantee: an interrupt is known even where a compiled library at work took it for a fault of its own.
"""

import signal
import threading
from types import FrameType, TracebackType
from typing import Self


class Watch:
    """Looks out for interrupts, in a `with` block of the main thread.

    A process that ignores interrupts (one in the background) goes on to do so.

    Attributes
    ----------
    has_come : one came
    """

    def __init__(self) -> None:
        self.has_come = False
        is_main = threading.current_thread() is threading.main_thread()
        self._is_on = is_main and signal.getsignal(signal.SIGINT) is signal.default_int_handler

    def _note(self, _signal: int, _frame: FrameType | None) -> None:
        self.has_come = True
        raise KeyboardInterrupt

    def __enter__(self) -> Self:
        if self._is_on:
            signal.signal(signal.SIGINT, self._note)
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._is_on:
            signal.signal(signal.SIGINT, signal.default_int_handler)
