"""Batches: taken in as a whole or not at all, each ping once. Detection is the stand-in's."""

import itertools
from collections.abc import Callable
from pathlib import Path
from typing import Any

import duckdb
import pytest

from stream.config import Settings
from stream.errors import ConfigError, InputError, StoreError
from stream.ingest import Progress, ingest
from stream.store import Store, put_network
from stream.store.audit import run_audit
from stream.store.ledger import network_config
from stream.store.status import status
from tests.archive import T0, archive, drive, dump, sums, write
from tests.stand_in import install, plan

Make = Callable[..., Settings]


@pytest.fixture
def store_path(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, settings: Settings) -> Path:
    """Give a store with the plan of two junctions, and the stand-in for a detector."""
    install(monkeypatch.setattr)
    path = tmp_path / "store" / "s.duckdb"
    path.parent.mkdir()
    with Store.open(path, create=True) as store:
        put_network(store, plan(), network_config(settings))
    return path


def faults(path: Path) -> list[dict[str, Any]]:
    """Run the audit and give what it found."""
    with Store.open(path, read_only=True) as store:
        return [f for f in run_audit(store) if f["n_faults"]]


def test_one_batch_gives_the_rows_worked_out_by_hand(
    store_path: Path, tmp_path: Path, make_settings: Make
) -> None:
    """Ten pings 10 s apart are four passages of 10 s, two sections, one trip; no row is lost."""
    file = write(tmp_path / "day.csv", drive("bus", 10))
    settings = make_settings({"privacy.plain_ids": True})
    (report,) = ingest(store_path, [file], settings, close=True)
    wanted = {
        "batch": "day.csv",
        "status": "taken in",
        "rows_in": 10,
        "rows_used": 10,
        "rows_held": 0,
        "dropped": {},
        "n_vehicles": 1,
        "passages": 4,
        "sections": 2,
        "trips": 1,
        "unfinished": {},
        "is_closed": True,
    }
    assert wanted == {k: report[k] for k in wanted}
    with duckdb.connect(str(store_path), read_only=True) as con:
        passages = con.execute(
            "select vehicle, junction_id, arm_in, arm_out, epoch_us(entry_at), traversal_ms, delay_ms, "
            "gate_in_m, gate_out_m, way_in_id, way_out_id, maneuver, control, zone, day_type, time_band, "
            "reference_id from passage_full order by entry_at"
        ).fetchall()
        trip = con.execute(
            "select passage_us, section_us, unfinished_us, other_us, n_pings, end_reason, "
            "epoch_us(last_gate_at) - epoch_us(first_gate_at) from trip"
        ).fetchall()
        moment = con.execute("select tally, n, sum, sum_sq from moment order by all").fetchall()
    # 60 + 10 + 60 m at 36 km/h take 13 s; Helsinki is two hours ahead of UTC: night of a Wednesday.
    rest = (10_000, -3_000, 60.0, 60.0)
    labels = ("through", "signals", "east", "weekday", "night", 1)
    assert [
        ("bus", 1, 1, 0, T0 * 10**6, *rest, 71, 70, *labels),
        ("bus", 2, 0, 1, (T0 + 20) * 10**6, *rest, 70, 71, *labels),
        ("bus", 1, 1, 0, (T0 + 50) * 10**6, *rest, 71, 70, *labels),
        ("bus", 2, 0, 1, (T0 + 70) * 10**6, *rest, 70, 71, *labels),
    ] == passages
    assert trip == [(40 * 10**6, 20 * 10**6, 0, 20 * 10**6, 10, "close", 80 * 10**6)]
    # Four delays of -3 s; two sections of 250 m in 10 s are 40 s/km.
    assert moment == [
        ("angle", 4, -12_000, 36_000_000),
        ("maneuver", 4, -12_000, 36_000_000),
        ("movement", 2, -6_000, 18_000_000),
        ("movement", 2, -6_000, 18_000_000),
        ("section", 2, 80_000, 3_200_000_000),
    ]
    assert faults(store_path) == []


def test_same_delivery_again_changes_nothing(store_path: Path, tmp_path: Path, settings: Settings) -> None:
    """Content that is in is not taken in again, under its own name or another, and the report says so."""
    rows = drive("a", 12) + drive("b", 7)
    ingest(store_path, [write(tmp_path / "day.csv", rows)], settings)
    before = dump(store_path)
    again = ingest(store_path, [tmp_path / "day.csv"], settings)
    other = ingest(store_path, [write(tmp_path / "copy.csv", rows)], settings)
    assert [(r["batch"], r["batch_id"], r["status"]) for r in again] == [("day.csv", 1, "already in")]
    assert [(r["batch"], r["batch_id"], r["status"]) for r in other] == [("day.csv", 1, "already in")]
    assert before == dump(store_path)


