"""The whole build: tables, zones, digest, blobs, refusals, and what must not change the result."""

import dataclasses
import json
from collections.abc import Callable
from pathlib import Path

import numpy as np
import polars as pl
import pytest

from stream.config import load_settings
from stream.errors import InputError, NetworkError
from stream.network import build_network, streets_from_blobs, streets_to_blobs
from stream.network.model import Streets
from tests.sketch import Sketch, cross
from tests.unit.test_network_junctions import dual, jog, ring

COLUMNS = {
    "junction": "junction_ix junction_id lon lat n_nodes node_ids kind control zone driving_side time_zone "
    "class n_arms",
    "arm": "arm_ix junction_ix junction_id arm way_id mouth_node_id bearing_deg is_inbound is_outbound class "
    "limit_kmh limit_in_kmh limit_out_kmh has_limit link_ix link_m entry_gate_m exit_gate_m entry_lon1 "
    "entry_lat1 entry_lon2 entry_lat2 exit_lon1 exit_lat1 exit_lon2 exit_lat2",
    "link": "link_ix arm_from_ix arm_to_ix length_m class limit_kmh middle_fwd_m middle_back_m is_open_fwd "
    "is_open_back lon lat zone",
    "movement": "junction_ix junction_id arm_in arm_out arm_in_ix arm_out_ix turn_deg maneuver inside_m "
    "is_banned is_timed",
    "zone": "zone_ix zone time_zone driving_side",
}


def same(one: Streets, other: Streets) -> bool:
    """Tell whether two streets are equal, array by array, types included."""
    pairs = [(getattr(one, f.name), getattr(other, f.name)) for f in dataclasses.fields(one)]
    return all(
        a.dtype == b.dtype and np.array_equal(a, b, equal_nan=a.dtype.kind == "f")
        if isinstance(a, np.ndarray)
        else a == b
        for a, b in pairs
    )


def zone_file(folder: Path, west: float, east: float, **properties: str) -> Path:
    """Write one zone between two longitudes."""
    ring_ = [[west, 60.0], [east, 60.0], [east, 61.0], [west, 61.0], [west, 60.0]]
    feature = {
        "type": "Feature",
        "properties": properties,
        "geometry": {"type": "Polygon", "coordinates": [ring_]},
    }
    path = folder / "zones.geojson"
    path.write_text(json.dumps({"type": "FeatureCollection", "features": [feature]}))
    return path


def test_tables_have_the_agreed_columns(tmp_path: Path) -> None:
    """Other stages and outside programs rely on these names, in this order."""
    tables = dual().build(tmp_path).tables
    assert {name: " ".join(table.columns) for name, table in tables.items()} == COLUMNS


def test_arrays_have_the_types_of_the_contract(tmp_path: Path) -> None:
    """Array types and lengths are those that model.py states."""
    s = dual().build(tmp_path).streets
    n, r, a = len(s.node_id), len(s.road_from), len(s.arm_junction)
    sizes = {"node": n, "road": r, "edge": 2 * r, "entry": 2 * r, "exit": 2 * r, "arm": a}
    hints = Streets.__annotations__
    for name, array in s.arrays().items():
        kind = name.split("_")[0]
        if kind in sizes:
            assert len(array) == sizes[kind], name
        assert str(hints[name]).endswith(str(array.dtype) + "]]") or f"numpy.{array.dtype}" in str(
            hints[name]
        )
        assert array.flags.c_contiguous, name
    assert len(s.point_start) == r + 1
    assert len(s.succ_start) == 2 * r + 1
    assert s.succ_start[-1] == len(s.succ_edge) == len(s.succ_turn_deg) == len(s.succ_banned)


def test_zone_names_side_and_time_zone_reach_the_junctions(tmp_path: Path) -> None:
    """The zone that holds a junction gives its name, and its own side and time zone where it has them."""
    sketch = jog(100)
    lon = [sketch.place[n][0] for n in (1, 2)]
    zones = zone_file(
        tmp_path, 24.0, sum(lon) / 2, name="west", time_zone="Europe/London", driving_side="left"
    )
    built = build_network(sketch.write(tmp_path), zones, load_settings())
    rows = built.tables["junction"].select("junction_id", "zone", "driving_side", "time_zone").rows()
    assert rows == [(1, "west", "left", "Europe/London"), (2, "", "right", "Europe/Helsinki")]
    assert built.report["zones"] == {"west": 1, "outside": 1}
    assert built.report["driving_side"] == {"left": 1, "right": 1}
    assert built.tables["zone"].rows() == [(0, "west", "Europe/London", "left")]
    zone_of = dict(built.tables["link"].select("class", "zone").unique().filter(pl.col("zone") != "").rows())
    assert set(zone_of.values()) == {"west"}


