"""Gates: distances, the edges that hold them, and their lines."""

from pathlib import Path
from typing import Any

import numpy as np
import polars as pl
import pytest
import shapely

from stream.config import load_settings
from stream.network import Built
from tests.sketch import GEOD, Sketch, cross
from tests.unit.test_network_junctions import dual, jog, ring


def arm_of(built: Built, way: int, mouth: int | None = None) -> dict[str, Any]:
    """Give the row of the arm on a way (at a mouth)."""
    rows = built.tables["arm"].filter(pl.col("way_id") == way).to_dicts()
    rows = [r for r in rows if mouth is None or r["mouth_node_id"] == mouth]
    assert len(rows) == 1
    return rows[0]


def middle(row: dict[str, Any], kind: str) -> tuple[float, float]:
    """Give the middle of a gate's line."""
    return (
        (row[f"{kind}_lon1"] + row[f"{kind}_lon2"]) / 2,
        (row[f"{kind}_lat1"] + row[f"{kind}_lat2"]) / 2,
    )


def test_gates_of_town_streets_stand_60_and_40_m_out(tmp_path: Path) -> None:
    """On a long street the configured distances hold; the line's middle lies there (geodesic)."""
    sketch = cross()
    row = arm_of(sketch.build(tmp_path), 13)
    assert (row["entry_gate_m"], row["exit_gate_m"]) == (60.0, 40.0)
    for kind, metres in (("entry", 60.0), ("exit", 40.0)):
        assert GEOD.inv(*sketch.place[1], *middle(row, kind))[2] == pytest.approx(metres, abs=0.05)


def test_gates_go_by_class(tmp_path: Path) -> None:
    """Faster classes have longer gates."""
    sketch = cross(arm_m=500)
    sketch.way(12, [1, 2], {"highway": "trunk"})
    row = arm_of(sketch.build(tmp_path), 12)
    assert (row["entry_gate_m"], row["exit_gate_m"]) == (120.0, 100.0)


def test_gates_never_pass_half_of_the_link(tmp_path: Path) -> None:
    """On a link of 50 m all four gates stand just below 25 m, and none overlaps."""
    sketch = jog(50)
    built = sketch.build(tmp_path)
    link = built.tables["link"].filter(pl.col("arm_to_ix") >= 0).to_dicts()[0]
    arm = built.tables["arm"].to_dicts()
    gates = [arm[link[a]][g] for a in ("arm_from_ix", "arm_to_ix") for g in ("entry_gate_m", "exit_gate_m")]
    assert max(gates) <= link["length_m"] / 2
    assert min(gates) > 24.8
    assert link["middle_fwd_m"] == pytest.approx(link["length_m"] - gates[1] - gates[2])
    assert 0 < link["middle_fwd_m"] < 0.3
    assert link["middle_back_m"] > 0


def test_one_way_arms_have_one_gate(tmp_path: Path) -> None:
    """An inbound-only arm has no exit gate, and the other way round."""
    built = dual().build(tmp_path)
    into, out = arm_of(built, 101), arm_of(built, 103)
    assert (into["entry_gate_m"], into["exit_gate_m"], into["exit_lon1"]) == (80.0, 0.0, None)
    assert (out["entry_gate_m"], out["exit_gate_m"], out["entry_lon1"]) == (0.0, 60.0, None)


@pytest.mark.parametrize(("length_m", "has_gates"), [(29.0, False), (31.0, True)])
def test_short_dead_end_has_no_gates(tmp_path: Path, length_m: float, has_gates: bool) -> None:
    """A dead end shorter than `dead_end_min_m` has none, and that is counted."""
    sketch = cross()
    sketch.node(2, 0, length_m)
    built = sketch.build(tmp_path)
    row = arm_of(built, 12)
    assert (row["entry_gate_m"] > 0, row["exit_gate_m"] > 0) == (has_gates, has_gates)
    assert built.report["gates"].get("entry_missing_short_dead_end", 0) == (0 if has_gates else 1)


def test_gate_lies_on_a_later_road_of_the_link(tmp_path: Path) -> None:
    """Where the limit changes 35 m from the mouth, the gates stand on the road behind the change."""
    sketch = cross()
    sketch.nodes({61: (35, 0)})
    sketch.way(13, [1, 61], maxspeed="50")
    sketch.way(16, [61, 3], maxspeed="30")
    built = sketch.build(tmp_path)
    s = built.streets
    arm = arm_of(built, 13)["arm_ix"]
    (entry,) = np.flatnonzero(s.entry_gate_arm == arm)
    (leaving,) = np.flatnonzero(s.exit_gate_arm == arm)
    assert s.road_way_id[entry >> 1] == s.road_way_id[leaving >> 1] == 16
    assert s.entry_gate_at_m[entry] == pytest.approx(s.road_length_m[entry >> 1] - 25, abs=0.02)
    assert s.exit_gate_at_m[leaving] == pytest.approx(5, abs=0.02)
    assert s.edge_open[entry] == s.edge_open[leaving] == 1
    assert entry == leaving ^ 1


def test_no_gate_where_the_way_to_it_is_closed(tmp_path: Path) -> None:
    """Two-way for the first 20 m, one-way away from there: nobody comes in from an entry gate."""
    sketch = cross()
    sketch.nodes({61: (20, 0)})
    sketch.way(13, [1, 61])
    sketch.way(16, [61, 3], oneway="yes")
    built = sketch.build(tmp_path)
    row = arm_of(built, 13)
    assert (row["is_inbound"], row["entry_gate_m"], row["exit_gate_m"]) == (True, 0.0, 40.0)
    assert built.report["gates"]["entry_missing_direction_changes"] == 1


