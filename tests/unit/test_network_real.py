"""Invariants over a whole real extract (Helsinki, © OpenStreetMap contributors, ODbL; tests/data/README.md).

They hold whatever the settings, so they are asked of several builds. Lengths, bearings and widths are
pyproj's geodesics; geometry is shapely's.
"""

import itertools
from collections import Counter, defaultdict
from pathlib import Path

import numpy as np
import polars as pl
import pytest
import shapely

from stream.config import Settings, load_settings
from stream.network import Built, build_network
from tests.sketch import GEOD

HELSINKI = Path(__file__).resolve().parent.parent / "data" / "helsinki.osm.pbf"
ROADS = [
    *("motorway", "trunk", "primary", "secondary", "tertiary", "unclassified", "residential"),
    *("living_street", "service", "pedestrian"),
]
SETTINGS = {
    "default": {},
    "service": {"network": {"classes": ROADS}},
    "one_by_one": {"network": {"cluster_m": 1, "cluster_max_m": 1}, "gates": {"entry_m": 200, "exit_m": 200}},
    "wide": {"network": {"cluster_m": 60, "cluster_max_m": 120, "dead_end_min_m": 0}},
}


@pytest.fixture(scope="module", params=list(SETTINGS))
def real(request: pytest.FixtureRequest) -> tuple[Built, Settings]:
    """Give the extract, built with some settings."""
    settings = load_settings(over=SETTINGS[request.param])
    return build_network(HELSINKI, None, settings), settings


def head(built: Built, edge: int) -> int:
    """Give the node where an edge ends."""
    s = built.streets
    return int(s.road_from[edge >> 1] if edge & 1 else s.road_to[edge >> 1])


def ahead_on_link(built: Built, edge: int) -> list[int]:
    """Give the edges of the same link that start where an edge ends, itself turned round excluded."""
    s = built.streets
    return [
        e
        for e in range(len(s.edge_open))
        if head(built, e ^ 1) == head(built, edge) and s.edge_link[e] == s.edge_link[edge] and e != edge ^ 1
    ]


def road_line(built: Built, road: int) -> shapely.LineString:
    """Give a road's shape in degrees."""
    s = built.streets
    span = slice(s.point_start[road], s.point_start[road + 1])
    return shapely.LineString(np.stack([s.point_lon_e7[span], s.point_lat_e7[span]], axis=1) * 1e-7)


def test_each_road_is_inside_one_junction_or_on_one_link(real: tuple[Built, Settings]) -> None:
    """Roads are shared out without rest, and links are as long as their roads."""
    built, _ = real
    s = built.streets
    link = s.edge_link[0::2]
    assert np.array_equal(link, s.edge_link[1::2])
    assert np.array_equal(link >= 0, s.road_inside < 0)
    metres = np.bincount(link[link >= 0], weights=s.road_length_m[link >= 0])
    np.testing.assert_allclose(metres, built.tables["link"]["length_m"].to_numpy(), rtol=1e-12)


def test_junctions_hold_the_nodes_where_roads_meet(real: tuple[Built, Settings]) -> None:
    """A node with three or more road ends is of a junction; one with fewer only where roads run inside."""
    s = real[0].streets
    degree = np.bincount(np.concatenate([s.road_from, s.road_to]), minlength=len(s.node_id))
    assert np.all(s.node_junction[degree >= 3] >= 0)
    inside = set(s.road_from[s.road_inside >= 0].tolist()) | set(s.road_to[s.road_inside >= 0].tolist())
    assert set(np.flatnonzero((degree < 3) & (s.node_junction >= 0)).tolist()) <= inside
    for road in np.flatnonzero(s.road_inside >= 0):
        ends = {int(s.node_junction[s.road_from[road]]), int(s.node_junction[s.road_to[road]])}
        assert ends == {int(s.road_inside[road])}


def test_no_cluster_is_wider_than_its_limit(real: tuple[Built, Settings]) -> None:
    """The greatest distance between two nodes of a cluster is at most `cluster_max_m`."""
    built, settings = real
    place = dict(
        zip(
            built.streets.node_id.tolist(),
            zip(built.streets.node_lon_e7 * 1e-7, built.streets.node_lat_e7 * 1e-7, strict=True),
            strict=True,
        )
    )
    widest = 0.0
    for nodes in built.tables["junction"].filter(pl.col("kind") == "cluster")["node_ids"]:
        for a, b in itertools.combinations(nodes, 2):
            widest = max(widest, GEOD.inv(*place[a], *place[b])[2])
    assert widest <= settings.network.cluster_max_m + 0.001


def test_successors_are_those_found_by_brute_force(real: tuple[Built, Settings]) -> None:
    """For every edge: all open edges that start at its end, ascending; turns within (-180, 180]."""
    s = real[0].streets
    starts = np.stack([s.road_from, s.road_to], axis=1).reshape(-1)
    ends = np.stack([s.road_to, s.road_from], axis=1).reshape(-1)
    for edge in range(len(ends)):
        expected = np.flatnonzero((starts == ends[edge]) & (s.edge_open == 1))
        span = slice(s.succ_start[edge], s.succ_start[edge + 1])
        assert expected.tolist() == s.succ_edge[span].tolist()
        assert np.all(s.succ_turn_deg[span][s.succ_edge[span] == edge ^ 1] == 180.0)
    assert s.succ_turn_deg.min() > -180.0
    assert s.succ_turn_deg.max() <= 180.0