def test_road_lines_give_the_same_network_as_osm(tmp_path: Path) -> None:
    """The same crossing from GeoJSON lines: one junction, four arms with the same gates, all movements."""
    sketch = cross()
    features = [
        {
            "type": "Feature",
            "properties": {"class": "residential"},
            "geometry": {"type": "LineString", "coordinates": [sketch.place[1], sketch.place[end]]},
        }
        for end in (2, 3, 4, 5)
    ]
    path = tmp_path / "roads.geojson"
    path.write_text(json.dumps({"type": "FeatureCollection", "features": features}))
    lines, osm = build_network(path, None, load_settings()).tables, sketch.build(tmp_path).tables
    for name, columns in (
        ("junction", ["n_arms", "kind", "control", "class"]),
        ("arm", ["arm", "entry_gate_m", "exit_gate_m", "limit_kmh", "is_inbound", "is_outbound"]),
        ("movement", ["arm_in", "arm_out", "maneuver", "is_banned"]),
    ):
        assert lines[name].select(columns).equals(osm[name].select(columns)), name


def test_configured_time_zone_holds_outside_zones(tmp_path: Path) -> None:
    """`network.time_zone` replaces the look-up by place."""
    settings = load_settings(over={"network": {"time_zone": "Asia/Tokyo"}})
    assert cross().build(tmp_path, settings).tables["junction"]["time_zone"].to_list() == ["Asia/Tokyo"]


@pytest.mark.parametrize("make", [cross, dual, ring])
def test_order_of_the_file_changes_nothing(tmp_path: Path, make: Callable[[], Sketch]) -> None:
    """Nodes, ways and relations in any order give the same digest."""
    sketch = make()
    assert sketch.build(tmp_path).digest == sketch.build(tmp_path, backwards=True).digest


def test_digest_covers_settings_that_change_the_network(tmp_path: Path) -> None:
    """Another gate distance, another network; the same settings, the same one."""
    other = load_settings(over={"gates": {"entry_m": 50}})
    digests = [cross().build(tmp_path, s).digest for s in (load_settings(), load_settings(), other)]
    assert digests[0] == digests[1] != digests[2]


def test_digest_covers_tables_and_arrays(tmp_path: Path) -> None:
    """A sign that only the table shows, and a metre that only the arrays show, both change it."""
    sketch = cross()
    before = sketch.build(tmp_path).digest
    sketch.node(1, 0, 0, {"highway": "stop"})
    signed = sketch.build(tmp_path).digest
    sketch.node(4, 0, -201)
    assert len({before, signed, sketch.build(tmp_path).digest}) == 3


def test_drawing_direction_changes_no_table(tmp_path: Path) -> None:
    """A way drawn the other way round with `oneway=-1` gives the same junctions, arms and movements."""
    one, other = dual(), dual()
    other.way(101, [2, 12], {"highway": "primary", "oneway": "-1"})
    other.way(105, [4, 3], {"highway": "primary", "oneway": "-1"})
    a, b = one.build(tmp_path).tables, other.build(tmp_path).tables
    for name in ("junction", "arm", "movement"):
        drop = [c for c in a[name].columns if c in ("link_ix",)]
        assert a[name].drop(drop).equals(b[name].drop(drop)), name


def test_blobs_bring_the_streets_back(tmp_path: Path) -> None:
    """What is stored and read again is the same, array by array."""
    streets = ring().build(tmp_path).streets
    assert same(streets_from_blobs(streets_to_blobs(streets)), streets)


def test_blobs_of_another_version_are_refused(tmp_path: Path) -> None:
    """A foreign version, a missing or a broken array each get an error with the mend."""
    blobs = streets_to_blobs(cross().build(tmp_path).streets)
    head = json.loads(blobs["head"])
    with pytest.raises(NetworkError, match=r"format 99.*turntally network"):
        streets_from_blobs({**blobs, "head": json.dumps({**head, "version": 99}).encode()})
    with pytest.raises(NetworkError, match=r"lacks node_id.*turntally network"):
        streets_from_blobs({k: v for k, v in blobs.items() if k != "node_id"})
    with pytest.raises(NetworkError, match=r"node_id can't be read.*turntally network"):
        streets_from_blobs({**blobs, "node_id": blobs["node_id"][:40]})
    with pytest.raises(NetworkError, match="no readable head"):
        streets_from_blobs({k: v for k, v in blobs.items() if k != "head"})


def test_unknown_ending_is_refused(tmp_path: Path) -> None:
    """A file of another kind is named with the endings that can be read."""
    path = tmp_path / "roads.shp"
    path.write_bytes(b"")
    with pytest.raises(InputError, match=r"roads\.shp: not a known kind.*\.osm\.pbf.*\.geojson"):
        build_network(path, None, load_settings())


def test_roads_that_never_meet_are_refused(tmp_path: Path) -> None:
    """A single street has no junction, so there is nothing to measure."""
    sketch = Sketch()
    sketch.nodes({1: (0, 0), 2: (100, 0)})
    sketch.way(10, [1, 2])
    with pytest.raises(NetworkError, match="no roads meet in it"):
        sketch.build(tmp_path)


def test_progress_is_told_while_reading(tmp_path: Path) -> None:
    """A caller can show what is being read and how much of it there was."""
    told: list[tuple[str, int]] = []
    build_network(cross().write(tmp_path), None, load_settings(), lambda what, n: told.append((what, n)))
    assert told == [("ways", 4), ("nodes", 5)]
