"""Batches older than what is in: taken in alone, each time of a vehicle once. Detection is the stand-in's."""

import itertools
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl
import pytest

from stream.config import Settings
from stream.errors import InputError
from stream.ingest import ingest
from stream.ingest.spans import joined_up
from stream.ingest.standing import within
from stream.store import Store, put_network
from stream.store.audit import run_audit
from stream.store.ledger import network_config
from stream.store.status import status
from tests.archive import T0, Row, drive, dump, write
from tests.stand_in import install, plan

Make = Callable[..., Settings]
DAY = 86_400


@pytest.fixture
def plain(make_settings: Make) -> Settings:
    """Give settings that keep ids as given, with chunks of ten rows."""
    return make_settings({"privacy.plain_ids": True, "run.chunk_rows": 10})


@pytest.fixture
def store_path(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, plain: Settings) -> Path:
    """Give a store with the plan of two junctions, and the stand-in for a detector."""
    install(monkeypatch.setattr)
    return fresh(tmp_path / "s.duckdb", plain)


def fresh(path: Path, settings: Settings) -> Path:
    """Make a store without batches."""
    with Store.open(path, create=True) as store:
        put_network(store, plan(), network_config(settings))
    return path


def is_sound(path: Path) -> bool:
    """Tell whether the audit finds nothing."""
    with Store.open(path, read_only=True) as store:
        return not any(one["n_faults"] for one in run_audit(store))


def day(n: int, vehicles: str = "ab", rows: int = 20) -> list[Row]:
    """Give one day's pings: each vehicle drives once, 10 s apart, from the same time on."""
    return [row for v in vehicles for row in drive(v, rows, T0 + n * DAY)]


def kept(path: Path, *tables: str) -> list[Any]:
    """Read tables without batch numbers."""
    whole = dump(path, by_batch=False)
    return [whole[t] for t in tables]


def test_older_day_is_taken_in_alone(store_path: Path, tmp_path: Path, plain: Settings) -> None:
    """Its trips are those it gives by itself, it is closed, the carry stays, and the ledger says so."""
    ingest(store_path, [write(tmp_path / "1.csv", day(1))], plain)
    before = dump(store_path)
    (report,) = ingest(store_path, [write(tmp_path / "0.csv", day(0))], plain)
    alone = fresh(tmp_path / "alone.duckdb", plain)
    ingest(alone, [tmp_path / "0.csv"], plain, close=True)
    after = dump(store_path)
    wanted = {
        "status": "taken in",
        "is_backfill": True,
        "is_closed": True,
        "rows_used": 40,
        "rows_held": 0,
        "trips": 2,
        "trips_cut_start": 0,
        "trips_cut_end": 0,
    }
    assert wanted == {k: report[k] for k in wanted}
    assert before["carry"] == after["carry"]
    mine = {r[1:] for r in after["passage"]} - {r[1:] for r in before["passage"]}
    assert {r[1:] for r in dump(alone)["passage"]} == mine
    assert is_sound(store_path)
    with Store.open(store_path, read_only=True) as store:
        assert [b["is_backfill"] for b in status(store)["batches"]] == [False, True]


def test_days_in_any_order_give_the_same_where_no_trip_crosses(
    tmp_path: Path, plain: Settings, monkeypatch: Any
) -> None:
    """Nights without driving: any order of days gives the passages, sections and trips of the right one."""
    install(monkeypatch.setattr)
    files = [write(tmp_path / f"{n}.csv", day(n)) for n in range(4)]
    found = []
    for i, order in enumerate([(0, 1, 2, 3), (3, 2, 1, 0), (2, 0, 3, 1), (1, 3, 0, 2)]):
        path = fresh(tmp_path / f"s{i}.duckdb", plain)
        for n in order:
            ingest(path, [files[n]], plain)
        ingest(path, [], plain, close=True)
        assert is_sound(path)
        trips = [(r[0], *r[2:4], *r[5:]) for r in dump(path, by_batch=False)["trip"]]
        found.append((kept(path, "passage", "section"), trips))
    assert found[1:] == found[:1] * 3


