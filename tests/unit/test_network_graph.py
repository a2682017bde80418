"""Ways into roads and edges: where they are split and joined, how long they are, how they turn."""

import itertools
from pathlib import Path

import numpy as np
import pytest

from stream.network import Built
from stream.network.model import Streets
from tests.sketch import GEOD, Sketch, cross


def ends(streets: Streets) -> list[tuple[int, int]]:
    """Give the node ids at the ends of each road."""
    tail, head = streets.node_id[streets.road_from], streets.node_id[streets.road_to]
    return list(zip(tail.tolist(), head.tolist(), strict=True))


def edge_between(streets: Streets, start: int, end: int) -> int:
    """Give the edge from one node to another."""
    found = ends(streets)
    if (start, end) in found:
        return 2 * found.index((start, end))
    return 2 * found.index((end, start)) + 1


def turns(streets: Streets, start: int, middle: int) -> dict[int, float]:
    """Give the turn angle at a middle node towards each node that follows."""
    edge = edge_between(streets, start, middle)
    out = {}
    for k in range(streets.succ_start[edge], streets.succ_start[edge + 1]):
        after = int(streets.succ_edge[k])
        node = streets.road_from[after >> 1] if after & 1 else streets.road_to[after >> 1]
        out[int(streets.node_id[node])] = float(streets.succ_turn_deg[k])
    return out


def line(tags: list[dict[str, str]]) -> Sketch:
    """Give a cross whose eastern street goes on over nodes 31, 32, …, one way per set of tags."""
    sketch = cross()
    at = [3, *range(31, 31 + len(tags))]
    for k, (a, b) in enumerate(itertools.pairwise(at)):
        sketch.node(b, 200 + 100 * (k + 1), 0)
        sketch.way(100 + k, [a, b], {"highway": "residential", **tags[k]})
    return sketch


def test_ways_that_differ_in_id_alone_are_one_road(tmp_path: Path) -> None:
    """A change of way id at a node of degree two splits nothing; the road keeps its first way's id."""
    streets = line([{}, {"name": "other"}]).build(tmp_path).streets
    assert sorted(ends(streets)) == [(1, 2), (1, 4), (1, 5), (1, 32)]
    road = ends(streets).index((1, 32))
    assert streets.road_way_id[road] == 13
    assert streets.road_length_m[road] == pytest.approx(400, abs=0.02)


@pytest.mark.parametrize(
    "tags", [{"highway": "primary"}, {"maxspeed": "30"}, {"oneway": "yes"}, {"maxspeed:backward": "20"}]
)
def test_change_of_class_limit_or_direction_splits_a_road(tmp_path: Path, tags: dict[str, str]) -> None:
    """A node of degree two splits where what a car needs to know changes, and is no junction."""
    built = line([tags]).build(tmp_path)
    assert (1, 3) in ends(built.streets)
    assert (3, 31) in ends(built.streets)
    assert len(built.tables["junction"]) == 1
    links = {built.streets.edge_link[2 * ends(built.streets).index(e)] for e in ((1, 3), (3, 31))}
    assert len(links) == 1
    assert links != {-1}


def test_ways_drawn_against_each_other_are_one_road(tmp_path: Path) -> None:
    """The direction of the drawing alone makes no difference, one-way streets included."""
    sketch = cross()
    sketch.way(13, [1, 3], oneway="yes", **{"maxspeed:forward": "40"})
    sketch.node(31, 300, 0)
    sketch.way(100, [31, 3], oneway="-1", **{"maxspeed:backward": "40"})
    streets = sketch.build(tmp_path).streets
    road = ends(streets).index((1, 31))
    assert streets.edge_open[2 * road : 2 * road + 2].tolist() == [1, 0]
    assert streets.edge_speed_mps[2 * road] == pytest.approx(40 / 3.6)


def test_edges_are_open_as_the_way_is(tmp_path: Path) -> None:
    """Edge 2 r runs along the drawing, 2 r + 1 against it; closed ones stay, marked closed."""
    sketch = cross()
    sketch.way(12, [1, 2], oneway="yes")
    sketch.way(13, [1, 3], oneway="-1")
    streets = sketch.build(tmp_path).streets
    got = {end: streets.edge_open[2 * r : 2 * r + 2].tolist() for r, end in enumerate(ends(streets))}
    assert got == {(1, 2): [1, 0], (1, 3): [0, 1], (1, 4): [1, 1], (1, 5): [1, 1]}


