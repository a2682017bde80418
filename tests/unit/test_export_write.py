"""Exports: columns, units, files that are whole, and what is held back."""

import csv
import json
import stat
from collections.abc import Iterator
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import polars as pl
import pyarrow.parquet as pq
import pytest

from stream.config import Settings, load_settings
from stream.errors import ConfigError, InputError, StoreError
from stream.export import export_table, write
from stream.export.columns import known_columns
from stream.export.tables import TABLES
from stream.network import Built, build_network
from stream.store import Store
from stream.tally import bin_of
from tests.filled import START_US, fill, found_at_random

# DESIGN.md section 9, in this order; more may follow them.
PASSAGES = [
    "vehicle",
    "trip_id",
    "junction_id",
    "arm_in",
    "arm_out",
    "way_in_id",
    "way_out_id",
    "entry_at",
    "exit_at",
    "traversal_ms",
    "delay_ms",
    "turn_deg",
    "maneuver",
    "class_in",
    "class_out",
    "control",
    "zone",
    "driving_side",
    "gate_in_m",
    "gate_out_m",
    "n_pings",
    "max_step_ms",
    "slow_ms",
    "entry_speed_mps",
    "is_queued_at_gate",
    "is_banned",
    "timing_error_ms",
    "reference_id",
    "batch_id",
]
ARMS = [
    "junction_id",
    "arm",
    "way_id",
    "mouth_node_id",
    "bearing_deg",
    "is_inbound",
    "is_outbound",
    "class",
    "limit_kmh",
    "link_m",
    "entry_gate_m",
    "exit_gate_m",
    "entry_lon1",
    "entry_lat1",
    "entry_lon2",
    "entry_lat2",
    "exit_lon1",
    "exit_lat1",
    "exit_lon2",
    "exit_lat2",
]
SEED = 7


def over(**privacy: Any) -> Settings:
    """Give settings with other keys under privacy."""
    return load_settings(over={"privacy": privacy})


PLAIN = over(plain_ids=True)
HELD = over()


@pytest.fixture(scope="module")
def built(town_osm: Path) -> Built:
    """Give the tiny town."""
    return build_network(town_osm, None, PLAIN)


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory, built: Built) -> Iterator[Store]:
    """Give a store with 800 passages of 30 vehicles."""
    with Store.open(tmp_path_factory.mktemp("export") / "s.duckdb", create=True) as one:
        fill(one, built, PLAIN, found_at_random(built, 800, 30, SEED))
        yield one


@pytest.fixture(params=[".parquet", ".csv"])
def ending(request: pytest.FixtureRequest) -> str:
    """Give each ending in turn."""
    return str(request.param)


def read(path: Path) -> pl.DataFrame:
    """Read an export back with another reader than the writer's."""
    return pl.read_parquet(path) if path.suffix == ".parquet" else pl.read_csv(path, infer_schema_length=None)


@pytest.mark.parametrize("what", TABLES)
def test_every_table_comes_in_both_forms(what: str, ending: str, store: Store, tmp_path: Path) -> None:
    """Rows written are rows read, keys are unique, and every column is explained beside the file."""
    to = tmp_path / f"x{ending}"
    n = write(store, what, to, PLAIN)
    got = read(to)
    assert got.height == n > 0
    key = list(TABLES[what].key)
    assert not got.select(key).is_duplicated().any()
    told = json.loads((tmp_path / f"x{ending}.schema.json").read_text(encoding="utf-8"))
    assert [f["name"] for f in told["fields"]] == got.columns
    assert told["primaryKey"] == key
    assert told["rows"] == n
    assert all(f["description"] for f in told["fields"])
    assert sorted(p.name for p in tmp_path.iterdir()) == [to.name, f"{to.name}.schema.json"]


@pytest.mark.parametrize(("what", "columns"), [("passages", PASSAGES), ("arms", ARMS)])
def test_promised_columns_come_first(
    what: str, columns: list[str], ending: str, store: Store, tmp_path: Path
) -> None:
    """Outside programs find the columns of DESIGN.md section 9, in that order."""
    write(store, what, tmp_path / f"x{ending}", PLAIN)
    assert read(tmp_path / f"x{ending}").columns[: len(columns)] == columns


def test_no_column_goes_unexplained(store: Store, tmp_path: Path) -> None:
    """The dictionary has an entry for each column that leaves, and none for others."""
    used = set()
    for what in TABLES:
        write(store, what, tmp_path / f"{what}.parquet", PLAIN)
        used |= set(pq.read_schema(tmp_path / f"{what}.parquet").names)
    assert used == set(known_columns())


