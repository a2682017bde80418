"""Reading one item ahead in a thread."""

import threading
from collections.abc import Iterator

import pytest

from stream.ingest.prefetch import prefetch


def test_items_come_in_order() -> None:
    """All items of the source arrive, in its order."""
    with prefetch(iter(range(100))) as items:
        assert list(range(100)) == list(items)


def test_error_of_the_source_comes_in_its_place() -> None:
    """What the source raises is raised after the items before it."""

    def source() -> Iterator[int]:
        yield 1
        raise KeyError("row 2")

    got = []
    with pytest.raises(KeyError, match="row 2"), prefetch(source()) as items:
        got += list(items)
    assert got == []
    with prefetch(source()) as items:
        assert next(items) == 1
        with pytest.raises(KeyError, match="row 2"):
            next(items)


def test_source_runs_at_most_two_ahead() -> None:
    """One item waits and one is being made: what is in memory is bounded."""
    made: list[int] = []
    third = threading.Event()

    def source() -> Iterator[int]:
        for i in range(10):
            made.append(i)
            if i == 2:
                third.set()
            yield i

    with prefetch(source()) as items:
        assert next(items) == 0
        assert third.wait(10)
        assert made[:3] == [0, 1, 2]
        assert len(made) <= 3
        assert list(items) == [1, 2, 3, 4, 5, 6, 7, 8, 9]


def _stop_after_one(source: Iterator[int]) -> None:
    with prefetch(source) as items:
        next(items)
        raise ZeroDivisionError


def test_leaving_early_ends_the_thread_and_closes_the_source() -> None:
    """A consumer that stops leaves no thread behind, and the source's own cleaning up has run."""
    closed = threading.Event()

    def source() -> Iterator[int]:
        try:
            while True:
                yield 1
        finally:
            closed.set()

    before = threading.active_count()
    with pytest.raises(ZeroDivisionError):
        _stop_after_one(source())
    assert closed.is_set()
    assert before == threading.active_count()
