"""The street index: packed segments, cells to find them by, and edges with what following needs.

One index serves any place on earth: cells are counted in integers of 1e-7 degree, their width in
longitude is set by row, and metres are made locally by the ellipsoid's scale at the row.

A cell is about 32 m wide; 32 x 32 cells are a tile; only tiles near roads are kept, found by hashing.
"""

import math
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from stream.geodesy import offset_m, wrap_e7
from stream.kernel import kernel
from stream.network.cells import HALF_LON_E7, TILE, find_tiles, row_tables, spread_kernel
from stream.network.model import F64, I32, I64, NONE, Streets

LONGEST_SEGMENT_M = 300.0  # longer ones are cut, so that flat metres hold (METHODS.md section 3)

SEGMENT = np.dtype(
    [
        ("lon", np.int32),  # start, 1e-7 degree
        ("lat", np.int32),
        ("ux", np.float32),  # unit vector, east and north
        ("uy", np.float32),
        ("length", np.float32),  # m
        ("at", np.float32),  # chainage of its start along the drawing, m
        ("road", np.int32),
        ("spare", np.int32),
    ]
)
EDGE = np.dtype(
    [
        ("length", np.float64),  # m
        ("entry_at", np.float64),  # chainage of the entry gate, -1 none
        ("exit_at", np.float64),
        ("inside_from", np.float32),  # from this chainage on the edge lies before a mouth, past its gate
        ("inside_to", np.float32),  # up to this chainage it lies behind a mouth, before its gate
        ("speed", np.float32),  # m/s, limit or class default
        ("entry_arm", np.int32),
        ("exit_arm", np.int32),
        ("succ", np.int32),  # first successor
        ("n_succ", np.int32),
        ("segment", np.int32),  # first segment of the road
        ("n_segment", np.int32),
        ("to_mouth", np.float32),  # metres from the edge's end to the mouth ahead on its link; -1 none
        ("from_junction", np.int32),  # junction of the node it starts at; -1 none
        ("is_inside", np.int32),  # 1: within a junction
        ("is_open", np.int32),
    ],
    align=True,
)


class StreetIndex(NamedTuple):
    """Arrays that detection shares; never changed after `build_index`."""

    segment: NDArray[Any]  # SEGMENT[n]
    edge: NDArray[Any]  # EDGE[2R]
    succ_edge: I32
    succ_cost: NDArray[np.float32]  # log units
    arm_junction: I32
    arm_entry_m: F64
    arm_exit_m: F64
    row_first: int  # first row of cells that has a scale
    row_scale: F64  # [rows, 2] metres per 1e-7 degree of longitude, of latitude
    tile_row_first: int
    cell_width: I64  # by tile row, 1e-7 degree of longitude
    hash_key: I64  # open addressing; -1 empty
    hash_tile: I32  # tile number; -1 a tile in the area without roads
    cell_start: I32  # [tiles * 1024 + 1]
    cell_segment: I32


@kernel
def fill_segments_kernel(
    point_start: I32, lon_e7: I32, lat_e7: I32, road_length: F64, segment_out: Any
) -> int:
    """Cut roads into segments; with an empty `segment_out`, only count them.

    Chainages are scaled so that a road's segments end at its stated length.
    """
    n = 0
    writing = segment_out.shape[0] > 0
    for r in range(road_length.shape[0]):
        total = 0.0
        for p in range(point_start[r], point_start[r + 1] - 1):
            dx, dy = offset_m(lon_e7[p], lat_e7[p], lon_e7[p + 1], lat_e7[p + 1])
            total += math.sqrt(dx * dx + dy * dy)
        scale = road_length[r] / total if total > 0.0 else 1.0
        at = 0.0
        for p in range(point_start[r], point_start[r + 1] - 1):
            dx, dy = offset_m(lon_e7[p], lat_e7[p], lon_e7[p + 1], lat_e7[p + 1])
            length = math.sqrt(dx * dx + dy * dy)
            if length <= 0.0:
                continue
            pieces = math.ceil(length / LONGEST_SEGMENT_M)
            if writing:
                d_lon = wrap_e7(lon_e7[p + 1] - np.int64(lon_e7[p]))
                d_lat = lat_e7[p + 1] - lat_e7[p]
                for k in range(pieces):
                    s = segment_out[n + k]
                    lon = lon_e7[p] + d_lon * k // pieces
                    if lon >= HALF_LON_E7:
                        lon -= 2 * HALF_LON_E7
                    elif lon < -HALF_LON_E7:
                        lon += 2 * HALF_LON_E7
                    s.lon = lon
                    s.lat = lat_e7[p] + d_lat * k // pieces
                    s.ux = dx / length
                    s.uy = dy / length
                    s.length = length * scale / pieces
                    s.at = at + length * scale * k / pieces
                    s.road = r
            at += length * scale
            n += pieces
    return n


def _successor_costs(streets: Streets, turn: float, reverse: float, banned: float) -> NDArray[np.float32]:
    """Price each successor in log units: turn angle beyond 20 degrees, reversal, restriction."""
    angle = np.abs(streets.succ_turn_deg.astype(np.float64))
    cost = turn * np.maximum(angle - 20.0, 0.0) / 70.0
    source = np.repeat(np.arange(len(streets.succ_start) - 1), np.diff(streets.succ_start))
    cost[streets.succ_edge == (source ^ 1)] = reverse
    return (cost + banned * streets.succ_banned).astype(np.float32)


