"""Batches taken back, and rolled up. Detection is the stand-in's."""

import datetime
import itertools
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from stream.config import Settings
from stream.errors import InputError, StoreError
from stream.ingest import ingest
from stream.store import Store
from stream.store.compact import compact, plan
from stream.store.retract import retract
from stream.store.snapshot import snapshot
from tests.archive import T0, Row, archive, drive, dump, sums, write
from tests.stand_in import install
from tests.unit.test_backfill import DAY, day, fresh, is_sound

Make = Callable[..., Settings]
MONTH_END = datetime.date(2023, 12, 1)


@pytest.fixture
def plain(make_settings: Make) -> Settings:
    """Give settings that keep ids as given, with chunks of forty rows."""
    return make_settings({"privacy.plain_ids": True, "run.chunk_rows": 40})


@pytest.fixture
def store_path(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, plain: Settings) -> Path:
    """Give a store with the plan of two junctions, and the stand-in for a detector."""
    install(monkeypatch.setattr)
    return fresh(tmp_path / "s.duckdb", plain)


def take_back(path: Path, named: str) -> dict[str, Any]:
    """Retract a batch."""
    with Store.open(path) as store:
        return retract(store, named)


def parts(folder: Path, rows: list[Row], cuts: list[int]) -> list[Path]:
    """Write an archive as files cut at the given rows."""
    ordered = sorted(rows, key=lambda r: r[1])
    ends = enumerate(itertools.pairwise([0, *cuts, len(ordered)]))
    return [write(folder / f"{i}.csv", ordered[a:b]) for i, (a, b) in ends]


def test_newest_is_undone_exactly_back_to_the_first(
    store_path: Path, tmp_path: Path, plain: Settings
) -> None:
    """One after the other, from the last, each retraction gives the store as it was, table by table."""
    files = parts(tmp_path, archive(), [40, 60, 90])
    copies = [dump(store_path)]
    for file in files:
        ingest(store_path, [file], plain)
        copies.append(dump(store_path))
    ingest(store_path, [], plain, close=True)
    report = take_back(store_path, "close 5")
    assert (report["is_exact"], report["rows_in"]) == (True, 0)
    for file in reversed(files):
        assert copies.pop() == dump(store_path)
        assert take_back(store_path, file.name)["is_exact"]
        assert is_sound(store_path)
    assert copies == [dump(store_path)]


def test_other_content_of_the_name_can_follow(store_path: Path, tmp_path: Path, plain: Settings) -> None:
    """After a retraction the corrected delivery is taken in under the same name, as if it had come first."""
    ingest(store_path, [write(tmp_path / "1.csv", drive("a", 30))], plain)
    ingest(store_path, [write(tmp_path / "2.csv", drive("a", 30, T0 + 300))], plain)
    take_back(store_path, "2")
    ingest(store_path, [write(tmp_path / "2.csv", drive("a", 33, T0 + 310))], plain)
    other = fresh(tmp_path / "other.duckdb", plain)
    ingest(other, [tmp_path / "1.csv", tmp_path / "2.csv"], plain)
    assert dump(other) == dump(store_path)


def test_backfill_is_undone_exactly_whenever(store_path: Path, tmp_path: Path, plain: Settings) -> None:
    """A backfill leaves nothing behind, though batches in order came after it."""
    days = [write(tmp_path / f"{n}.csv", day(n)) for n in range(4)]
    ingest(store_path, [days[0], days[2]], plain)
    ingest(store_path, [days[1], days[3]], plain)
    assert take_back(store_path, "1.csv")["is_exact"]
    other = fresh(tmp_path / "other.duckdb", plain)
    ingest(other, [days[0], days[2], days[3]], plain)
    assert sums(other) == sums(store_path)
    assert is_sound(store_path)