def test_same_name_with_other_content_is_refused(
    store_path: Path, tmp_path: Path, settings: Settings
) -> None:
    """A name stands for one content; the refusal names two ways out."""
    ingest(store_path, [write(tmp_path / "day.csv", drive("a", 12))], settings)
    before = dump(store_path)
    write(tmp_path / "day.csv", drive("a", 13))
    with pytest.raises(StoreError, match=r"batch day\.csv is in with other content .*retract.*--batch"):
        ingest(store_path, [tmp_path / "day.csv"], settings)
    assert before == dump(store_path)


def test_days_one_by_one_equal_all_at_once(store_path: Path, tmp_path: Path, settings: Settings) -> None:
    """Cut anywhere into batches, an archive gives the same rows and the same sums."""
    rows = sorted(archive(), key=lambda r: r[1])
    whole = tmp_path / "whole" / "s.duckdb"
    whole.parent.mkdir()
    with Store.open(whole, create=True) as store:
        put_network(store, plan(), network_config(settings))
    (tmp_path / "s.duckdb.key").write_text("5" * 64)
    keyed = settings.model_copy(
        update={"privacy": settings.privacy.model_copy(update={"key_file": tmp_path / "s.duckdb.key"})}
    )
    ingest(whole, [write(tmp_path / "all.csv", rows)], keyed, close=True)
    cuts = [0, 1, 37, 38, 90, len(rows)]
    parts = enumerate(itertools.pairwise(cuts))
    files = [write(tmp_path / f"{i}.csv", rows[a:b]) for i, (a, b) in parts]
    reports = ingest(store_path, files[:3], keyed) + ingest(store_path, files[3:], keyed, close=True)
    assert [f.name for f in files] == [r["batch"] for r in reports]
    assert sums(whole) == sums(store_path)
    assert faults(store_path) == []
    assert faults(whole) == []


@pytest.mark.parametrize("chunk_rows", [1, 7, 50])
def test_chunk_size_does_not_matter(
    store_path: Path, tmp_path: Path, make_settings: Make, chunk_rows: int
) -> None:
    """Chunks of any size give the same store."""
    file = write(tmp_path / "day.csv", archive())
    plain = {"privacy.plain_ids": True}
    ingest(store_path, [file], make_settings({**plain, "run.chunk_rows": chunk_rows}))
    other = tmp_path / "other.duckdb"
    with Store.open(other, create=True) as store:
        put_network(store, plan(), network_config(make_settings()))
    ingest(other, [file], make_settings(plain))
    assert dump(other) == dump(store_path)


def test_files_are_batches_in_name_order(store_path: Path, tmp_path: Path, settings: Settings) -> None:
    """Several files are one batch each, in the order of their names; under one name they are one batch."""
    folder = tmp_path / "in"
    folder.mkdir()
    write(folder / "b.csv", drive("a", 5, T0 + 100))
    write(folder / "a.csv", drive("a", 5))
    reports = ingest(store_path, [folder], settings)
    assert [(r["batch"], r["batch_id"]) for r in reports] == [("a.csv", 1), ("b.csv", 2)]
    write(folder / "c.csv", drive("a", 5, T0 + 200))
    write(folder / "d.csv", drive("a", 5, T0 + 300))
    (report,) = ingest(store_path, [folder / "c.csv", folder / "d.csv"], settings, batch_name="late shift")
    assert (report["batch"], report["batch_id"], report["rows_in"]) == ("late shift", 3, 10)


def test_rows_are_accounted_for_over_batches(store_path: Path, tmp_path: Path, settings: Settings) -> None:
    """Rows in and held before equal rows used, dropped and held after; bad rows are counted by reason."""
    rows = sorted(archive(), key=lambda r: r[1])
    (first,) = ingest(store_path, [write(tmp_path / "1.csv", rows[:60])], settings)
    (second,) = ingest(store_path, [write(tmp_path / "2.csv", rows[60:])], settings)
    (closing,) = ingest(store_path, [], settings, close=True)
    assert first["rows_used"] + first["rows_dropped"] + first["rows_held"] == 60
    assert first["rows_held"] == 3  # the stand-in holds the newest ping of a, b and c
    assert len(rows) - 60 == second["rows_used"] + second["rows_dropped"] + second["rows_held"]
    assert (closing["rows_in"], closing["rows_used"], closing["rows_held"]) == (0, 3, -3)
    dropped = {
        k: first["dropped"].get(k, 0) + second["dropped"].get(k, 0) for k in ("duplicate", "outside_area")
    }
    assert dropped == {"duplicate": 1, "outside_area": 2}
    assert faults(store_path) == []
    with Store.open(store_path, read_only=True) as store:
        got = status(store)
    assert (len(rows), len(rows) - 3, 3, 0) == tuple(
        got[k] for k in ("rows_in", "rows_used", "rows_dropped", "rows_held")
    )
    assert (got["n_batches"], got["open_trips"], got["open_passages"], got["n_vehicles"]) == (3, 0, 0, 4)