def test_trips_that_cross_the_edges_are_counted(store_path: Path, tmp_path: Path, plain: Settings) -> None:
    """A day that joins its neighbours within a trip's silence has a trip cut at each side."""
    rows = sorted([*drive("a", 90), *drive("b", 90, T0 + 5)], key=lambda r: r[1])
    parts = [rows[:60], rows[60:120], rows[120:]]
    files = [write(tmp_path / f"{i}.csv", part) for i, part in enumerate(parts)]
    ingest(store_path, [files[0], files[2]], plain)
    (report,) = ingest(store_path, [files[1]], plain)
    assert (report["is_backfill"], report["rows_used"]) == (True, 60)
    assert (report["trips_cut_start"], report["trips_cut_end"]) == (2, 2)
    ingest(store_path, [], plain, close=True)
    assert is_sound(store_path)
    assert len(dump(store_path)["trip"]) == 6


def test_day_before_all_has_its_ends_counted_only(store_path: Path, tmp_path: Path, plain: Settings) -> None:
    """Nothing lies before the oldest day, so no trip is cut at its start."""
    rows = drive("a", 60)
    ingest(store_path, [write(tmp_path / "1.csv", rows[30:])], plain)
    (report,) = ingest(store_path, [write(tmp_path / "0.csv", rows[:30])], plain)
    assert (report["trips_cut_start"], report["trips_cut_end"]) == (0, 1)


@pytest.mark.parametrize("is_closed", [False, True])
def test_same_pings_in_another_form_never_count_twice(
    store_path: Path, tmp_path: Path, plain: Settings, is_closed: bool
) -> None:
    """Content under another digest, of a day in order or of a backfill, closed or not, is refused by name."""
    ingest(store_path, [write(tmp_path / "1.csv", day(1))], plain, close=is_closed)
    ingest(store_path, [write(tmp_path / "0.csv", day(0))], plain)
    before = dump(store_path)
    for n in (0, 1):
        again = write(tmp_path / f"again{n}.csv", [(v, t, lon, 0.6) for v, t, lon, _ in day(n)])
        with pytest.raises(
            InputError, match=rf"(38|40) of 40 rows have times .* in {n}\.csv.*retract {n}\.csv"
        ):
            ingest(store_path, [again], plain)
    assert before == dump(store_path)


def test_small_overlap_is_counted_late(store_path: Path, tmp_path: Path, plain: Settings) -> None:
    """A few rows whose times are in are late, whichever of two days comes first; the others count."""
    early, late = drive("a", 33), drive("a", 30, T0 + 300)
    files = [write(tmp_path / "0.csv", early), write(tmp_path / "1.csv", late)]
    (_, second) = ingest(store_path, files, plain)
    assert second["dropped"] == {"duplicate": 1, "late": 2}
    other = fresh(tmp_path / "other.duckdb", plain)
    ingest(other, files[1:], plain)
    (backfill,) = ingest(other, files[:1], plain)
    assert backfill["is_backfill"]
    assert backfill["dropped"] == {"late": 3}
    assert is_sound(other)


def test_batch_partly_before_and_partly_after_is_refused(
    store_path: Path, tmp_path: Path, plain: Settings
) -> None:
    """A delivery that spans what is in is to be split, whichever part is seen first."""
    ingest(store_path, [write(tmp_path / "1.csv", day(1))], plain)
    before = dump(store_path)
    both = write(tmp_path / "both.csv", day(0) + day(2))
    with pytest.raises(
        InputError, match=r"40 of 80 rows are older .* 40 newer .*2023-11-15 22:16:30 UTC.*split"
    ):
        ingest(store_path, [both], plain)
    assert before == dump(store_path)


def test_vehicles_of_their_own_are_no_backfill(store_path: Path, tmp_path: Path, plain: Settings) -> None:
    """Files by vehicle go on from day to day: what is older than other vehicles' pings alone is in order."""
    files = [write(tmp_path / f"{n}{v}.csv", day(n, v)) for n in range(2) for v in "ab"]
    reports = ingest(store_path, files, plain, close=True)
    assert [r["is_backfill"] for r in reports] == [False] * 4
    whole = fresh(tmp_path / "whole.duckdb", plain)
    ingest(whole, [write(tmp_path / "all.csv", day(0) + day(1))], plain, close=True)
    assert kept(whole, "passage", "trip", "section") == kept(store_path, "passage", "trip", "section")


