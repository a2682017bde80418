"""Counting anew from the store gives what a fresh ingest under other keys gives, table by table."""

import itertools
import json
import tempfile
from datetime import date
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings, strategies

from stream.config import Settings, load_settings
from stream.ingest import ingest
from stream.network import build_network
from stream.store import Store, put_network
from stream.store.audit import run_audit
from stream.store.compact import compact, plan
from stream.store.ledger import network_config
from stream.store.retally import retally
from stream.tally import DIMENSIONS
from tests.archive import dump, write
from tests.property.test_ingest_property import archive
from tests.town import STEP_M, lon_lat, town_xml

HOUR = 3600
SHIFTS_S = (0, 29 * HOUR, 87 * HOUR)  # three days, at other hours, over a week-end
FIXED = {"privacy": {"plain_ids": True}, "clean": {"lateness_s": 10}, "run": {"threads": 1}}
TIME_ZONES = ("auto", "America/St_Johns", "Asia/Kolkata", "Pacific/Auckland")


def _bands(draw: Any) -> dict[str, int]:
    hours = sorted({0, *draw(strategies.lists(strategies.integers(1, 23), max_size=5))})
    return {f"from {hour}": hour for hour in hours}


def _day_types(draw: Any) -> dict[str, list[int]]:
    of = draw(strategies.lists(strategies.sampled_from("abc"), min_size=7, max_size=7))
    return {name: [day + 1 for day in range(7) if of[day] == name] for name in sorted(set(of))}


def _tallies(draw: Any) -> dict[str, Any]:
    out = {}
    for name in draw(strategies.sets(strategies.sampled_from(["one", "two", "maneuver"]), min_size=1)):
        kind = draw(strategies.sampled_from(["delay", "pace"]))
        known = [d.name for d in DIMENSIONS.values() if kind in d.kinds]
        chosen = draw(strategies.lists(strategies.sampled_from(known), min_size=1, max_size=4, unique=True))
        out[name] = {"value": kind, "dimensions": chosen}
    return out


@strategies.composite
def keys(draw: Any) -> dict[str, Any]:
    """Give values for all keys that stored rows can be counted anew under."""
    limits = sorted(draw(strategies.sets(strategies.integers(1, 179), min_size=4, max_size=4)))
    names = ("through_deg", "slight_deg", "plain_deg", "sharp_deg")
    return {
        "time": {"bands": _bands(draw), "day_types": _day_types(draw)},
        "tallies": _tallies(draw),
        "sections": {"min_m": draw(strategies.sampled_from([0, 50, 150, 250]))},
        "maneuver": dict(zip(names, limits, strict=True)),
        "network": {
            "time_zone": draw(strategies.sampled_from(TIME_ZONES)),
            "driving_side": draw(strategies.sampled_from(["auto", "left", "right"])),
        },
    }


def _feature(name: str, west: float, east: float, own: dict[str, str]) -> dict[str, Any]:
    corners = [(west, -500), (east, -500), (east, 900), (west, 900), (west, -500)]
    ring = [list(lon_lat(x * STEP_M, y)) for x, y in corners]
    return {
        "type": "Feature",
        "properties": {"name": name, **own},
        "geometry": {"type": "Polygon", "coordinates": [ring]},
    }


@strategies.composite
def zones(draw: Any) -> dict[str, Any]:
    """Give one to three bands of the town from west to east, some with a time zone or side of their own."""
    cuts = sorted(draw(strategies.sets(strategies.sampled_from([-0.7, 0.5, 0.9, 1.5, 2.2, 3.7]), min_size=2)))
    own = strategies.sampled_from(
        [{}, {"time_zone": "Asia/Kathmandu"}, {"driving_side": "left"}, {"time_zone": "Europe/Berlin"}]
    )
    parts = [_feature(f"zone {i}", a, b, draw(own)) for i, (a, b) in enumerate(itertools.pairwise(cuts))]
    return {"type": "FeatureCollection", "features": parts[:3]}