def test_turn_angles_are_the_map_s(real: tuple[Built, Settings]) -> None:
    """A turn is the bearing out minus the bearing in over the first 15 m of either road (pyproj)."""
    built, _ = real
    s = built.streets

    def leaving(edge: int) -> float:
        points = np.array(road_line(built, edge >> 1).coords)[:: -1 if edge & 1 else 1]
        x, y = along(points, min(15.0, float(s.road_length_m[edge >> 1])))
        return float(GEOD.inv(*points[0], x, y)[0])

    bearing = [leaving(e) for e in range(len(s.edge_open))]
    for edge in range(len(s.edge_open)):
        for k in range(s.succ_start[edge], s.succ_start[edge + 1]):
            expected = (bearing[s.succ_edge[k]] - bearing[edge ^ 1] - 180.0) % 360.0
            assert (s.succ_turn_deg[k] - expected + 180.0) % 360.0 - 180.0 == pytest.approx(0.0, abs=0.002)


def along(points: np.ndarray, metres: float) -> tuple[float, float]:
    """Give the place at a distance along a line, by geodesics."""
    for a, b in itertools.pairwise(points):
        azimuth, _, step = GEOD.inv(*a, *b)
        if metres <= step:
            lon, lat, _ = GEOD.fwd(*a, azimuth, metres)
            return lon, lat
        metres -= step
    return float(points[-1][0]), float(points[-1][1])


def test_gates_stand_at_their_distance_before_and_after_the_mouth(real: tuple[Built, Settings]) -> None:
    """An open way along the link runs from gate to mouth (exits: back from it) in exactly its distance."""
    built, _ = real
    s, arm = built.streets, built.tables["arm"]
    mouth = arm["mouth_node_id"].to_list()
    found: Counter[str] = Counter()
    for edge in range(len(s.edge_open)):
        for kind, arms, at, wanted in (
            ("entry", s.entry_gate_arm, s.entry_gate_at_m, s.arm_entry_gate_m),
            ("exit", s.exit_gate_arm, s.exit_gate_at_m, s.arm_exit_gate_m),
        ):
            if arms[edge] < 0:
                continue
            found[kind] += 1
            length = float(s.road_length_m[edge >> 1])
            assert 0 <= at[edge] <= length
            # An exit gate is walked back from, along the partners of the edges driven.
            step = edge if kind == "entry" else edge ^ 1
            gone = length - float(at[edge]) if kind == "entry" else float(at[edge])
            while s.node_junction[head(built, step)] < 0:
                assert s.edge_open[step if kind == "entry" else step ^ 1] == 1
                (step,) = ahead_on_link(built, step)
                gone += float(s.road_length_m[step >> 1])
            assert s.edge_open[step if kind == "entry" else step ^ 1] == 1
            assert s.node_id[head(built, step)] == mouth[arms[edge]]
            assert gone == pytest.approx(float(wanted[arms[edge]]), abs=1e-9)
    assert found["entry"] == (arm["entry_gate_m"] > 0).sum() > 100
    assert found["exit"] == (arm["exit_gate_m"] > 0).sum() > 100


def test_gates_keep_their_order_on_each_edge_and_link(real: tuple[Built, Settings]) -> None:
    """The exit gate behind comes before the entry gate ahead, and no gate passes half of its link."""
    built, _ = real
    s, link, arm = built.streets, built.tables["link"], built.tables["arm"]
    both = (s.entry_gate_arm >= 0) & (s.exit_gate_arm >= 0)
    assert np.all(s.exit_gate_at_m[both] < s.entry_gate_at_m[both])
    for name in ("entry_gate_m", "exit_gate_m"):
        assert (arm[name] <= arm["link_m"] / 2).all()
    for column in ("middle_fwd_m", "middle_back_m"):
        assert (link[column].drop_nulls() > 0).all()
        assert len(link[column].drop_nulls()) > 20


def test_gate_lines_cross_their_own_road_only(real: tuple[Built, Settings]) -> None:
    """A gate's line meets its own link at the gate and no road that starts beyond half a metre from it."""
    built, _ = real
    s = built.streets
    lines = [road_line(built, road) for road in range(len(s.road_from))]
    tree = shapely.STRtree(lines)
    n = 0
    for row in built.tables["arm"].to_dicts():
        for kind in ("entry", "exit"):
            if row[f"{kind}_lon1"] is None:
                continue
            n += 1
            across = shapely.LineString([(row[f"{kind}_lon{i}"], row[f"{kind}_lat{i}"]) for i in (1, 2)])
            met = tree.query(across, predicate="intersects")
            own = [r for r in met if s.edge_link[2 * r] == row["link_ix"]]
            near = tree.query(across, predicate="dwithin", distance=1e-6)
            assert any(s.edge_link[2 * r] == row["link_ix"] for r in near), row
            assert set(met.tolist()) == set(own), row
    assert n > 200