def test_backfill_with_close_ends_the_rest_as_well(store_path: Path, tmp_path: Path, plain: Settings) -> None:
    """`--close` after a backfill closes what the days in order left open."""
    ingest(store_path, [write(tmp_path / "1.csv", day(1))], plain)
    reports = ingest(store_path, [write(tmp_path / "0.csv", day(0))], plain, close=True)
    assert [r["status"] for r in reports] == ["taken in", "closed"]
    assert len(dump(store_path)["trip"]) == 4


def test_day_goes_on_after_a_backfill(store_path: Path, tmp_path: Path, plain: Settings) -> None:
    """A backfill between two days doesn't keep the open trips of the day before from going on."""
    rows = drive("a", 40, T0 + DAY)
    ingest(store_path, [write(tmp_path / "1.csv", rows[:20])], plain)
    ingest(store_path, [write(tmp_path / "0.csv", day(0))], plain)
    ingest(store_path, [write(tmp_path / "2.csv", rows[20:])], plain, close=True)
    assert [r[4] for r in sorted(dump(store_path)["trip"], key=lambda r: r[3]) if r[1] == "a"][-1:] == [
        max(r[4] for r in dump(store_path)["trip"])
    ]
    assert len([r for r in dump(store_path)["trip"] if r[1] == "a"]) == 2


@pytest.mark.parametrize("chunk_rows", [1, 7, 1000])
def test_chunks_do_not_change_a_backfill(
    tmp_path: Path, make_settings: Make, monkeypatch: pytest.MonkeyPatch, chunk_rows: int
) -> None:
    """A batch whose first chunks bring only new vehicles is judged as a whole."""
    install(monkeypatch.setattr)
    found = []
    for rows in (chunk_rows, 50):
        keys = make_settings({"privacy.plain_ids": True, "run.chunk_rows": rows})
        path = fresh(tmp_path / f"s{rows}.duckdb", keys)
        ingest(path, [write(tmp_path / "1.csv", day(1))], keys)
        older = drive("new", 9, T0 - 500) + drive("new2", 10, T0 + DAY + 60) + day(0)
        ingest(path, [write(tmp_path / "0.csv", older)], keys)
        found.append(dump(path))
        assert is_sound(path)
    assert found[0] == found[1]


def test_trip_does_not_run_across_what_is_in(store_path: Path, tmp_path: Path, plain: Settings) -> None:
    """Around a few seconds of a vehicle that are in, a backfill's trip is cut and not led across."""
    ingest(store_path, [write(tmp_path / "1.csv", drive("a", 2, T0 + 100, 5) + day(1, "ab"))], plain)
    around = [r for r in drive("a", 60) if not T0 + 90 < r[1] < T0 + 120]
    (report,) = ingest(store_path, [write(tmp_path / "0.csv", around + day(0, "b", 40))], plain)
    assert report["is_backfill"]
    trips = sorted((r[3], r[4]) for r in dump(store_path)["trip"] if r[1] == "a")
    assert all(end < start for (_, end), (start, _) in itertools.pairwise(trips))
    assert is_sound(store_path)


def test_spans_join_when_they_touch() -> None:
    """Spans within an hour are one; others and other vehicles' stay apart."""
    hour = 3_600_000_000
    spans = pl.DataFrame(
        {
            "vehicle": ["a", "a", "b", "a", "a"],
            "first_us": [5 * hour, 0, 0, hour, 4 * hour],
            "last_us": [5 * hour + 9, hour // 2, 7, 2 * hour, 6 * hour],
        }
    )
    wanted = [("a", 0, 2 * hour), ("a", 4 * hour, 6 * hour), ("b", 0, 7)]
    assert wanted == joined_up(spans).rows()


def test_pings_within_spans_are_told() -> None:
    """Ends count as within; spans that overlap, and vehicles without any, are no trouble."""
    spans = pl.DataFrame({"ix": [1, 1, 0], "first_us": [10, 12, 50], "last_us": [30, 15, 50]})
    vehicle_ix = np.array([1, 1, 1, 0, 0, 2, 1], np.int32)
    t_us = np.array([31, 30, 20, 50, 20, 20, 9], np.int64)
    wanted = [False, True, True, True, False, False, False]
    assert wanted == within(vehicle_ix, t_us, spans).tolist()
