"""Nodes into junctions: clusters and their limits, rings, and the links between."""

import math
from pathlib import Path
from typing import Any

import polars as pl
import pytest

from stream.config import load_settings
from stream.network import Built
from tests.sketch import Sketch, cross


def jog(gap_m: float, arm_m: float = 200.0) -> Sketch:
    """Give a street to the north and one to the south, `gap_m` apart on an east–west street."""
    sketch = Sketch()
    sketch.nodes({1: (0, 0), 2: (gap_m, 0), 3: (-arm_m, 0), 4: (gap_m + arm_m, 0)})
    sketch.nodes({5: (0, arm_m), 6: (gap_m, -arm_m)})
    sketch.way(10, [3, 1, 2, 4], {"highway": "primary"})
    sketch.way(11, [1, 5])
    sketch.way(12, [2, 6])
    return sketch


def dual(gap_m: float = 15.0, arm_m: float = 200.0) -> Sketch:
    """Give a dual carriageway (westbound in the north, nodes 1 and 2; eastbound 3 and 4) crossed by another.

    The corners are 1 north-west, 2 north-east, 3 south-west, 4 south-east.
    """
    h = gap_m / 2
    sketch = Sketch()
    sketch.nodes({1: (-h, h), 2: (h, h), 3: (-h, -h), 4: (h, -h)})
    sketch.nodes({11: (-arm_m, h), 12: (arm_m, h), 13: (-arm_m, -h), 14: (arm_m, -h)})
    sketch.nodes({21: (-h, arm_m), 22: (h, arm_m), 23: (-h, -arm_m), 24: (h, -arm_m)})
    for way, nodes in {
        101: [12, 2],
        102: [2, 1],
        103: [1, 11],
        104: [13, 3],
        105: [3, 4],
        106: [4, 14],
        201: [21, 1],
        202: [1, 3],
        203: [3, 23],
        204: [24, 4],
        205: [4, 2],
        206: [2, 22],
    }.items():
        sketch.way(way, nodes, {"highway": "primary", "oneway": "yes"})
    return sketch


def ring(
    radius_m: float = 15.0,
    n_arms: int = 4,
    kind: str = "roundabout",
    clockwise: bool = False,
    stub_m: float = 150.0,
) -> Sketch:
    """Give a ring of eight nodes 1..8, from the east anticlockwise, with streets from nodes 1, 3, 5, 7."""
    sketch = Sketch()
    for i in range(8):
        angle = i * math.pi / 4
        sketch.node(1 + i, radius_m * math.cos(angle), radius_m * math.sin(angle))
    nodes = [1, 2, 3, 4, 5, 6, 7, 8, 1]
    sketch.way(100, nodes[::-1] if clockwise else nodes, {"highway": "primary", "junction": kind})
    for k in range(n_arms):
        angle = k * math.pi / 2
        reach = radius_m + stub_m
        sketch.node(11 + k, reach * math.cos(angle), reach * math.sin(angle))
        sketch.way(200 + k, [1 + 2 * k, 11 + k])
    return sketch


def junctions(built: Built) -> list[dict[str, Any]]:
    """Give the rows of the table of junctions."""
    return built.tables["junction"].to_dicts()


def test_crossing_of_four_streets_is_one_junction(tmp_path: Path) -> None:
    """One node, four arms, each arm two-way, each at a dead end's link."""
    built = cross().build(tmp_path)
    (row,) = junctions(built)
    assert (row["junction_id"], row["kind"], row["n_arms"], row["node_ids"]) == (1, "node", 4, [1])
    assert built.tables["link"]["arm_to_ix"].to_list() == [-1] * 4
    assert built.tables["link"]["length_m"].to_list() == pytest.approx([200] * 4, abs=0.02)


def test_place_of_a_junction_is_the_mean_of_its_nodes(tmp_path: Path) -> None:
    """A cluster stands midway between its nodes, on either side of the 180th meridian."""
    sketch = cross(lon=180.0, lat=-17.5)
    (row,) = junctions(sketch.build(tmp_path))
    assert abs(row["lon"]) == pytest.approx(180.0, abs=1e-6)
    assert row["lat"] == pytest.approx(-17.5, abs=1e-6)