def test_closing_ends_what_is_open_once(store_path: Path, tmp_path: Path, settings: Settings) -> None:
    """A batch that only closes ends open trips and passages; a second one finds nothing open."""
    ingest(store_path, [write(tmp_path / "day.csv", drive("a", 8) + drive("b", 6))], settings)
    with Store.open(store_path, read_only=True) as store:
        assert status(store)["open_trips"] == 2
    (report,) = ingest(store_path, [], settings, close=True)
    # Ping number 7 of a enters junction 2, and number 5 of b junction 1.
    assert (report["status"], report["unfinished"], report["trips"]) == ("closed", {"close": 2}, 2)
    (again,) = ingest(store_path, [], settings, close=True)
    assert again["status"] == "nothing open"
    assert faults(store_path) == []


def test_progress_is_told_after_each_chunk(store_path: Path, tmp_path: Path, make_settings: Make) -> None:
    """The caller hears of every chunk: rows so far, which batch, how much of the source."""
    told: list[Progress] = []
    files = [write(tmp_path / f"{i}.csv", drive("a", 25, T0 + 1000 * i)) for i in (1, 2)]
    ingest(store_path, files, make_settings({"run.chunk_rows": 10}), progress=told.append)
    assert sorted({(p.batch, p.batch_ix, p.n_batches) for p in told}) == [("1.csv", 0, 2), ("2.csv", 1, 2)]
    assert [p.rows for p in told if p.batch_ix == 0] == [10, 20, 25]
    assert told[-1].done == told[-1].total > 0


def _listing(folder: Path) -> list[str]:
    return sorted(p.name for p in folder.iterdir())


def test_pings_elsewhere_are_refused(store_path: Path, tmp_path: Path, settings: Settings) -> None:
    """A delivery without a ping inside the network leaves nothing behind, not even a key."""
    before, names = dump(store_path), _listing(store_path.parent)
    rows = [("a", T0 + i, 25.0, 60.0) for i in range(30)]
    with pytest.raises(
        InputError, match=r"far\.csv: none of its 30 rows lies inside the network .*lon 25\.0000"
    ):
        ingest(store_path, [write(tmp_path / "far.csv", rows)], settings)
    assert before == dump(store_path)
    assert names == _listing(store_path.parent)


def test_swapped_coordinates_are_told(tmp_path: Path, store_path: Path, settings: Settings) -> None:
    """Where swapping longitude and latitude would put the pings inside, the refusal says how."""
    with duckdb.connect(str(store_path)) as con:
        con.execute("update network set min_lon = 20, max_lon = 30, min_lat = 55, max_lat = 65").fetchall()
    rows = [("a", T0 + i, 60.0, 25.0) for i in range(30)]
    with pytest.raises(
        InputError, match=r"swapped they would: set source\.columns\.lon to lat and .*lat to lon"
    ):
        ingest(store_path, [write(tmp_path / "turned.csv", rows)], settings)


def test_rows_in_no_order_are_refused_with_the_key(
    store_path: Path, tmp_path: Path, settings: Settings
) -> None:
    """More than a fifth of late rows is a wrong order, and the refusal names source.order; a fifth is not."""
    before = dump(store_path)
    late = [("a", T0 - i, 0.5, 0.5) for i in range(1, 6)]
    mixed = write(tmp_path / "mixed.csv", drive("a", 19) + late, is_sorted=False)
    with pytest.raises(
        InputError, match=r"mixed\.csv: 5 of 24 rows are older .*set source\.order to unsorted"
    ):
        ingest(store_path, [mixed], settings)
    assert before == dump(store_path)
    (report,) = ingest(
        store_path, [write(tmp_path / "fair.csv", drive("a", 20) + late, is_sorted=False)], settings
    )
    assert report["dropped"] == {"late": 5}


def test_changed_configuration_is_refused(store_path: Path, tmp_path: Path, make_settings: Make) -> None:
    """A key that changes results can't change between batches; the refusal names it with both values."""
    ingest(store_path, [write(tmp_path / "1.csv", drive("a", 10))], make_settings())
    file = write(tmp_path / "2.csv", drive("a", 10, T0 + 200))
    with pytest.raises(StoreError, match=r"trips\.max_gap_s: 120\.0 -> 60\.0"):
        ingest(store_path, [file], make_settings({"trips.max_gap_s": 60}))
    (report,) = ingest(store_path, [file], make_settings({"run.chunk_rows": 3, "source.order": "vehicle"}))
    assert report["status"] == "taken in"


