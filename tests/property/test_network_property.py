"""Random street plans: what holds for every network, and what must not change it.

The plans are drawn straight as road ways, without a file, so that many can be tried. The plain twins here
are lists and loops; lengths and bearings are pyproj's.
"""

import itertools
from collections import Counter
from typing import Any

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from pyproj import Geod

from stream.config import load_settings
from stream.network import Built
from stream.network.built import assemble
from stream.network.graph import join
from stream.network.model import NONE
from stream.network.raw import ALONG, RawRoads, Restriction

GEOD = Geod(ellps="WGS84")
SETTINGS = load_settings(over={"network": {"classes": ["primary", "residential"], "time_zone": "UTC"}})
LON0, LAT0 = 24.94, 60.17
STEP_E7 = (2_000, 1_000)  # about 11 m east, 11 m north

Way = tuple[list[int], int, int, float]  # nodes, class, open, limit


@st.composite
def plans(draw: st.DrawFn) -> tuple[list[tuple[int, int]], list[Way], list[Restriction]]:
    """Draw nodes on a jittered grid, ways over some of them, and restrictions among those."""
    cells = st.tuples(st.integers(0, 25), st.integers(0, 25))
    nodes = draw(st.lists(cells, min_size=4, max_size=14, unique=True))
    n_ways = draw(st.integers(1, 12))
    ways: list[Way] = []
    for _ in range(n_ways):
        refs = draw(st.lists(st.integers(0, len(nodes) - 1), min_size=2, max_size=5))
        refs = [a for i, a in enumerate(refs) if i == 0 or a != refs[i - 1]]
        if len(refs) >= 2:
            limit = draw(st.sampled_from([float("nan"), 30.0, 50.0]))
            ways.append((refs, draw(st.integers(0, 1)), draw(st.integers(1, 3)), limit))
    if not ways:
        ways = [([0, 1, 2], 0, 3, 50.0)]
    restrictions = []
    for k in range(draw(st.integers(0, 3))):
        came, goes = draw(st.integers(0, len(ways) - 1)), draw(st.integers(0, len(ways) - 1))
        via = draw(st.sampled_from(ways[came][0]))
        flags = draw(st.tuples(st.booleans(), st.booleans(), st.booleans()))
        restrictions.append(Restriction(k, *flags, (came + 1,), via + 1, (), (goes + 1,)))
    return nodes, ways, restrictions


def raw_roads(
    nodes: list[tuple[int, int]], ways: list[Way], restrictions: list[Restriction], node_order: list[int]
) -> RawRoads:
    """Lay a plan out as a reader would; node k has id k + 1, way k id k + 1."""
    position = {node: at for at, node in enumerate(node_order)}
    used = sorted({n for refs, *_ in ways for n in refs}, key=lambda n: position[n])
    index = {n: i for i, n in enumerate(used)}
    jitter = np.random.default_rng(7).integers(-200, 200, (len(nodes), 2))
    place = [
        (round(LON0 * 1e7) + x * STEP_E7[0] + int(dx), round(LAT0 * 1e7) + y * STEP_E7[1] + int(dy))
        for (x, y), (dx, dy) in zip(nodes, jitter, strict=True)
    ]
    limits = np.array([limit for *_, limit in ways], np.float32)
    roads = RawRoads(
        class_names=SETTINGS.network.classes,
        way_id=np.arange(1, len(ways) + 1, dtype=np.int64),
        way_class=np.array([c for _, c, _, _ in ways], np.uint8),
        way_open=np.array([o for _, _, o, _ in ways], np.uint8),
        way_ring=np.zeros(len(ways), np.uint8),
        way_limit_along_kmh=limits,
        way_limit_against_kmh=limits,
        ref_start=np.cumsum([0, *(len(refs) for refs, *_ in ways)]).astype(np.int64),
        ref_node=np.array([index[n] for refs, *_ in ways for n in refs], np.int32),
        node_id=np.array([n + 1 for n in used], np.int64),
        node_lon_e7=np.array([place[n][0] for n in used], np.int32),
        node_lat_e7=np.array([place[n][1] for n in used], np.int32),
        node_sign=np.zeros(len(used), np.uint8),
        restrictions=restrictions,
    )
    roads.check()
    return roads


