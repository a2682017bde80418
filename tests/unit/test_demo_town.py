"""The invented town: what is written is what is driven, on either side of the road."""

import json
from xml.etree import ElementTree

import numpy as np
import pytest

from stream.demo.holds import NO_RULE, SIGNAL, SIGNAL_YIELD
from stream.demo.plan import write_osm, write_zones
from stream.demo.rules import LOST_S, town_roads
from stream.demo.town import TIME_ZONE, build_plan
from stream.network import build_network


@pytest.fixture(scope="module", params=["right", "left"])
def side(request):
    """Give the side of the road."""
    return request.param


@pytest.fixture(scope="module")
def plan(side):
    """Give the plan."""
    return build_plan(side == "left")


@pytest.fixture(scope="module")
def built(plan, tmp_path_factory):
    """Give the town's network."""
    from stream.config import load_settings

    folder = tmp_path_factory.mktemp("demo_town")
    write_osm(plan, folder / "town.osm")
    write_zones(plan, folder / "zones.geojson", TIME_ZONE)
    return build_network(folder / "town.osm", folder / "zones.geojson", load_settings())


def test_osm_file_is_whole(plan, tmp_path):
    """Every way's nodes and every restriction's members are in the file, once."""
    write_osm(plan, tmp_path / "t.osm")
    root = ElementTree.parse(tmp_path / "t.osm").getroot()
    nodes = [n.get("id") for n in root.iter("node")]
    ways = {w.get("id"): [nd.get("ref") for nd in w.iter("nd")] for w in root.iter("way")}
    assert len(set(nodes)) == len(nodes)
    assert {ref for refs in ways.values() for ref in refs} == set(nodes)
    relations = list(root.iter("relation"))
    assert len(relations) == len(plan.banned)
    for relation in relations:
        member = {m.get("role"): m.get("ref") for m in relation.iter("member")}
        assert member["via"] in (ways[member["from"]][0], ways[member["from"]][-1])
        assert member["via"] in (ways[member["to"]][0], ways[member["to"]][-1])


def test_zones_are_closed_and_anticlockwise(plan, tmp_path):
    """Zone rings obey RFC 7946 section 3.1.6: closed, right-hand rule."""
    write_zones(plan, tmp_path / "z.geojson", TIME_ZONE)
    for feature in json.loads((tmp_path / "z.geojson").read_text())["features"]:
        ring = np.array(feature["geometry"]["coordinates"][0])
        assert (ring[0] == ring[-1]).all()
        x, y = (ring - ring[0]).T
        assert (x[:-1] * y[1:] - x[1:] * y[:-1]).sum() > 0


def test_network_sees_the_plan(plan, built, side):
    """Signals, roundabouts, restrictions, zones and the side of the road are built as drawn."""
    junction = built.tables["junction"]
    groups = len(set(plan.signals.values()))
    assert junction.filter(control="signals").height == groups
    assert junction.filter(kind="roundabout").height == 1
    assert junction.filter(kind="mini_roundabout").height == 1
    assert set(junction["driving_side"]) == {side}
    assert set(junction["zone"]) == {"centre", "outskirts"}
    assert set(junction["time_zone"]) == {TIME_ZONE}
    assert built.report["restrictions"]["built"] == len(plan.banned)
    classes = {way.tags["highway"] for way in plan.ways}
    assert {"motorway", "motorway_link", "primary", "residential"} <= classes


def test_roads_have_the_lengths_of_the_network(plan, built):
    """Drivers and network agree on the metres of open road, to a centimetre a road."""
    roads, streets = town_roads(plan), built.streets
    open_m = np.repeat(streets.road_length_m, 2)[streets.edge_open == 1].sum()
    assert roads.edge_m.sum() == pytest.approx(open_m, abs=0.01 * streets.road_length_m.size)


def test_no_banned_turn_is_open(plan):
    """No successor makes a turn that a restriction bans; `only` leaves one way on."""
    roads, ids = town_roads(plan), plan.node_ids()
    owner = np.repeat(np.arange(roads.edge_m.size), np.diff(roads.succ_start))
    turns = {
        (roads.node_id[roads.edge_from[e]], roads.node_id[roads.edge_to[e]], roads.node_id[roads.edge_to[f]])
        for e, f in zip(owner, roads.succ_edge, strict=True)
    }
    for (before, via, after), value in plan.banned.items():
        a, v, b = ids[plan.next_to(via, before)], ids[via], ids[plan.next_to(via, after)]
        if value.startswith("no_"):
            assert (a, v, b) not in turns
        else:
            assert {t for t in turns if t[:2] == (a, v)} == {(a, v, b)}


def test_greens_of_one_signal_do_not_meet(plan):
    """At a signal the two phases' greens lie apart by the lost time, twice a cycle."""
    roads = town_roads(plan)
    owner = np.repeat(np.arange(roads.edge_m.size), np.diff(roads.succ_start))
    is_signal = np.isin(roads.kind, (SIGNAL, SIGNAL_YIELD))
    node = roads.edge_to[owner]
    for n in set(node[is_signal]):
        rows = roads.rule[is_signal & (node == n)]
        cycle, phases = rows[0, 4], sorted({(round(r[6], 6), round(r[5], 6)) for r in rows})
        assert (rows[:, 4] == cycle).all()
        if len(phases) == 2:
            (o1, g1), (o2, g2) = phases
            assert o2 - o1 - g1 == pytest.approx(LOST_S, abs=1e-5) or o1 + cycle - o2 - g2 == pytest.approx(
                LOST_S, abs=1e-5
            )
            assert g1 + g2 + 2 * LOST_S == pytest.approx(cycle)


def test_mirror_swaps_turns_and_nothing_else():
    """Left-hand traffic turns the other way at every step and obeys the same rules."""
    right, left = town_roads(build_plan(False)), town_roads(build_plan(True))
    assert (right.succ_edge == left.succ_edge).all()
    turned = (right.succ_turn_deg + left.succ_turn_deg + 180.0) % 360.0 - 180.0
    assert np.abs(turned).max() < 0.01  # coordinates are rounded to 1e-7 degree, short steps are 12 m
    assert (right.kind == left.kind).all()
    assert (right.kind != NO_RULE).sum() > 200