def _edges(streets: Streets, segment: NDArray[Any]) -> NDArray[Any]:
    """Pack what following needs of each edge into one record."""
    n = 2 * len(streets.road_length_m)
    edge = np.zeros(n, EDGE)
    road = np.arange(n) >> 1
    edge["length"] = streets.road_length_m[road]
    edge["entry_arm"], edge["exit_arm"] = streets.entry_gate_arm, streets.exit_gate_arm
    edge["entry_at"] = np.where(streets.entry_gate_arm >= 0, streets.entry_gate_at_m, -1.0)
    edge["exit_at"] = np.where(streets.exit_gate_arm >= 0, streets.exit_gate_at_m, -1.0)
    edge["speed"] = streets.edge_speed_mps
    edge["succ"] = streets.succ_start[:-1]
    edge["n_succ"] = np.diff(streets.succ_start)
    first = np.searchsorted(segment["road"], np.arange(n // 2 + 1))
    edge["segment"], edge["n_segment"] = first[:-1][road], np.diff(first)[road]
    edge["inside_from"] = np.where(edge["entry_arm"] >= 0, edge["entry_at"], np.inf)
    edge["inside_to"] = np.where(edge["exit_arm"] >= 0, edge["exit_at"], -1.0)
    edge["to_mouth"] = -1.0
    inside = streets.road_inside[road] >= 0
    edge["inside_from"][inside] = 0.0
    edge["inside_to"][inside] = np.inf
    edge["is_inside"], edge["is_open"] = inside, streets.edge_open
    walk_links_kernel(
        streets.road_to, streets.road_from, streets.node_junction, *_roads_by_node(streets), edge
    )
    return edge


@kernel
def walk_links_kernel(
    road_to: I32, road_from: I32, node_junction: I32, end_start: I32, end_road: I32, edge: Any
) -> None:
    """Walk back from each mouth along its link: metres to the mouth, and what lies between gate and mouth.

    Parameters
    ----------
    end_start, end_road : int32    roads by node, compressed rows
    edge : EDGE[2R]                `to_mouth`, `inside_from`, `inside_to`, `from_junction` are written
    """
    for e in range(edge.shape[0]):
        head = road_from[e >> 1] if e & 1 else road_to[e >> 1]
        tail = road_to[e >> 1] if e & 1 else road_from[e >> 1]
        edge[e].from_junction = node_junction[tail]
        if node_junction[head] < 0 or edge[e].is_inside:
            continue
        has_entry = False
        has_exit = False
        for turn in range(2):  # first look for the gates, then mark what lies this side of them
            metres = 0.0
            at = e
            before_entry = turn == 1 and has_entry
            before_exit = turn == 1 and has_exit
            for _ in range(100_000):
                if turn == 1:
                    edge[at].to_mouth = metres
                    if before_entry and edge[at].entry_arm == NONE:
                        edge[at].inside_from = 0.0
                    if before_exit and edge[at ^ 1].exit_arm == NONE:
                        edge[at ^ 1].inside_to = math.inf
                metres += edge[at].length
                if edge[at].entry_arm != NONE:
                    has_entry = True
                    before_entry = False
                if edge[at ^ 1].exit_arm != NONE:
                    has_exit = True
                    before_exit = False
                node = road_to[at >> 1] if at & 1 else road_from[at >> 1]
                if node_junction[node] >= 0 or end_start[node + 1] - end_start[node] != 2:
                    break
                other = end_road[end_start[node]]
                if other == at >> 1:
                    other = end_road[end_start[node] + 1]
                    if other == at >> 1:
                        break
                at = 2 * other if road_to[other] == node else 2 * other + 1
                if at == e:
                    break


def _roads_by_node(streets: Streets) -> tuple[I32, I32]:
    """Give the roads at each node as compressed rows (a loop stands twice)."""
    ends = np.concatenate([streets.road_from, streets.road_to])
    order = np.argsort(ends, kind="stable")
    start = np.zeros(len(streets.node_id) + 1, np.int32)
    np.cumsum(np.bincount(ends, minlength=len(streets.node_id)), out=start[1:])
    return start, (order % len(streets.road_from)).astype(np.int32)


def build_index(
    streets: Streets, radius_m: float, turn_cost: float, reverse_cost: float, banned_cost: float
) -> StreetIndex:
    """Build the index that detection searches.

    Parameters
    ----------
    streets
        Not changed.
    radius_m
        How far from a road a ping may lie and still find it.
    turn_cost, reverse_cost, banned_cost
        Log units of a 90 degree turn, of a reversal, of a movement that a restriction forbids.
    """
    points = (streets.point_start, streets.point_lon_e7, streets.point_lat_e7, streets.road_length_m)
    segment = np.zeros(fill_segments_kernel(*points, np.empty(0, SEGMENT)), SEGMENT)
    fill_segments_kernel(*points, segment)
    row_first, scale, tile_row_first, width = row_tables(streets.point_lat_e7)
    hash_key, hash_tile, n_tiles = find_tiles(segment, radius_m, tile_row_first, width)
    count = np.zeros(n_tiles * TILE * TILE + 1, np.int32)
    none64, none32 = np.empty(0, np.int64), np.empty(0, np.int32)
    args = (segment, radius_m, tile_row_first, width, hash_key, hash_tile)
    n = spread_kernel(*args, count, none32, none64, 1)
    start = np.zeros(len(count), np.int32)
    np.cumsum(count[:-1], out=start[1:])
    cell_segment = np.empty(n, np.int32)
    spread_kernel(*args, start.copy(), cell_segment, none64, 2)
    return StreetIndex(
        segment,
        _edges(streets, segment),
        streets.succ_edge,
        _successor_costs(streets, turn_cost, reverse_cost, banned_cost),
        streets.arm_junction,
        streets.arm_entry_gate_m,
        streets.arm_exit_gate_m,
        row_first,
        scale,
        tile_row_first,
        width,
        hash_key,
        hash_tile,
        start,
        cell_segment,
    )