def test_older_batch_loses_its_own_part(store_path: Path, tmp_path: Path, plain: Settings) -> None:
    """Without trips across the edges, what stays is what the others give by themselves."""
    days = [write(tmp_path / f"{n}.csv", day(n)) for n in range(3)]
    ingest(store_path, days, plain, close=True)
    report = take_back(store_path, "1.csv")
    assert [report[k] for k in ("is_exact", "edge_passages", "trips_cut_start", "trips_cut_end")] == [
        False,
        0,
        0,
        0,
    ]
    other = fresh(tmp_path / "other.duckdb", plain)
    ingest(other, [days[0], days[2]], plain, close=True)
    assert sums(other) == sums(store_path)
    assert is_sound(store_path)


@pytest.mark.parametrize("is_closed", [False, True])
def test_trips_across_an_older_batch_are_counted_and_stay_sound(
    store_path: Path, tmp_path: Path, plain: Settings, is_closed: bool
) -> None:
    """Time lost is booked as other, in trips that ended and in open ones; nothing is counted twice later."""
    rows = [*drive("a", 90), *drive("b", 90, T0 + 5), *drive("c", 20, T0 + 310)]
    files = parts(tmp_path, rows, [60, 140])
    ingest(store_path, files, plain, close=is_closed)
    before = dump(store_path)
    report = take_back(store_path, "1.csv")
    assert report["trips_cut_start"] == 2
    assert report["edge_passages"] >= 0
    assert is_sound(store_path)
    after = dump(store_path)
    assert {r[2:] for r in after["passage"]} < {r[2:] for r in before["passage"]}
    (again,) = ingest(store_path, files[1:2], plain)
    assert (again["is_backfill"], again["status"]) == (True, "taken in")
    ingest(store_path, [], plain, close=True)
    assert is_sound(store_path)


def test_vehicle_not_seen_later_goes_on_from_before(
    store_path: Path, tmp_path: Path, plain: Settings
) -> None:
    """Where no later batch has a vehicle, its state before the retracted batch counts again."""
    first, second = drive("a", 30), drive("a", 30, T0 + 300)
    files = [
        write(tmp_path / "1.csv", first),
        write(tmp_path / "2.csv", second),
        write(tmp_path / "3.csv", drive("b", 9, T0 + 700)),
    ]
    ingest(store_path, files, plain)
    take_back(store_path, "2.csv")
    other = fresh(tmp_path / "other.duckdb", plain)
    ingest(other, [files[0], files[2]], plain)
    assert sums(other) == sums(store_path)
    ingest(store_path, files[1:2], plain, close=True)
    ingest(other, files[1:2], plain, close=True)
    assert sums(other) == sums(store_path)


def test_unknown_batch_is_refused(store_path: Path, tmp_path: Path, plain: Settings) -> None:
    """The refusal names the newest batches there are."""
    with pytest.raises(StoreError, match="no batch x; none is in"):
        take_back(store_path, "x")
    ingest(store_path, [write(tmp_path / "1.csv", drive("a", 30))], plain)
    with pytest.raises(StoreError, match=r"no batch x; the newest are 1\.csv, `turntally status`"):
        take_back(store_path, "x")


def rolled(path: Path, before: datetime.date = MONTH_END) -> dict[str, Any]:
    """Compact a store."""
    with Store.open(path) as store:
        return compact(store, plan(store, before))


def test_compacted_store_keeps_every_sum(store_path: Path, tmp_path: Path, plain: Settings) -> None:
    """Sums over batches stay, rows get fewer, every delivery is still known, and the audit finds nothing."""
    days = [write(tmp_path / f"{n}.csv", day(n)) for n in range(5)]
    ingest(store_path, days[:2], plain, close=True)
    ingest(store_path, days[2:], plain)
    before = dump(store_path)
    report = rolled(store_path)
    assert sums(store_path)["histogram"] == sums_of(before)
    assert (report["n_batches"], [m["month"] for m in report["months"]]) == (5, ["2023-11"])
    assert report["histogram_rows"] * 2 < report["histogram_rows_before"]
    assert report["carry_rows"] == 2
    assert is_sound(store_path)
    after = dump(store_path)
    for table in ("passage", "section", "trip", "unfinished", "stratum", "tally", "span", "batch_count"):
        assert before[table] == after[table]
    assert [r["status"] for r in ingest(store_path, days, plain)] == ["already in"] * 5
    assert rolled(store_path)["n_batches"] == 0