def points(built: Built, road: int) -> list[tuple[int, int]]:
    """Give the places along a road."""
    s = built.streets
    span = slice(s.point_start[road], s.point_start[road + 1])
    return list(zip(s.point_lon_e7[span].tolist(), s.point_lat_e7[span].tolist(), strict=True))


def directed_steps(built: Built) -> Counter[tuple[tuple[int, int], tuple[int, int], int, float]]:
    """Count the open steps between places, with class and speed."""
    s = built.streets
    found: Counter[tuple[tuple[int, int], tuple[int, int], int, float]] = Counter()
    for edge in np.flatnonzero(s.edge_open).tolist():
        run = points(built, edge >> 1)[:: -1 if edge & 1 else 1]
        code, speed = int(s.road_class[edge >> 1]), round(float(s.edge_speed_mps[edge]) * 3.6, 3)
        found.update((a, b, code, speed) for a, b in itertools.pairwise(run))
    return found


def moves(built: Built) -> set[tuple[Any, ...]]:
    """Give the movements by lasting ids, angles and paths rounded."""
    arm = built.tables["arm"].to_dicts()

    def name(ix: int) -> tuple[int, int, int]:
        row = arm[ix]
        return row["way_id"], row["mouth_node_id"], round(row["bearing_deg"], 3)

    return {
        (r["junction_id"], name(r["arm_in_ix"]), name(r["arm_out_ix"]), r["is_banned"], r["is_timed"])
        for r in built.tables["movement"].to_dicts()
    }


@settings(max_examples=60, deadline=None)
@given(plans())
def test_plan_is_kept_step_by_step(plan: tuple[Any, ...]) -> None:
    """Every step of every way stays, with its directions, class and speed; nothing is added."""
    nodes, ways, restrictions = plan
    roads = raw_roads(nodes, ways, restrictions, list(range(len(nodes))))
    place = {
        int(i): (int(x), int(y))
        for i, x, y in zip(roads.node_id, roads.node_lon_e7, roads.node_lat_e7, strict=True)
    }
    expected: Counter[tuple[tuple[int, int], tuple[int, int], int, float]] = Counter()
    for refs, code, opened, limit in ways:
        default = SETTINGS.network.default_kmh[SETTINGS.network.classes[code]]
        kmh = default if np.isnan(limit) else limit
        for a, b in itertools.pairwise(place[n + 1] for n in refs):
            if opened & ALONG:
                expected[a, b, code, kmh] += 1
            if opened & ~ALONG:
                expected[b, a, code, kmh] += 1
    assert directed_steps(assemble(roads, None, SETTINGS)) == expected


@settings(max_examples=60, deadline=None)
@given(plans())
def test_structure_holds_together(plan: tuple[Any, ...]) -> None:
    """Meeting nodes are of junctions, roads inside or on links, gates in order, successors complete."""
    nodes, ways, restrictions = plan
    built = assemble(raw_roads(nodes, ways, restrictions, list(range(len(nodes)))), None, SETTINGS)
    s = built.streets
    degree = np.bincount(np.concatenate([s.road_from, s.road_to]), minlength=len(s.node_id))
    assert np.all(s.node_junction[degree >= 3] >= 0)
    assert np.all((s.edge_link[0::2] >= 0) == (s.road_inside == NONE))
    starts = np.stack([s.road_from, s.road_to], axis=1).reshape(-1)
    ends = np.stack([s.road_to, s.road_from], axis=1).reshape(-1)
    for edge in range(len(ends)):
        after = np.flatnonzero((starts == ends[edge]) & (s.edge_open == 1))
        assert after.tolist() == s.succ_edge[s.succ_start[edge] : s.succ_start[edge + 1]].tolist()
    both = (s.entry_gate_arm >= 0) & (s.exit_gate_arm >= 0)
    assert np.all(s.exit_gate_at_m[both] < s.entry_gate_at_m[both])
    length = np.repeat(s.road_length_m, 2)
    assert np.all((s.entry_gate_at_m >= 0) & (s.entry_gate_at_m <= length))
    assert np.all((s.exit_gate_at_m >= 0) & (s.exit_gate_at_m <= length))
    arm = built.tables["arm"]
    assert (
        sorted(s.entry_gate_arm[s.entry_gate_arm >= 0].tolist())
        == arm.filter(arm["entry_gate_m"] > 0)["arm_ix"].to_list()
    )
    assert (
        sorted(s.exit_gate_arm[s.exit_gate_arm >= 0].tolist())
        == arm.filter(arm["exit_gate_m"] > 0)["arm_ix"].to_list()
    )