def test_speed_is_the_limit_of_its_direction_else_the_class_default(tmp_path: Path) -> None:
    """Edges carry the limit of their direction of travel; 40 km/h is the default of residential streets."""
    sketch = cross()
    sketch.way(12, [1, 2], {"highway": "residential", "maxspeed:forward": "30 mph"})
    streets = sketch.build(tmp_path).streets
    road = ends(streets).index((1, 2))
    np.testing.assert_allclose(streets.edge_speed_mps[2 * road : 2 * road + 2] * 3.6, [48.28032, 40])


def test_self_crossing_way_meets_itself(tmp_path: Path) -> None:
    """A way that passes one node twice makes it a junction of four road ends."""
    sketch = Sketch()
    sketch.nodes({1: (-100, 0), 2: (0, 0), 3: (100, 0), 4: (100, 100), 5: (0, 100), 6: (0, -100)})
    sketch.way(10, [1, 2, 3, 4, 5, 2, 6])
    built = sketch.build(tmp_path)
    assert sorted(ends(built.streets)) == [(1, 2), (2, 2), (2, 6)]
    assert built.tables["junction"]["n_arms"].to_list() == [4]


def test_bridge_without_common_node_does_not_meet(tmp_path: Path) -> None:
    """Ways that cross without a shared node stay apart (OSM wiki, key layer)."""
    sketch = cross()
    sketch.nodes({6: (50, 50), 7: (150, -50)})
    sketch.way(20, [6, 7], bridge="yes", layer="1")
    built = sketch.build(tmp_path)
    assert len(built.tables["junction"]) == 1
    assert (6, 7) in ends(built.streets)


@pytest.mark.parametrize(
    ("lon", "lat"), [(24.94, 60.17), (0.0, 0.0), (-70.0, -53.1), (179.999, -17.5), (25.0, 70.0)]
)
def test_lengths_are_the_geodesics_anywhere(tmp_path: Path, lon: float, lat: float) -> None:
    """Road lengths are pyproj's geodesics within 1 mm a step, across the 180th meridian too."""
    sketch = Sketch(lon, lat)
    sketch.nodes({1: (0, 0), 2: (180, 90), 3: (300, 250), 4: (-120, 60), 5: (30, -200)})
    sketch.way(10, [1, 2, 3])
    sketch.way(11, [1, 4])
    sketch.way(12, [1, 5])
    streets = sketch.build(tmp_path).streets
    for nodes in ([1, 2, 3], [1, 4], [1, 5]):
        places = np.round([sketch.place[n] for n in nodes], 7)
        expected = sum(GEOD.inv(*a, *b)[2] for a, b in itertools.pairwise(places))
        road = ends(streets).index((nodes[0], nodes[-1]))
        assert streets.road_length_m[road] == pytest.approx(expected, abs=2e-3)


@pytest.mark.parametrize(("lon", "lat"), [(24.94, 60.17), (0.0, 0.0), (180.0, -17.5)])
def test_turn_angles_are_right_positive(tmp_path: Path, lon: float, lat: float) -> None:
    """Coming from the south: ahead 0, east +90, west −90, back 180."""
    streets = cross(lon=lon, lat=lat).build(tmp_path).streets
    assert turns(streets, 4, 1) == pytest.approx({2: 0, 3: 90, 5: -90, 4: 180}, abs=0.02)


def test_successors_are_open_edges_in_order(tmp_path: Path) -> None:
    """Only open edges follow, in ascending order, and turning back is among them."""
    sketch = cross()
    sketch.way(12, [1, 2], oneway="-1")
    streets = sketch.build(tmp_path).streets
    assert set(turns(streets, 4, 1)) == {3, 4, 5}
    for edge in range(len(streets.edge_open)):
        after = streets.succ_edge[streets.succ_start[edge] : streets.succ_start[edge + 1]]
        assert np.all(np.diff(after) > 0)
        assert np.all(streets.edge_open[after] == 1)


def test_closed_ring_alone_is_one_road(tmp_path: Path) -> None:
    """A closed way that meets nothing is one road from a node to itself, on no junction."""
    sketch = cross()
    sketch.nodes({60: (400, 400), 61: (500, 400), 62: (500, 500)})
    sketch.way(20, [60, 61, 62, 60])
    built: Built = sketch.build(tmp_path)
    assert (60, 60) in ends(built.streets)
    assert built.report["links"]["apart"] == 1


def test_two_nodes_at_one_place_make_a_road_of_a_length_above_zero(tmp_path: Path) -> None:
    """The contract of a road is a length above zero, even where two nodes lie on each other."""
    sketch = cross()
    sketch.nodes({30: (200, 0), 33: (260, 0), 34: (200, 60)})
    sketch.way(100, [3, 30])
    sketch.way(101, [30, 33])
    sketch.way(102, [30, 34])
    streets = sketch.build(tmp_path).streets
    assert streets.road_length_m.min() > 0