@pytest.mark.parametrize(("gap_m", "n"), [(10, 1), (24.9, 1), (25.1, 2), (80, 2)])
def test_nodes_closer_than_cluster_m_are_one_junction(tmp_path: Path, gap_m: float, n: int) -> None:
    """The limit is `cluster_m`, 25 m by default, along the road."""
    rows = junctions(jog(gap_m).build(tmp_path))
    assert len(rows) == n
    assert rows[0]["kind"] == ("cluster" if n == 1 else "node")
    assert rows[0]["n_arms"] == (4 if n == 1 else 3)


def test_short_road_with_a_change_in_it_still_joins(tmp_path: Path) -> None:
    """The way between two meeting nodes counts as one, however many roads it is made of."""
    sketch = jog(20)
    sketch.node(9, 10, 0)
    sketch.way(10, [3, 1, 9], {"highway": "primary", "maxspeed": "60"})
    sketch.way(13, [9, 2, 4], {"highway": "primary", "maxspeed": "50"})
    built = sketch.build(tmp_path)
    (row,) = junctions(built)
    assert row["node_ids"] == [1, 2]
    inside = built.streets.road_inside
    assert sorted(inside.tolist()) == [-1, -1, -1, -1, 0, 0]
    assert set(built.streets.node_junction[built.streets.node_id == 9].tolist()) == {0}


def test_cluster_never_grows_past_its_limit(tmp_path: Path) -> None:
    """A street with side roads every 20 m does not melt into one junction; no cluster is over 60 m wide."""
    sketch = Sketch()
    n = 12
    sketch.nodes({i: (20.0 * i, 0) for i in range(1, n + 1)})
    sketch.nodes({100 + i: (20.0 * i, 150) for i in range(1, n + 1)})
    sketch.nodes({50: (-180, 0), 51: (20.0 * n + 200, 0)})
    sketch.way(10, [50, *range(1, n + 1), 51])
    for i in range(1, n + 1):
        sketch.way(100 + i, [i, 100 + i])
    built = sketch.build(tmp_path)
    rows = junctions(built)
    assert sum(len(r["node_ids"]) for r in rows) == n
    widths = [20.0 * (max(r["node_ids"]) - min(r["node_ids"])) for r in rows]
    assert max(widths) <= 60
    assert max(widths) > 0
    assert built.report["junctions"]["cluster_at_its_limit"] >= 1


def test_dual_carriageways_cross_in_one_junction(tmp_path: Path) -> None:
    """Four nodes, eight one-way arms, half of them inbound; the roads between the nodes lie inside."""
    built = dual().build(tmp_path)
    (row,) = junctions(built)
    assert (row["kind"], row["n_nodes"], row["n_arms"]) == ("cluster", 4, 8)
    assert int((built.streets.road_inside == 0).sum()) == 4
    arm = built.tables["arm"]
    assert arm["is_inbound"].sum() == 4
    assert (arm["is_inbound"] != arm["is_outbound"]).all()


def test_junction_id_is_the_smallest_node_id_of_the_cluster(tmp_path: Path) -> None:
    """Ids last: they come from OSM, and rows are in their order."""
    sketch = jog(20)
    rows = junctions(sketch.build(tmp_path))
    assert (rows[0]["junction_id"], rows[0]["node_ids"]) == (1, [1, 2])


@pytest.mark.parametrize("kind", ["roundabout", "circular"])
def test_ring_is_one_junction(tmp_path: Path, kind: str) -> None:
    """A ring of four arms is one junction of its kind, though wider than a cluster of chains allows."""
    built = ring(35.0, kind=kind).build(tmp_path)
    (row,) = junctions(built)
    assert (row["kind"], row["n_arms"], row["node_ids"]) == (kind, 4, [1, 3, 5, 7])
    assert (built.streets.road_inside == 0).sum() == 4


