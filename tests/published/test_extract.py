"""A real extract (Helsinki, OpenStreetMap, ODbL) against a second, plain reading of the same file.

Outside: the OSM wiki's rules as coded in tests/oracle/osm_plain.py, which shares no code with `stream`,
the reader of the `osmium` library, and pyproj's geodesics. The tiny town adds what the extract lacks: a ring.
"""

import itertools
from collections import Counter, defaultdict
from dataclasses import dataclass
from pathlib import Path

import pytest

from stream.config import load_settings
from stream.network import Built, build_network
from tests.oracle import osm_plain
from tests.oracle.osm_plain import Place, PlainStreets

HELSINKI = Path(__file__).resolve().parent.parent / "data" / "helsinki.osm.pbf"


@dataclass(frozen=True)
class Pair:
    """The same file read twice."""

    path: Path
    plain: PlainStreets
    built: Built


@pytest.fixture(scope="module", params=["helsinki", "town"])
def pair(request: pytest.FixtureRequest, town_osm: Path) -> Pair:
    """Give both readings of an extract."""
    path = HELSINKI if request.param == "helsinki" else town_osm
    return Pair(path, PlainStreets(path), build_network(path, None, load_settings()))


def road_points(built: Built, road: int) -> list[Place]:
    """Give the places along a road, as drawn."""
    s = built.streets
    span = slice(s.point_start[road], s.point_start[road + 1])
    return list(zip(s.point_lon_e7[span].tolist(), s.point_lat_e7[span].tolist(), strict=True))


def place_steps(plain: PlainStreets) -> list[tuple[str, Place, Place]]:
    """Give (class, place, next place) for each step of each way."""
    return [(plain.ways[way][1]["highway"], plain.place[a], plain.place[b]) for way, a, b in plain.steps()]


def test_every_step_of_every_way_is_a_step_of_one_road(pair: Pair) -> None:
    """No metre is lost, doubled or given another class: the steps between shape points are the same."""
    expected = Counter((name, *sorted((a, b))) for name, a, b in place_steps(pair.plain))
    got: Counter[tuple[str, Place, Place]] = Counter()
    for road, code in enumerate(pair.built.streets.road_class):
        name = pair.built.streets.class_names[code]
        got.update((name, *sorted(step)) for step in itertools.pairwise(road_points(pair.built, road)))
    assert expected == got
    assert sum(expected.values()) > 20


def test_one_way_handling_is_the_same_step_by_step(pair: Pair) -> None:
    """Each step is open in the directions that oneway, junction and access keys allow (OSM wiki)."""
    place = pair.plain.place
    expected = {(place[a], place[b]) for a, b in pair.plain.open_steps}
    got = set()
    for road in range(len(pair.built.streets.road_from)):
        points = road_points(pair.built, road)
        if pair.built.streets.edge_open[2 * road]:
            got |= set(itertools.pairwise(points))
        if pair.built.streets.edge_open[2 * road + 1]:
            got |= set(itertools.pairwise(points[::-1]))
    assert expected == got
    one_way = {(a, b) for a, b in expected if (b, a) not in expected}
    assert len(one_way) > 5
    assert len(one_way) < len(expected)


def test_lengths_by_class_are_the_geodesics(pair: Pair) -> None:
    """The length of each class is the sum of pyproj's geodesics, within 0.01 mm a step (METHODS.md 3)."""
    expected: dict[str, float] = defaultdict(float)
    n_steps: Counter[str] = Counter()
    for name, (x1, y1), (x2, y2) in place_steps(pair.plain):
        expected[name] += osm_plain.GEOD.inv(x1 / 1e7, y1 / 1e7, x2 / 1e7, y2 / 1e7)[2]
        n_steps[name] += 1
    got: dict[str, float] = defaultdict(float)
    for code, length in zip(pair.built.streets.road_class, pair.built.streets.road_length_m, strict=True):
        got[pair.built.streets.class_names[code]] += length
    assert set(expected) == set(got)
    for name, metres in expected.items():
        assert abs(metres - got[name]) <= 1e-5 * n_steps[name], name


def test_meeting_nodes_are_the_nodes_of_junctions(pair: Pair) -> None:
    """Each node where three or more road ends meet is of exactly one junction, and no other node is."""
    listed = [n for nodes in pair.built.tables["junction"]["node_ids"] for n in nodes]
    assert len(listed) == len(set(listed))
    assert pair.plain.meeting_nodes() == set(listed)