def test_arms_lie_clockwise_by_their_bearings(real: tuple[Built, Settings]) -> None:
    """Numbers rise with the bearings, which run from 5 m to 30 m beyond the mouth along the link (pyproj)."""
    built, _ = real
    s = built.streets
    by_junction: dict[int, list[tuple[int, float]]] = defaultdict(list)
    checked = 0
    for row in built.tables["arm"].to_dicts():
        by_junction[row["junction_ix"]].append((row["arm"], row["bearing_deg"]))
        roads = np.flatnonzero(s.edge_link[0::2] == row["link_ix"])
        if len(roads) == 1 and row["link_m"] > 31 and s.road_from[roads[0]] != s.road_to[roads[0]]:
            points = np.array(road_line(built, int(roads[0])).coords)
            if s.node_id[s.road_from[roads[0]]] != row["mouth_node_id"]:
                points = points[::-1]
            azimuth = GEOD.inv(*along(points, 5.0), *along(points, 30.0))[0]
            assert (row["bearing_deg"] - azimuth + 180) % 360 - 180 == pytest.approx(0, abs=0.002)
            checked += 1
    assert checked > 100
    for arms in by_junction.values():
        numbers, bearings = zip(*sorted(arms), strict=True)
        assert list(numbers) == list(range(len(arms)))
        assert list(bearings) == sorted(bearings)


def test_movements_join_arms_of_one_junction(real: tuple[Built, Settings]) -> None:
    """In by an inbound arm, out by an outbound one; the path inside is no shorter than the crow flies."""
    built, _ = real
    arm = built.tables["arm"].to_dicts()
    place = {
        int(i): (x * 1e-7, y * 1e-7)
        for i, x, y in zip(
            built.streets.node_id, built.streets.node_lon_e7, built.streets.node_lat_e7, strict=True
        )
    }
    rows = built.tables["movement"].to_dicts()
    assert len({(r["arm_in_ix"], r["arm_out_ix"]) for r in rows}) == len(rows) > 300
    for row in rows:
        came, goes = arm[row["arm_in_ix"]], arm[row["arm_out_ix"]]
        assert came["junction_ix"] == goes["junction_ix"] == row["junction_ix"]
        assert came["is_inbound"]
        assert goes["is_outbound"]
        expected = (goes["bearing_deg"] - came["bearing_deg"] - 180.0) % 360.0
        assert (row["turn_deg"] - expected + 180.0) % 360.0 - 180.0 == pytest.approx(0.0, abs=1e-9)
        crow = GEOD.inv(*place[came["mouth_node_id"]], *place[goes["mouth_node_id"]])[2]
        assert row["inside_m"] >= crow - 0.001


def test_banned_movements_at_single_nodes_are_the_banned_successors(real: tuple[Built, Settings]) -> None:
    """Where a junction is one node, a movement is banned exactly where the edge is."""
    built, _ = real
    s = built.streets
    arm = built.tables["arm"].to_dicts()
    single = set(built.tables["junction"].filter(pl.col("n_nodes") == 1)["junction_ix"].to_list())
    out_edge = {}
    for row in arm:
        for road in np.flatnonzero(s.edge_link[0::2] == row["link_ix"]).tolist():
            for edge in (2 * road, 2 * road + 1):
                start = head(built, edge ^ 1)
                if s.node_id[start] == row["mouth_node_id"]:
                    out_edge.setdefault(row["arm_ix"], []).append(edge)
    banned = {
        (e, int(s.succ_edge[k]))
        for e in range(len(s.edge_open))
        for k in range(s.succ_start[e], s.succ_start[e + 1])
        if s.succ_banned[k]
    }
    n = 0
    for row in built.tables["movement"].to_dicts():
        came, goes = out_edge[row["arm_in_ix"]], out_edge[row["arm_out_ix"]]
        if row["junction_ix"] in single and len(came) == len(goes) == 1:
            assert row["is_banned"] == ((came[0] ^ 1, goes[0]) in banned)
            n += row["is_banned"]
    assert n > 0


def test_report_adds_up(real: tuple[Built, Settings]) -> None:
    """Gates built and missing account for every arm, kinds for every junction, controls likewise."""
    built, _ = real
    n_arms, n_junctions = len(built.tables["arm"]), len(built.tables["junction"])
    for kind in ("entry", "exit"):
        gates = {k: n for k, n in built.report["gates"].items() if k.startswith(kind)}
        assert sum(n for k, n in gates.items() if not k.endswith("shortened")) == n_arms
    kinds = ("node", "cluster", "roundabout", "circular", "mini_roundabout")
    assert sum(built.report["junctions"].get(k, 0) for k in kinds) == n_junctions
    assert sum(built.report["controls"].values()) == n_junctions
    assert built.report["movements"]["banned"] == built.tables["movement"]["is_banned"].sum()