def test_ring_in_several_ways_is_one_junction(tmp_path: Path) -> None:
    """A ring may be drawn in pieces with limits of their own; nodes between pieces are of the junction."""
    sketch = ring()
    tags = {"highway": "primary", "junction": "roundabout"}
    sketch.way(100, [1, 2, 3, 4, 5, 6], tags)
    sketch.way(101, [6, 7, 8, 1], {**tags, "maxspeed": "30"})
    built = sketch.build(tmp_path)
    (row,) = junctions(built)
    assert row["node_ids"] == [1, 3, 5, 7]
    assert built.streets.node_junction[built.streets.node_id == 6].tolist() == [0]


def test_ring_wider_than_its_limit_is_no_junction(tmp_path: Path) -> None:
    """A ring wider than `roundabout_max_m` keeps its nodes as junctions of their own, and is counted."""
    built = ring(70.0).build(tmp_path)
    assert len(junctions(built)) == 4
    assert built.report["junctions"]["ring_too_wide"] == 1


def test_splitter_islands_belong_to_their_ring(tmp_path: Path) -> None:
    """Entry and exit of an arm that part 15 m before the ring make one two-way arm, mouth at the parting."""
    sketch = ring()
    sketch.nodes({31: (30, 0)})
    sketch.way(200, [31, 1], oneway="yes")
    sketch.way(210, [2, 31], oneway="yes")
    sketch.way(211, [31, 11])
    built = sketch.build(tmp_path)
    (row,) = junctions(built)
    assert (row["kind"], row["n_arms"]) == ("roundabout", 4)
    east = built.tables["arm"].filter(pl.col("mouth_node_id") == 31).to_dicts()
    assert [(a["is_inbound"], a["is_outbound"]) for a in east] == [(True, True)]


def test_two_rings_do_not_melt(tmp_path: Path) -> None:
    """Rings closer than `cluster_m` stay two junctions."""
    sketch = ring(15.0, stub_m=150.0)
    for i in range(8):
        angle = i * math.pi / 4
        sketch.node(301 + i, 50 + 15 * math.cos(angle), 15 * math.sin(angle))
    sketch.way(300, [*range(301, 309), 301], {"highway": "primary", "junction": "roundabout"})
    sketch.way(200, [1, 305])
    sketch.nodes({320: (50, 150), 321: (200, 0)})
    sketch.way(310, [303, 320])
    sketch.way(311, [301, 321])
    rows = junctions(sketch.build(tmp_path))
    assert [r["kind"] for r in rows] == ["roundabout", "roundabout"]


def test_mini_roundabout_is_a_kind(tmp_path: Path) -> None:
    """A mini-roundabout node makes its junction one."""
    sketch = cross()
    sketch.node(1, 0, 0, {"highway": "mini_roundabout"})
    (row,) = junctions(sketch.build(tmp_path))
    assert row["kind"] == "mini_roundabout"


def test_link_between_two_junctions_has_an_arm_at_each_end(tmp_path: Path) -> None:
    """A link runs from mouth to mouth, over nodes where only the limit changes."""
    sketch = jog(100)
    sketch.node(9, 50, 0)
    sketch.way(10, [3, 1, 9], {"highway": "primary", "maxspeed": "60"})
    sketch.way(13, [9, 2, 4], {"highway": "primary", "maxspeed": "50"})
    built = sketch.build(tmp_path)
    link = built.tables["link"].filter(pl.col("arm_to_ix") >= 0).to_dicts()
    assert len(link) == 1
    assert link[0]["length_m"] == pytest.approx(100, abs=0.02)
    arm = built.tables["arm"]
    mouths = [arm["mouth_node_id"][link[0][k]] for k in ("arm_from_ix", "arm_to_ix")]
    assert sorted(mouths) == [1, 2]