@pytest.mark.parametrize(("cluster_m", "max_m"), [(25, 60), (60, 60), (40, 45)])
def test_junctions_are_the_plain_clusters(pair: Pair, cluster_m: float, max_m: float) -> None:
    """Nodes joined by roads shorter than `cluster_m` are one junction, unless that grows past its limit.

    A plain cluster wider than `cluster_max_m` must be split, each part narrow enough; no other may be.
    Rings have a rule of their own and are counted apart.
    """
    over = {"network": {"cluster_m": cluster_m, "cluster_max_m": max_m}}
    table = build_network(pair.path, None, load_settings(over=over)).tables["junction"]
    rows = table.select("node_ids", "kind").iter_rows()
    got = {frozenset(nodes) for nodes, kind in rows if kind in ("node", "cluster")}
    ring_nodes = set().union(*osm_plain.rings(pair.plain, "roundabout"))
    plain = [c for c in osm_plain.clusters(pair.plain, cluster_m) if not c & ring_nodes]
    n_expected = 0
    for cluster in plain:
        if osm_plain.width_m(pair.plain, cluster) <= max_m:
            assert frozenset(cluster) in got
            n_expected += 1
        else:
            parts = [part for part in got if part & cluster]
            assert len(parts) >= 2
            assert cluster == set().union(*parts)
            assert max(osm_plain.width_m(pair.plain, set(part)) for part in parts) <= max_m
            n_expected += len(parts)
    assert n_expected == len(got)
    assert n_expected > 5


def test_without_clustering_each_meeting_node_is_a_junction(pair: Pair) -> None:
    """With a `cluster_m` below any road's length there are as many junctions as meeting nodes and rings."""
    table = build_network(pair.path, None, load_settings(over={"network": {"cluster_m": 0.001}})).tables
    rings = osm_plain.rings(pair.plain, "roundabout")
    off_rings = pair.plain.meeting_nodes() - set().union(*rings)
    assert len(off_rings) + len(rings) == len(table["junction"])


def test_roundabouts_are_counted_the_same(pair: Pair) -> None:
    """Each connected set of ways with `junction=roundabout` is one junction, likewise `circular`."""
    kinds = Counter(pair.built.tables["junction"]["kind"])
    assert len(osm_plain.rings(pair.plain, "roundabout")) == kinds["roundabout"]
    assert len(osm_plain.rings(pair.plain, "circular")) == kinds["circular"]


def test_junction_id_is_the_smallest_node_id(pair: Pair) -> None:
    """A junction is named by the smallest OSM node id of its cluster, so it joins back to OSM."""
    for junction_id, nodes in pair.built.tables["junction"].select("junction_id", "node_ids").iter_rows():
        assert junction_id == min(nodes)


def test_signs_govern_the_same_junctions(pair: Pair) -> None:
    """Each traffic signal or give-way node, on the junction or up an arm, governs the junction ahead."""
    table = pair.built.tables["junction"]
    of = {n: j for j, nodes in table.select("junction_id", "node_ids").iter_rows() for n in nodes}
    reach_m = load_settings().network.signal_reach_m
    signals = osm_plain.governed(pair.plain, {"traffic_signals"}, of, reach_m)
    assert signals == set(table.filter(table["control"] == "signals")["junction_id"])
    give_way = osm_plain.governed(pair.plain, {"give_way"}, of, reach_m)
    assert give_way - signals == set(table.filter(table["control"] == "give_way")["junction_id"])
    assert signals
    assert give_way - signals


def test_restrictions_ban_the_same_turns(pair: Pair) -> None:
    """Each restriction via one node bans the turns that the wiki says, and nothing else is banned."""
    expected, _ = osm_plain.banned_turns(pair.plain)
    place = pair.plain.place
    s = pair.built.streets
    got = set()
    for edge in range(len(s.edge_open)):
        points = road_points(pair.built, edge >> 1)[:: -1 if edge & 1 else 1]
        for k in range(s.succ_start[edge], s.succ_start[edge + 1]):
            if s.succ_banned[k] and s.edge_open[edge]:
                after = road_points(pair.built, int(s.succ_edge[k]) >> 1)[:: -1 if s.succ_edge[k] & 1 else 1]
                got.add((points[-2], points[-1], after[1]))
    assert {tuple(place[n] for n in turn) for turn in expected} == got
    assert got