class Ground:
    """A folder with the town, the archive's files and stores."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.osm = folder / "town.osm"
        self.osm.write_text(town_xml(), encoding="utf-8")
        rows = archive()
        self.files = [
            write(folder / f"{ix}.csv", [(v, t + s, lon, lat) for v, t, lon, lat in rows], is_sorted=False)
            for ix, s in enumerate(SHIFTS_S)
        ]

    def zones(self, name: str, given: dict[str, Any] | None) -> Path | None:
        """Write zones, where there are any."""
        if given is None:
            return None
        path = self.folder / f"{name}.geojson"
        path.write_text(json.dumps(given), encoding="utf-8")
        return path

    def ingested(self, name: str, made_with: Settings, areas: Path | None, *, close: bool) -> Path:
        """Take the archive in, in three batches, under a configuration."""
        path = self.folder / f"{name}.duckdb"
        path.unlink(missing_ok=True)
        with Store.open(path, create=True) as store:
            put_network(store, build_network(self.osm, areas, made_with), network_config(made_with))
        ingest(path, self.files, made_with, close=close)
        return path


def differing(left: Path, right: Path) -> dict[str, Any]:
    """Give what tables of two stores don't share, by table; empty where they are equal row for row."""
    one, other = dump(left), dump(right)
    assert one.keys() == other.keys()
    return {
        table: [r for r in one[table] if r not in other[table]][:3]
        + [r for r in other[table] if r not in one[table]][:3]
        for table in one
        if one[table] != other[table]
    }


@settings(max_examples=10, deadline=None, suppress_health_check=list(HealthCheck))
@given(
    before=keys(),
    after=keys(),
    zones_before=strategies.none() | zones(),
    zones_after=zones(),
    keeps_zones=strategies.booleans(),
    close=strategies.booleans(),
    is_rolled_up=strategies.booleans(),
)
def test_retally_equals_a_fresh_ingest(
    before: dict[str, Any],
    after: dict[str, Any],
    zones_before: dict[str, Any] | None,
    zones_after: dict[str, Any],
    keeps_zones: bool,
    close: bool,
    is_rolled_up: bool,
) -> None:
    """From any keys and zones to any others: every table is that of a fresh ingest; twice is once; sound."""
    if keeps_zones and zones_before is not None:
        after = {**after, "network": before["network"]}
    old, new = (load_settings(over={**FIXED, **over}) for over in (before, after))
    with tempfile.TemporaryDirectory() as name:
        ground = Ground(Path(name))
        path = ground.ingested("retallied", old, ground.zones("before", zones_before), close=close)
        given_zones = None if keeps_zones else ground.zones("after", zones_after)
        fresh_zones = ground.zones("fresh", zones_before if keeps_zones else zones_after)
        fresh = ground.ingested("fresh", new, fresh_zones, close=close)
        for one in (path, fresh) if is_rolled_up else ():
            with Store.open(one) as store:
                compact(store, plan(store, date(2024, 1, 1)))
        for _ in range(2):
            with Store.open(path) as store:
                told = retally(store, new, given_zones)
            assert differing(path, fresh) == {}
        assert told["changed"] == []
        assert not told["is_network_changed"]
        assert told["passages_rewritten"] == 0
        with Store.open(path, read_only=True) as store:
            assert [one for one in run_audit(store) if one["n_faults"]] == []


@pytest.fixture
def ground(tmp_path: Path) -> Ground:
    """Give a folder with the town and the archive."""
    return Ground(tmp_path)


def test_later_ingests_agree(ground: Ground) -> None:
    """After a retally the next day is taken in under the new keys, and all is as if they had always held."""
    old = load_settings(over=FIXED)
    new = load_settings(over={**FIXED, "time": {"bands": {"all day": 0}}, "maneuver": {"plain_deg": 80}})
    areas = ground.zones("z", {"type": "FeatureCollection", "features": [_feature("centre", -1, 1.5, {})]})
    whole = ground.ingested("whole", new, areas, close=False)
    files, ground.files = ground.files, ground.files[:2]
    path = ground.ingested("s", old, None, close=False)
    with Store.open(path) as store:
        retally(store, new, areas)
        put_network(store, build_network(ground.osm, areas, new), network_config(new))
    ingest(path, files, new)
    assert differing(path, whole) == {}