def test_types_of_the_schema_are_those_of_the_standard(store: Store, tmp_path: Path) -> None:
    """Field types are names of the Table Schema standard, and fit the columns."""
    write(store, "passages", tmp_path / "p.parquet", PLAIN)
    told = json.loads((tmp_path / "p.parquet.schema.json").read_text(encoding="utf-8"))
    kinds = {f["name"]: (f["type"], f.get("unit")) for f in told["fields"]}
    assert kinds["vehicle"] == ("string", None)
    assert kinds["entry_at"] == ("datetime", None)
    assert kinds["delay_ms"] == ("integer", "ms")
    assert kinds["gate_in_m"] == ("number", "m")
    assert kinds["turn_deg"] == ("number", "degree")
    assert kinds["entry_speed_mps"] == ("number", "m/s")
    assert kinds["is_banned"] == ("boolean", None)


def test_times_are_utc_microseconds(store: Store, built: Built, tmp_path: Path) -> None:
    """Parquet says UTC, CSV ends in Z (RFC 3339), and both hold the microsecond that was stored."""
    for ending in (".parquet", ".csv"):
        write(store, "passages", tmp_path / f"p{ending}", PLAIN)
    kind = pq.read_schema(tmp_path / "p.parquet").field("entry_at").type
    assert str(kind) == "timestamp[us, tz=UTC]"
    found = found_at_random(built, 800, 30, SEED).passages
    wanted = sorted(int(t) for t in found["exit_us"])
    got = pl.read_parquet(tmp_path / "p.parquet")["exit_at"].dt.epoch("us").to_list()
    assert sorted(got) == wanted
    with (tmp_path / "p.csv").open(encoding="utf-8", newline="") as file:
        text = [row["exit_at"] for row in csv.DictReader(file)]
    assert all(t.endswith("Z") for t in text)
    epoch = datetime(1970, 1, 1, tzinfo=UTC)
    told = sorted((datetime.fromisoformat(t) - epoch) // (datetime.resolution) for t in text)
    assert told == wanted
    assert wanted[0] >= START_US


def test_both_forms_hold_the_same(store: Store, tmp_path: Path) -> None:
    """CSV and Parquet of one table have the same values, empty text and null told apart."""
    for what in ("movements", "histogram", "links"):
        for ending in (".parquet", ".csv"):
            write(store, what, tmp_path / f"{what}{ending}", PLAIN)
        left = pl.read_parquet(tmp_path / f"{what}.parquet")
        right = pl.read_csv(tmp_path / f"{what}.csv", schema=left.schema)
        assert left.equals(right)


def test_parquet_says_units_and_digest(store: Store, built: Built, tmp_path: Path) -> None:
    """Units stand with the columns, network and reference with the file."""
    write(store, "passages", tmp_path / "p.parquet", PLAIN)
    schema = pq.read_schema(tmp_path / "p.parquet")
    assert schema.field("delay_ms").metadata[b"unit"] == b"ms"
    assert schema.metadata[b"turntally.network_digest"].decode() == built.digest
    assert schema.metadata[b"turntally.reference_ids"] == b"1"
    assert json.loads(schema.metadata[b"turntally.units"])["turn_deg"] == "degree"


def test_osm_is_credited_unless_the_network_is_not_from_there(
    town_osm: Path, tmp_path: Path, fresh_store: Store
) -> None:
    """Streets with OSM ids carry the credit that ODbL asks for; those that are said to be invented do not."""
    built = build_network(town_osm, None, PLAIN)
    fill(fresh_store, built, PLAIN, found_at_random(built, 5, 2, 1))
    write(fresh_store, "arms", tmp_path / "a.parquet", PLAIN)
    told = json.loads((tmp_path / "a.parquet.schema.json").read_text(encoding="utf-8"))
    assert told["attribution"] == "© OpenStreetMap contributors"
    fresh_store.put_meta("network_source", "invented")
    write(fresh_store, "arms", tmp_path / "a.parquet", PLAIN)
    told = json.loads((tmp_path / "a.parquet.schema.json").read_text(encoding="utf-8"))
    assert "attribution" not in told
    assert b"attribution" not in pq.read_schema(tmp_path / "a.parquet").metadata


def test_histogram_adds_up_to_the_passages(store: Store, tmp_path: Path) -> None:
    """Recounted from the exported passages, each bin of the movement tally holds what was exported."""
    write(store, "passages", tmp_path / "p.parquet", PLAIN)
    write(store, "histogram", tmp_path / "h.parquet", PLAIN)
    key = ["junction_id", "arm_in", "arm_out"]
    passages = pl.read_parquet(tmp_path / "p.parquet")
    bins = pl.Series("bin_ix", bin_of(passages["delay_ms"].to_numpy()))
    wanted = passages.with_columns(bins).group_by(*key, "bin_ix").len("n")
    got = pl.read_parquet(tmp_path / "h.parquet").filter(tally="movement").select(*key, "bin_ix", "n")
    assert set(got.iter_rows()) == set(wanted.select(*key, "bin_ix", "n").iter_rows())


def test_histogram_edges_hold_the_values(store: Store, tmp_path: Path) -> None:
    """Lower and upper edges enclose the bin, half-open."""
    write(store, "histogram", tmp_path / "h.parquet", PLAIN)
    got = pl.read_parquet(tmp_path / "h.parquet")
    assert (bin_of(got["lower_ms"].to_numpy()) == got["bin_ix"].to_numpy()).all()
    assert (bin_of(got["upper_ms"].to_numpy()) == got["bin_ix"].to_numpy() + 1).all()


def test_passages_of_thin_movements_are_held_back_and_counted(store: Store, tmp_path: Path) -> None:
    """With hashed ids, passages leave only by movements with 10 passages and 5 vehicles."""
    write(store, "passages", tmp_path / "all.parquet", PLAIN)
    whole = pl.read_parquet(tmp_path / "all.parquet")
    told = export_table(store, "passages", tmp_path / "p.parquet", HELD)
    got = pl.read_parquet(tmp_path / "p.parquet")
    key = ["junction_id", "arm_in", "arm_out"]
    sizes = whole.group_by(key).agg(pl.len().alias("n"), pl.col("vehicle").n_unique().alias("vehicles"))
    wide = sizes.filter((pl.col("n") >= 10) & (pl.col("vehicles") >= 5))
    assert got.equals(whole.join(wide.select(key), on=key, how="semi", maintain_order="left"))
    assert told.withheld.n_strata == sizes.height - wide.height > 0
    assert told.withheld.n_rows == whole.height - got.height > 0
    beside = json.loads(told.dictionary.read_text(encoding="utf-8"))
    assert beside["withheld"] == {"strata": told.withheld.n_strata, "passages": told.withheld.n_rows}


def test_movements_that_are_thin_keep_their_figures(store: Store, tmp_path: Path) -> None:
    """A movement below the limits, one without passages included, is listed with null figures."""
    write(store, "movements", tmp_path / "m.parquet", HELD)
    got = pl.read_parquet(tmp_path / "m.parquet")
    figures = ["n_passages", "n_vehicles", "total_delay_ms", "mean_delay_ms", "p50_delay_ms", "p85_delay_ms"]
    held = got.filter("is_withheld")
    assert held.height > 0
    assert held.select(figures).null_count().row(0) == (held.height,) * len(figures)
    open_ones = got.filter(~pl.col("is_withheld"))
    assert open_ones["n_passages"].min() >= 10
    assert open_ones["n_vehicles"].min() >= 5


def test_histograms_of_thin_strata_are_held_back(store: Store, tmp_path: Path) -> None:
    """Strata below the limits leave no bin behind, in tallies of delays and of paces."""
    told = export_table(store, "histogram", tmp_path / "h.parquet", HELD)
    got = pl.read_parquet(tmp_path / "h.parquet")
    sizes = got.group_by("tally", "stratum_id").agg(pl.col("n").sum())
    assert sizes["n"].min() >= 10
    assert set(sizes["tally"]) == {"maneuver", "angle", "movement", "section"}
    assert told.withheld.n_strata > 0
    strict = export_table(store, "histogram", tmp_path / "h.parquet", over(min_vehicles=31))
    assert strict.n_rows == 0  # there are 30 vehicles in all


def test_limits_can_be_lifted_by_setting_them_to_zero(store: Store, tmp_path: Path) -> None:
    """Limits of 0 hold nothing back, hashed ids or not."""
    told = export_table(store, "passages", tmp_path / "p.parquet", over(min_passages=0, min_vehicles=0))
    assert (told.n_rows, told.withheld.n_rows) == (800, 0)


def test_rows_come_in_the_order_of_their_key(store: Store, tmp_path: Path) -> None:
    """An export is sorted, so that the same store gives the same file."""
    for what, table in TABLES.items():
        write(store, what, tmp_path / "x.parquet", PLAIN)
        got = pl.read_parquet(tmp_path / "x.parquet")
        assert got.select(table.key).equals(got.select(table.key).sort(table.key))


def test_same_store_gives_the_same_bytes(store: Store, ending: str, tmp_path: Path) -> None:
    """Two exports of one store are equal to the byte."""
    for name in ("a", "b"):
        write(store, "passages", tmp_path / f"{name}{ending}", PLAIN)
    assert (tmp_path / f"a{ending}").read_bytes() == (tmp_path / f"b{ending}").read_bytes()


def test_table_without_rows_is_a_file_with_columns(
    fresh_store: Store, built: Built, ending: str, tmp_path: Path
) -> None:
    """A store without passages exports none, and still says which columns there are."""
    fill(fresh_store, built, PLAIN, found_at_random(built, 0, 1, 1))
    for what in ("passages", "histogram"):
        assert write(fresh_store, what, tmp_path / f"x{ending}", PLAIN) == 0
        got = read(tmp_path / f"x{ending}")
        assert (got.height, len(got.columns) > 10) == (0, True)


@pytest.mark.parametrize("name", ["x.xlsx", "x", "x.parquet.gz"])
def test_other_endings_are_refused(name: str, store: Store, tmp_path: Path) -> None:
    """Only .parquet and .csv are written, and nothing is left behind."""
    with pytest.raises(InputError, match=r"ends in \.parquet or \.csv"):
        write(store, "arms", tmp_path / name, PLAIN)
    assert list(tmp_path.iterdir()) == []


def test_missing_folder_is_refused(store: Store, tmp_path: Path) -> None:
    """A folder that is not there is not made in silence."""
    with pytest.raises(InputError, match=r"folder .* is missing"):
        write(store, "arms", tmp_path / "no" / "x.csv", PLAIN)


def test_folder_of_that_name_is_refused(store: Store, tmp_path: Path) -> None:
    """A folder is no file."""
    (tmp_path / "x.csv").mkdir()
    with pytest.raises(InputError, match="is a folder"):
        write(store, "arms", tmp_path / "x.csv", PLAIN)


def test_unknown_table_names_the_nearest(store: Store, tmp_path: Path) -> None:
    """A slip of the pen gets the nearest table."""
    with pytest.raises(ConfigError, match="did you mean passages"):
        write(store, "passage", tmp_path / "x.csv", PLAIN)


def test_store_without_network_says_what_to_run(fresh_store: Store, tmp_path: Path) -> None:
    """Before the network is built there is nothing to export."""
    with pytest.raises(StoreError, match="turntally network"):
        write(fresh_store, "arms", tmp_path / "x.csv", PLAIN)


def test_failed_export_leaves_the_old_file(
    store: Store, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Broken off half-way, an export leaves what stood there before, and no temporary file."""
    to = tmp_path / "x.csv"
    to.write_text("old", encoding="utf-8")

    def full(*_: Any, **__: Any) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(pl.DataFrame, "write_csv", full)
    with pytest.raises(InputError, match="No space left on device"):
        write(store, "arms", to, PLAIN)
    assert to.read_text(encoding="utf-8") == "old"
    assert [p.name for p in tmp_path.iterdir()] == ["x.csv"]


def test_file_is_replaced_when_written_again(store: Store, tmp_path: Path) -> None:
    """A second export replaces the first."""
    to = tmp_path / "x.csv"
    to.write_text("old", encoding="utf-8")
    write(store, "junctions", to, PLAIN)
    assert to.read_text(encoding="utf-8").startswith("junction_id,")
    assert stat.S_ISREG(to.stat().st_mode)


def test_rows_come_in_bounded_batches(store: Store) -> None:
    """A query is read piece by piece: first its columns alone, then no more rows at once than asked for."""
    params = {"min_passages": 0, "min_vehicles": 0}
    sizes = [b.num_rows for b in store.batches("export/passages", params, batch_rows=300)]
    assert sizes[0] == 0
    assert sum(sizes) == 800
    assert len(sizes) >= 3
    assert max(sizes) <= 2048  # DuckDB's own unit


def test_lack_of_memory_is_told_as_such(built: Built, tmp_path: Path) -> None:
    """An export that can't sort in the memory allowed names the key to raise, and leaves no file."""
    path = tmp_path / "s.duckdb"
    with Store.open(path, create=True) as one:
        fill(one, built, PLAIN, found_at_random(built, 60_000, 900, SEED))
    with Store.open(path, read_only=True, memory_mb=12, threads=1) as one:
        one._con.execute("set max_temp_directory_size = '1MB'")
        with pytest.raises(StoreError, match=r"run\.memory_mb"):
            write(one, "passages", tmp_path / "p.parquet", PLAIN)
    assert list(tmp_path.glob("*parquet*")) == []