def test_loop_is_a_link_with_two_arms_of_one_junction(tmp_path: Path) -> None:
    """A street that comes back to its junction is a link from it to itself."""
    sketch = cross()
    sketch.nodes({60: (-100, 100)})
    sketch.way(12, [1, 2, 60, 5, 1])
    sketch.way(15, [1, 5], {"highway": "footway"})
    built = sketch.build(tmp_path)
    loop = built.tables["link"].filter((pl.col("arm_from_ix") >= 0) & (pl.col("arm_to_ix") >= 0)).to_dicts()
    assert len(loop) == 1
    arm = built.tables["arm"]
    assert arm["junction_ix"][loop[0]["arm_from_ix"]] == arm["junction_ix"][loop[0]["arm_to_ix"]]


def test_arms_are_numbered_clockwise_from_north(tmp_path: Path) -> None:
    """Numbers and bearings go up together; the four streets of the cross bear 0, 90, 180 and 270."""
    sketch = cross()
    sketch.node(2, 20, 200)
    arm = sketch.build(tmp_path).tables["arm"].sort("arm")
    assert arm["way_id"].to_list() == [12, 13, 14, 15]
    expected = [math.degrees(math.atan2(20, 200)), 90, 180, 270]
    assert arm["bearing_deg"].to_list() == pytest.approx(expected, abs=0.05)
    assert arm["arm"].to_list() == [0, 1, 2, 3]


def test_bearing_runs_from_5_to_30_m_beyond_the_mouth(tmp_path: Path) -> None:
    """What lies within 5 m of the mouth or beyond 30 m of it does not turn an arm."""
    sketch = cross()
    sketch.nodes({61: (4, 3), 62: (4, 40), 63: (90, 40)})  # 5 m off to the north-east, then north, then east
    sketch.way(12, [1, 61, 62, 63])
    arm = sketch.build(tmp_path).tables["arm"].filter(pl.col("way_id") == 12)
    assert arm["bearing_deg"].to_list() == pytest.approx([0.0], abs=0.05)


def test_class_and_limit_of_an_arm_are_those_of_its_first_metres(tmp_path: Path) -> None:
    """A stub of another class at the mouth does not name the arm; the way id there does."""
    sketch = cross()
    sketch.nodes({61: (0, 4)})
    sketch.way(12, [1, 61], {"highway": "primary", "maxspeed": "80"})
    sketch.way(16, [61, 2], {"highway": "residential", "maxspeed": "30"})
    arm = sketch.build(tmp_path).tables["arm"].filter(pl.col("way_id") == 12).to_dicts()
    assert [(a["class"], a["limit_kmh"], a["has_limit"]) for a in arm] == [("residential", 30.0, True)]


def test_limits_of_an_arm_go_by_direction(tmp_path: Path) -> None:
    """Inbound and outbound limits differ where the tags do; without a limit the class default stands."""
    sketch = cross()
    sketch.way(12, [1, 2], {"highway": "primary", "maxspeed:forward": "50", "maxspeed:backward": "30 mph"})
    sketch.way(13, [1, 3], oneway="yes")
    arm = {a["way_id"]: a for a in sketch.build(tmp_path).tables["arm"].to_dicts()}
    assert (arm[12]["limit_in_kmh"], arm[12]["limit_out_kmh"]) == (48.28, 50.0)
    assert (arm[13]["limit_in_kmh"], arm[13]["limit_out_kmh"], arm[13]["has_limit"]) == (None, 40.0, False)


def test_service_roads_join_in_when_configured(tmp_path: Path) -> None:
    """With `service` among the classes a service road makes a junction where it meets a street."""
    sketch = cross()
    sketch.nodes({61: (100, 60)})
    sketch.node(62, 100, 0)
    sketch.way(13, [1, 62, 3])
    sketch.way(20, [62, 61], {"highway": "service"})
    assert len(junctions(sketch.build(tmp_path))) == 1
    over = {"network": {"classes": ["residential", "service"]}}
    assert len(junctions(sketch.build(tmp_path, load_settings(over=over)))) == 2
