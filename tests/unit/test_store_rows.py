"""Rows and counts made of what detection found."""

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl
import pytest

from stream.config import Settings
from stream.detect.records import DROP_REASONS, PASSAGE, SECTION, TRIP, UNFINISHED, Found
from stream.store import Store, put_network
from stream.store.batch import BatchTotals
from stream.store.files import statement
from stream.store.rows import RowMaker
from stream.store.vehicles import name_code
from tests.stand_in import install, plan

KINDS = {"passage": PASSAGE, "section": SECTION, "unfinished": UNFINISHED, "trip": TRIP}


@pytest.fixture
def store(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Store]:
    """Give a store with the plan of two junctions."""
    install(monkeypatch.setattr)
    with Store.open(tmp_path / "s.duckdb", create=True) as opened:
        put_network(opened, plan())
        yield opened


def _found(**records: Any) -> Found:
    given = [np.array(records.get(kind, []), dtype=of) for kind, of in KINDS.items()]
    return Found(*given, np.zeros(len(DROP_REASONS), np.int64), 0)


def _passage(arm_in: int, arm_out: int, entry_us: int = 0, exit_us: int = 1) -> tuple[Any, ...]:
    return (0, arm_in, arm_out, 0, entry_us, exit_us, 10.0, 2, 1, 0, 0, 5.0, 0)


def test_nothing_found_gives_empty_frames_of_the_right_columns(store: Store, settings: Settings) -> None:
    """A chunk without a passage still has the columns of every insert."""
    rows = RowMaker(store, settings, 1).make(_found(), [], np.zeros(0, np.uint64))
    for kind in KINDS:
        frame: pl.DataFrame = getattr(rows, kind)
        assert frame.height == 0
        assert frame.columns == [column for column, _ in statement(f"batch/put_{kind}").incoming]
        store.run(f"batch/put_{kind}", {"batch_id": 1}, frame)
    assert rows.counts.moment.height == 0


def test_passage_off_the_network_is_our_own_fault(store: Store, settings: Settings) -> None:
    """A passage between arms of two junctions is no movement, and nothing may be written of it."""
    found = _found(passage=[_passage(1, 0), _passage(0, 3)])
    with pytest.raises(RuntimeError, match="from arm 0 to arm 3 is no movement of the network"):
        RowMaker(store, settings, 1).make(found, ["a"], name_code(["a"]))


@pytest.mark.parametrize(
    ("entry_us", "local"),
    [
        # METHODS.md section 13: clocks in Helsinki go from 03:00 to 04:00 at 2026-03-29T01:00Z, a Sunday.
        ("2026-03-29T00:59:59", ("sunday", "night")),
        # 06:00 in summer is 03:00Z, in winter 04:00Z.
        ("2026-03-29T03:00:00", ("sunday", "am_peak")),
        ("2026-03-30T02:59:59", ("weekday", "night")),
        ("2026-03-27T03:59:59", ("weekday", "night")),
        ("2026-03-27T04:00:00", ("weekday", "am_peak")),
    ],
)
def test_band_and_day_are_local(
    store: Store, settings: Settings, entry_us: str, local: tuple[str, str]
) -> None:
    """Time bands and day types go by the clock of the junction's zone, summer time included."""
    at = int(np.datetime64(entry_us, "us").astype(np.int64))
    found = _found(passage=[_passage(1, 0, at, at + 10_000_000)])
    rows = RowMaker(store, settings, 1).make(found, ["a"], name_code(["a"]))
    assert rows.passage.select("day_type", "time_band").rows() == [local]


def test_trip_without_gates_has_none(store: Store, settings: Settings) -> None:
    """A trip that met no gate has no first and no last one; the store takes it."""
    found = _found(trip=[(0, 1, 5, 0, 0, 0, 10, 20, -1, -1, 0, 0, 0, 0, 1234)])
    rows = RowMaker(store, settings, 1).make(found, ["a"], name_code(["a"]))
    assert rows.trip.select("first_gate_us", "last_gate_us", "end_reason").rows() == [(None, None, "dwell")]
    store.run("batch/put_trip", {"batch_id": 1}, rows.trip)
    assert store.run("audit/time_conserved") == []


def test_rows_that_do_not_add_up_stop_the_batch() -> None:
    """A row that is neither used, dropped nor held is a fault of this program, never written."""
    totals = BatchTotals(rows_in=10, rows_used=6, rows_held=1)
    totals.drop("late", 2)
    with pytest.raises(RuntimeError, match=r"10 in, 6 used \+ {'late': 2} dropped \+ 1 held = 9"):
        totals.check()
    totals.drop("late", 1)
    totals.check()
    assert totals.dropped == {"late": 3}