@settings(max_examples=40, deadline=None)
@given(plans(), st.randoms(use_true_random=False))
def test_order_of_nodes_changes_no_junction(plan: tuple[Any, ...], rng: Any) -> None:
    """Junctions, arms and movements go by ids and places, not by the order of nodes in the file."""
    nodes, ways, restrictions = plan
    there = list(range(len(nodes)))
    shuffled = there.copy()
    rng.shuffle(shuffled)
    one = assemble(raw_roads(nodes, ways, restrictions, there), None, SETTINGS).tables
    other = assemble(raw_roads(nodes, ways, restrictions, shuffled), None, SETTINGS).tables
    for name in ("junction", "arm", "link", "movement"):
        assert one[name].equals(other[name]), name


@settings(max_examples=40, deadline=None)
@given(plans(), st.integers(0, 11))
def test_drawing_direction_changes_no_movement(plan: tuple[Any, ...], which: int) -> None:
    """A way drawn the other way round, its one-way state with it, gives the same movements."""
    nodes, ways, restrictions = plan
    refs, code, opened, limit = ways[which % len(ways)]
    flipped = [*ways]
    flipped[which % len(ways)] = (refs[::-1], code, (opened & 1) << 1 | opened >> 1, limit)
    order = list(range(len(nodes)))
    one = assemble(raw_roads(nodes, ways, restrictions, order), None, SETTINGS)
    other = assemble(raw_roads(nodes, flipped, restrictions, order), None, SETTINGS)
    assert one.tables["junction"].equals(other.tables["junction"])
    assert directed_steps(one) == directed_steps(other)
    assert {(m[0], m[1][:2], m[2][:2], *m[3:]) for m in moves(one)} == {
        (m[0], m[1][:2], m[2][:2], *m[3:]) for m in moves(other)
    }


@settings(max_examples=80, deadline=None)
@given(plans())
def test_lengths_are_the_geodesics(plan: tuple[Any, ...]) -> None:
    """Kernels against pyproj: road lengths within 0.1 mm a step."""
    nodes, ways, restrictions = plan
    built = assemble(raw_roads(nodes, ways, restrictions, list(range(len(nodes)))), None, SETTINGS)
    s = built.streets
    for road in range(len(s.road_from)):
        run = [(x * 1e-7, y * 1e-7) for x, y in points(built, road)]
        expected = sum(GEOD.inv(*a, *b)[2] for a, b in itertools.pairwise(run))
        assert abs(s.road_length_m[road] - expected) <= 1e-4 * len(run)


@settings(max_examples=200, deadline=None)
@given(st.lists(st.tuples(st.integers(0, 9), st.integers(0, 9)), min_size=1, max_size=14))
def test_chains_take_each_item_once_and_go_as_far_as_they_can(pairs: list[tuple[int, int]]) -> None:
    """Chains share out the items, hang together, and stop only where they must (plain twin: degrees)."""
    tail, head = (np.array(side, np.int32) for side in zip(*pairs, strict=True))
    joinable = np.bincount(np.concatenate([tail, head]), minlength=10) == 2
    chains = join(tail, head, joinable, 10)
    assert sorted(chains.item.tolist()) == list(range(len(pairs)))
    inner: Counter[int] = Counter()
    for c in range(len(chains.start) - 1):
        span = slice(chains.start[c], chains.start[c + 1])
        run = [
            (head[i], tail[i]) if turned else (tail[i], head[i])
            for i, turned in zip(chains.item[span], chains.against[span], strict=True)
        ]
        assert all(a[1] == b[0] for a, b in itertools.pairwise(run))
        inner.update(int(b[0]) for _, b in itertools.pairwise(run))
        lowest = int(np.argmin(chains.item[span]))
        assert chains.against[span][lowest] == 0
        is_closed = run[0][0] == run[-1][1]
        assert is_closed or not (joinable[run[0][0]] or joinable[run[-1][1]])
        if is_closed and joinable[run[0][0]]:
            inner[int(run[0][0])] += 1
    assert set(inner) == set(np.flatnonzero(joinable).tolist())
    assert set(inner.values()) <= {1}