def test_network_of_another_configuration_is_refused(
    store_path: Path, tmp_path: Path, make_settings: Make
) -> None:
    """Gates and clusters are the network's: a configuration that would build others is refused."""
    file = write(tmp_path / "1.csv", drive("a", 10))
    with pytest.raises(StoreError, match=r"gates\.exit_m"):
        ingest(store_path, [file], make_settings({"gates.exit_m": 35}))


def test_bad_second_file_leaves_the_first_in(store_path: Path, tmp_path: Path, settings: Settings) -> None:
    """Each file is a batch of its own: what came before a bad one stays, of the bad one nothing does."""
    good = write(tmp_path / "1.csv", drive("a", 10))
    bad = write(tmp_path / "2.csv", [("a", T0 + 200 + i, 0.5, -5.0) for i in range(10)])
    with pytest.raises(InputError, match=r"2\.csv"):
        ingest(store_path, [good, bad], settings)
    with Store.open(store_path, read_only=True) as store:
        assert [b["batch"] for b in status(store)["batches"]] == ["1.csv"]
    assert faults(store_path) == []


def test_missing_file_is_refused_before_anything_is_read(
    store_path: Path, tmp_path: Path, settings: Settings
) -> None:
    """A file that is not there stops the call, and no other file of it was taken in."""
    good = write(tmp_path / "1.csv", drive("a", 10))
    with pytest.raises(InputError, match=r"gone\.csv"):
        ingest(store_path, [good, tmp_path / "gone.csv"], settings)
    with Store.open(store_path, read_only=True) as store:
        assert status(store)["n_batches"] == 0


def test_file_named_twice_is_refused(store_path: Path, tmp_path: Path, settings: Settings) -> None:
    """One file can't be two batches of a call, or count twice in one."""
    file = write(tmp_path / "1.csv", drive("a", 10))
    with pytest.raises(InputError, match="is named twice"):
        ingest(store_path, [file, file], settings)


def test_files_of_one_name_in_two_folders_are_two_batches(
    store_path: Path, tmp_path: Path, settings: Settings
) -> None:
    """Parts that are called alike are told apart by their folders."""
    for day in (1, 2):
        (tmp_path / f"day={day}").mkdir()
        write(tmp_path / f"day={day}" / "part.csv", drive("a", 10, T0 + day * 200))
    reports = ingest(store_path, [tmp_path / "day=1" / "part.csv", tmp_path / "day=2" / "part.csv"], settings)
    assert [r["batch"] for r in reports] == ["day=1/part.csv", "day=2/part.csv"]


def test_nothing_named_is_wrong_usage(store_path: Path, settings: Settings) -> None:
    """Without files and without closing there is nothing to do."""
    with pytest.raises(ConfigError, match="no file to take in"):
        ingest(store_path, [], settings)


def test_store_without_network_is_refused(
    tmp_path: Path, settings: Settings, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Pings need streets first."""
    install(monkeypatch.setattr)
    Store.open(tmp_path / "bare.duckdb", create=True).close()
    with pytest.raises(StoreError, match="holds no network; run `turntally network EXTRACT` first"):
        ingest(tmp_path / "bare.duckdb", [write(tmp_path / "1.csv", drive("a", 3))], settings)


def test_vehicle_names_hide_the_ids(store_path: Path, tmp_path: Path, settings: Settings) -> None:
    """Ids as given stand nowhere in the store; the same vehicle has the same name in each batch."""
    ingest(store_path, [write(tmp_path / "1.csv", drive("number plate", 10))], settings)
    ingest(store_path, [write(tmp_path / "2.csv", drive("number plate", 10, T0 + 100))], settings)
    assert b"number plate" not in store_path.read_bytes()
    assert len({row[0] for row in dump(store_path, by_batch=False)["passage"]}) == 1
    assert _listing(store_path.parent) == ["s.duckdb", "s.duckdb.key"]


def test_another_network_is_refused_once_batches_are_in(
    store_path: Path, tmp_path: Path, settings: Settings
) -> None:
    """A network may be replaced until the first batch; then only the same one is taken."""
    with Store.open(store_path) as store:
        put_network(store, plan("another"), network_config(settings))
        put_network(store, plan(), network_config(settings))
    ingest(store_path, [write(tmp_path / "1.csv", drive("a", 10))], settings)
    before = dump(store_path)
    with Store.open(store_path) as store:
        put_network(store, plan(), network_config(settings))
        with pytest.raises(
            StoreError, match="holds 1 batches on network two junctions, the one given is anot"
        ):
            put_network(store, plan("another"), network_config(settings))
    assert dump(store_path) == before
