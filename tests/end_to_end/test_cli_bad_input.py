"""What bad input gets: one clear error (what, where, mend), exit 1, nothing written."""

import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import polars as pl
import pytest

from tests.command import done, done_json, refused, turntally
from tests.drives import HEADS, Row, crossings, write_csv

STORE = "turntally.duckdb"


@pytest.fixture(scope="module")
def town_store(town_osm: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Give a store that holds the network of the tiny town."""
    home = tmp_path_factory.mktemp("town_store")
    done("network", town_osm, cwd=home)
    return home / STORE


@pytest.fixture
def here(town_store: Path, tmp_path: Path) -> Path:
    """Give a folder with a copy of that store."""
    shutil.copy(town_store, tmp_path / STORE)
    return tmp_path


@pytest.fixture
def refuse(here: Path) -> Callable[..., str]:
    """Give a command that must be refused and change nothing."""

    def seen() -> tuple[dict[str, Any], list[str]]:
        whole = done_json("status", cwd=here)
        del whole["size_bytes"]
        return whole, sorted(path.name for path in here.iterdir())

    def run(*args: object) -> str:
        before = seen()
        message = refused(*args, cwd=here)
        assert seen() == before
        return message

    return run


def test_missing_file_is_named(refuse: Callable[..., str]) -> None:
    """A file that is not there is named."""
    assert "no_such_file.csv" in refuse("ingest", "no_such_file.csv")


def test_wrong_column_names_those_there_are(here: Path, refuse: Callable[..., str]) -> None:
    """A missing column is named with those there are and the key that mends it."""
    write_csv(here / "pings.csv", crossings(2), ("unit", "ts", "lon", "lat"))
    message = refuse("ingest", "pings.csv")
    for part in ("pings.csv", "vehicle_id", "unit", "source.columns.vehicle"):
        assert part in message


def test_seconds_declared_as_milliseconds_are_refused(here: Path, refuse: Callable[..., str]) -> None:
    """Times that a wrong unit puts before GPS began (1980-01-06, IS-GPS-200) are refused with the key."""
    write_csv(here / "pings.csv", crossings(2))
    (here / "turntally.yaml").write_text("source: {time_unit: ms}\n", encoding="utf-8")
    message = refuse("ingest", "pings.csv")
    for part in ("pings.csv", "before GPS began", "1970-01", "source.time_unit"):
        assert part in message


@pytest.mark.parametrize("command", ["status", "audit", "quantiles"])
def test_unknown_key_is_refused_by_commands_that_only_look(here: Path, command: str) -> None:
    """A configuration with a wrong key is refused whatever the command, with the nearest known key."""
    (here / "bad.yaml").write_text("source: {colums: {}}\n", encoding="utf-8")
    ran = turntally("--config", "bad.yaml", command, cwd=here)
    assert ran.returncode == 2
    assert "source.colums; did you mean columns?" in ran.stderr


def test_time_unreadable_throughout_is_refused(here: Path, refuse: Callable[..., str]) -> None:
    """A file without one readable time is refused with the value and the key that mends it."""
    rows = [(v, "yesterday", lon, lat) for v, _, lon, lat in crossings(2)]
    write_csv(here / "pings.csv", rows)
    message = refuse("ingest", "pings.csv")
    for part in ("pings.csv", "yesterday", "source.time_unit"):
        assert part in message


def test_swapped_coordinates_are_told_as_such(here: Path, refuse: Callable[..., str]) -> None:
    """Latitude in the place of longitude is recognized, not only found to lie elsewhere."""
    write_csv(here / "pings.csv", crossings(2), ("vehicle_id", "ts", "lat", "lon"))
    message = refuse("ingest", "pings.csv")
    for part in ("pings.csv", "swapped", "source.columns.lon", "source.columns.lat"):
        assert part in message


def test_no_ping_inside_tells_both_places(here: Path, refuse: Callable[..., str]) -> None:
    """Pings of another region are refused with where they lie and what the network spans."""
    write_csv(here / "pings.csv", [(v, t, lon + 7.5, lat - 3.25) for v, t, lon, lat in crossings(2)])
    message = refuse("ingest", "pings.csv")
    for part in ("pings.csv", "17.5", "46.7", "turntally network"):
        assert part in message


@pytest.mark.parametrize("keep", [0, 4, 200], ids=["empty", "only the mark", "cut short"])
def test_broken_parquet_is_refused(keep: int, here: Path, refuse: Callable[..., str]) -> None:
    """A Parquet file cut anywhere is refused by name."""
    rows = pl.DataFrame(crossings(20), schema=HEADS, orient="row")
    rows.write_parquet(here / "whole.parquet")
    (here / "pings.parquet").write_bytes((here / "whole.parquet").read_bytes()[:keep])
    assert "pings.parquet" in refuse("ingest", "pings.parquet")


def test_second_file_broken_keeps_the_first(here: Path) -> None:
    """A batch that was committed stays when a later one of the same call is refused."""
    write_csv(here / "a.csv", crossings(2))
    (here / "b.parquet").write_bytes(b"PAR1")
    assert "b.parquet" in refused("ingest", "a.csv", "b.parquet", cwd=here)
    assert [b["batch"] for b in done_json("status", cwd=here)["batches"]] == ["a.csv"]


def test_file_named_twice_is_refused(here: Path, refuse: Callable[..., str]) -> None:
    """The same file twice in one call is a slip, not two batches."""
    write_csv(here / "a.csv", crossings(2))
    assert "a.csv" in refuse("ingest", "a.csv", "./a.csv")


NO_ROADS = """<?xml version="1.0"?><osm version="0.6">
<node id="1" lat="50" lon="10"/><node id="2" lat="50.001" lon="10"/>
<way id="1"><nd ref="1"/><nd ref="2"/><tag k="{key}" v="{value}"/></way></osm>"""


@pytest.mark.parametrize(("key", "value"), [("waterway", "river"), ("highway", "footway")])
def test_extract_without_roads_is_refused(key: str, value: str, tmp_path: Path) -> None:
    """An extract in which no car may drive is refused by name, and no store is made."""
    (tmp_path / "river.osm").write_text(NO_ROADS.format(key=key, value=value), encoding="utf-8")
    message = refused("network", "river.osm", cwd=tmp_path)
    assert "river.osm" in message
    assert "network.classes" in message
    assert [path.name for path in tmp_path.iterdir()] == ["river.osm"]


@pytest.mark.parametrize("name", ["none.osm.pbf", "none.osm", "none.geojson", "none.parquet"])
def test_extract_missing_is_refused(name: str, tmp_path: Path) -> None:
    """An extract that is not there is named, whatever its format, and no store is made."""
    assert name in refused("network", name, cwd=tmp_path)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    "name", ["broken.osm.pbf", "broken.osm", "broken.geojson", "broken.parquet", "a.shp"]
)
def test_extract_unreadable_is_refused(name: str, tmp_path: Path) -> None:
    """A file that is no extract is named, and no store is made."""
    (tmp_path / name).write_bytes(b"this is no extract")
    assert name in refused("network", name, cwd=tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == [name]


def test_ingest_without_a_network_is_refused(town_osm: Path, tmp_path: Path) -> None:
    """Pings before roads are refused with the command that comes first."""
    write_csv(tmp_path / "a.csv", crossings(2))
    assert "turntally network" in refused("ingest", "a.csv", cwd=tmp_path)


@pytest.mark.parametrize("name", ["none.geojson", "broken.geojson"])
def test_zones_unreadable_are_refused(name: str, town_osm: Path, tmp_path: Path) -> None:
    """A file of zones that is missing or no GeoJSON is named, and no store is made."""
    (tmp_path / "broken.geojson").write_text("{", encoding="utf-8")
    assert name in refused("network", town_osm, "--zones", name, cwd=tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == ["broken.geojson"]


def bad_rows(good: list[Row]) -> list[list[object]]:
    """Give rows that must each be dropped, with the reason that fits."""
    v, t, lon, lat = good[0]
    return [
        [v, "soon", lon, lat],
        ["", t, lon, lat],
        [v, t, "east", lat],
        [v, t, 190, lat],
        [v, t, 0, 0],
        [v, t, lon + 3, lat],
    ]


def test_bad_rows_are_counted_and_add_up(here: Path) -> None:
    """Bad rows among good ones are dropped by reason, and rows in = used + dropped + held."""
    good = crossings(4)
    write_csv(here / "pings.csv", [*bad_rows(good), *good, good[-1]])
    one = done_json("ingest", "pings.csv", "--close", cwd=here)["batches"][0]
    assert one["dropped"] == {
        "bad_coordinate": 2,
        "bad_time": 1,
        "bad_vehicle": 1,
        "duplicate": 1,
        "null_island": 1,
        "outside_area": 1,
    }
    assert one["rows_in"] == len(good) + 7
    assert one["rows_in"] == one["rows_used"] + one["rows_dropped"] + one["rows_held"]