def test_gate_line_stands_across_the_arm_as_driven(tmp_path: Path) -> None:
    """End 1 is on the driver's left: to the north leaving an eastern arm, to the south coming in on it."""
    sketch = cross()
    row = arm_of(sketch.build(tmp_path), 13)
    assert row["exit_lat1"] > row["exit_lat2"]  # leaving eastward, north is left
    assert row["entry_lat1"] < row["entry_lat2"]  # coming in westward, south is left
    assert row["exit_lon1"] == pytest.approx(row["exit_lon2"], abs=2e-7)
    width = GEOD.inv(row["exit_lon1"], row["exit_lat1"], row["exit_lon2"], row["exit_lat2"])[2]
    assert width == pytest.approx(30.0, abs=0.1)


def test_gate_line_reaches_halfway_to_the_next_road(tmp_path: Path) -> None:
    """A parallel street 10 m to the north of the eastern arm leaves the line 5 m on that side."""
    sketch = cross()
    sketch.nodes({61: (20, 10), 62: (180, 10)})
    sketch.way(20, [61, 62])
    row = arm_of(sketch.build(tmp_path), 13)
    lon, lat = sketch.origin
    for kind, metres, north, south in (("entry", 60, 2, 1), ("exit", 40, 1, 2)):
        x = GEOD.fwd(lon, lat, 90, metres)[0]
        assert GEOD.inv(x, lat, x, row[f"{kind}_lat{north}"])[2] == pytest.approx(5.0, abs=0.05)
        assert GEOD.inv(x, lat, x, row[f"{kind}_lat{south}"])[2] == pytest.approx(15.0, abs=0.05)


def test_gate_lines_of_a_dual_carriageway_do_not_meet(tmp_path: Path) -> None:
    """Lines of neighbouring carriageways stop at halfway, so none crosses another's road."""
    built = dual(gap_m=12).build(tmp_path)
    lines = []
    for row in built.tables["arm"].to_dicts():
        for kind in ("entry", "exit"):
            if row[f"{kind}_lon1"] is not None:
                ends = [(row[f"{kind}_lon{i}"], row[f"{kind}_lat{i}"]) for i in (1, 2)]
                lines.append((row["way_id"], shapely.LineString(ends)))
    s = built.streets
    for way, line in lines:
        for road in range(len(s.road_from)):
            span = slice(s.point_start[road], s.point_start[road + 1])
            street = shapely.LineString(np.stack([s.point_lon_e7[span], s.point_lat_e7[span]], axis=1) * 1e-7)
            assert street.intersects(line) == (s.road_way_id[road] == way)


def test_gates_on_a_ring_start_at_its_mouth(tmp_path: Path) -> None:
    """Distances count from the ring, not from its middle."""
    sketch = ring(20.0)
    row = arm_of(sketch.build(tmp_path), 200)
    assert GEOD.inv(*sketch.origin, *middle(row, "entry"))[2] == pytest.approx(80.0, abs=0.05)


def test_gate_distances_are_those_configured(tmp_path: Path) -> None:
    """One number serves all classes; a map goes by class with `other`."""
    over = {"gates": {"entry_m": 35, "exit_m": {"residential": 20, "other": 50}}}
    row = arm_of(cross().build(tmp_path, load_settings(over=over)), 12)
    assert (row["entry_gate_m"], row["exit_gate_m"]) == (35.0, 20.0)


def test_gates_across_the_180th_meridian(tmp_path: Path) -> None:
    """Lines and distances hold where longitude jumps from 180 to -180."""
    sketch: Sketch = cross(lon=179.9997, lat=-17.5)
    row = arm_of(sketch.build(tmp_path), 13)
    lon, lat = row["entry_lon1"], row["entry_lat1"]
    assert lon < -179.99
    assert GEOD.inv(*sketch.place[1], lon, lat)[2] == pytest.approx(np.hypot(60, 15), abs=0.1)


def line_lengths(folder: Path, lon: float) -> dict[tuple[int, str], float]:
    """Give the geodesic length of each gate line of a crossing, a street beside one arm, by way and kind."""
    folder.mkdir()
    sketch = cross(lon=lon, lat=64.13)
    sketch.nodes({70: (8.0, 30.0), 71: (8.0, 190.0)})
    sketch.way(70, [70, 71], {"highway": "residential"})
    out = {}
    for row in sketch.build(folder).tables["arm"].to_dicts():
        for kind in ("entry", "exit"):
            ends = [row[f"{kind}_{name}"] for name in ("lon1", "lat1", "lon2", "lat2")]
            if None not in ends:
                out[row["way_id"], kind] = GEOD.inv(*ends)[2]
    return out


@pytest.mark.parametrize("lon", [179.9999, -179.9999, 180.0])
def test_gate_lines_are_the_same_across_180_degrees(tmp_path: Path, lon: float) -> None:
    """Lines stand and reach as they do elsewhere at that latitude (a crossing moved along its parallel)."""
    here, there = line_lengths(tmp_path / "here", -21.9), line_lengths(tmp_path / "there", lon)
    assert here.keys() == there.keys()
    assert len(here) >= 8
    assert all(there[key] == pytest.approx(metres, abs=0.03) for key, metres in here.items())
    assert min(here.values()) > 1.0