def sums_of(whole: dict[str, list[tuple[Any, ...]]]) -> list[tuple[Any, ...]]:
    """Add the histograms of a dump up over its batches."""
    total: dict[tuple[Any, ...], int] = {}
    for _, *key, n in whole["histogram"]:
        total[tuple(key)] = total.get(tuple(key), 0) + n
    return sorted((*key, n) for key, n in total.items())


def test_compacted_batch_can_not_be_retracted(store_path: Path, tmp_path: Path, plain: Settings) -> None:
    """The way back is closed for old batches only: a newer one is undone exactly, also after compacting."""
    days = [write(tmp_path / f"{n}.csv", day(n)) for n in (0, 1, 20)]
    ingest(store_path, days[:2], plain)
    rolled(store_path)
    before = dump(store_path)
    ingest(store_path, days[2:], plain)
    assert rolled(store_path)["n_batches"] == 0
    with pytest.raises(StoreError, match=r"batch 0\.csv was rolled up by `turntally compact`"):
        take_back(store_path, "0.csv")
    assert take_back(store_path, "20.csv")["is_exact"]
    assert before == dump(store_path)
    write(days[0], day(0, rows=21))
    with pytest.raises(StoreError, match="rolled up and can't be retracted: give this delivery another name"):
        ingest(store_path, days[:1], plain)


def test_batch_undone_after_the_one_before_was_rolled_up(
    store_path: Path, tmp_path: Path, plain: Settings
) -> None:
    """Compacting keeps the states that later batches are undone with."""
    days = [write(tmp_path / f"{n}.csv", day(n)) for n in (0, 1, 20)]
    ingest(store_path, days, plain)
    rolled(store_path)
    take_back(store_path, "20.csv")
    other = fresh(tmp_path / "other.duckdb", plain)
    ingest(other, days[:2], plain)
    rolled(other)
    assert dump(other) == dump(store_path)


def test_month_grows_with_a_later_day(store_path: Path, tmp_path: Path, plain: Settings) -> None:
    """A month rolled up in part takes the rest in later; other months stay apart."""
    days = [write(tmp_path / f"{n:02}.csv", day(n)) for n in (0, 1, 2, 20)]
    ingest(store_path, days, plain)
    assert rolled(store_path, datetime.date(2023, 11, 15))["n_batches"] == 1
    assert rolled(store_path, datetime.date(2024, 1, 1))["months"] == [
        {"month": "2023-11", "n_batches": 3, "batch_id": 3},
        {"month": "2023-12", "n_batches": 1, "batch_id": 4},
    ]
    assert is_sound(store_path)


def test_snapshot_is_the_store_and_replaces_only_stores(
    store_path: Path, tmp_path: Path, plain: Settings
) -> None:
    """The copy holds every table; it goes over an older copy, never over the store or another file."""
    ingest(store_path, [write(tmp_path / "1.csv", day(1))], plain)
    to = tmp_path / "copy.duckdb"
    assert snapshot(store_path, to) == to.stat().st_size
    assert dump(to) == dump(store_path)
    ingest(store_path, [write(tmp_path / "2.csv", day(2))], plain)
    snapshot(store_path, to)
    assert dump(to) == dump(store_path)
    with pytest.raises(InputError, match="is the store itself"):
        snapshot(store_path, store_path)
    other = tmp_path / "notes.txt"
    other.write_text("mine")
    with pytest.raises(StoreError, match="is not a turntally store"):
        snapshot(store_path, other)
    assert other.read_text() == "mine"
    with pytest.raises(InputError, match="is missing; make it first"):
        snapshot(store_path, tmp_path / "gone" / "x.duckdb")
    with pytest.raises(StoreError, match="no such store"):
        snapshot(tmp_path / "none.duckdb", to)
    assert DAY == 86_400
