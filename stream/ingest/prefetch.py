"""Read one item ahead in a thread, so that reading and detection overlap.

Guarantee: items come in the order of the source, at most one waits; an error of the source is raised where
its item would have come; leaving early ends the thread before control returns.
"""

import queue
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Generic, TypeVar

T = TypeVar("T")
_POLL_S = 0.1


class _End:
    """Stands in the queue for the end of the source, with the error that ended it."""

    def __init__(self, error: BaseException | None) -> None:
        self.error = error


class _Reader(threading.Thread, Generic[T]):
    def __init__(self, source: Iterator[T]) -> None:
        super().__init__(name="prefetch", daemon=True)
        self._source = source
        self._left = threading.Event()
        self.items: queue.Queue[T | _End] = queue.Queue(maxsize=1)

    def run(self) -> None:
        error: BaseException | None = None
        try:
            for item in self._source:
                if not self._put(item):
                    break
        except BaseException as err:  # handed to the consumer, which raises it
            error = err
        finally:
            close = getattr(self._source, "close", None)
            if close is not None:
                close()
        self._put(_End(error))

    def _put(self, item: "T | _End") -> bool:
        while not self._left.is_set():
            try:
                self.items.put(item, timeout=_POLL_S)
            except queue.Full:
                continue
            return True
        return False

    def leave(self) -> None:
        self._left.set()
        self.join()


def _items(reader: "_Reader[T]") -> Iterator[T]:
    while True:
        item = reader.items.get()
        if isinstance(item, _End):
            if item.error is not None:
                raise item.error
            return
        yield item


@contextmanager
def prefetch(source: Iterator[T]) -> Iterator[Iterator[T]]:
    """Run a source one item ahead of its consumer, for the length of a `with` block.

    Parameters
    ----------
    source
        Runs in another thread only; closed at the end where it is a generator.
    """
    reader: _Reader[T] = _Reader(source)
    reader.start()
    try:
        yield _items(reader)
    finally:
        reader.leave()
