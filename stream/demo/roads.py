"""The roads that drivers know: directed edges with shape, speed and what rules the end of each.

Built from an invented plan (`town`) or from any built network (`roads_of`). Metres are the network's own.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stream.demo.holds import BACK_M, FIXED, FLOW, GAP_S
from stream.network.model import Streets

F64 = NDArray[np.float64]
I32 = NDArray[np.int32]
I64 = NDArray[np.int64]


@dataclass(frozen=True)
class Roads:
    """Directed roads; N nodes, E edges, P shape points, S successors.

    Attributes
    ----------
    node_id : int64[N];  node_lon, node_lat : float64[N], degrees
    edge_from, edge_to : int32[E];  edge_m : float64[E];  edge_mps : float64[E];  edge_way : int64[E]
    is_open : uint8[E]             1 where trips may start and end
    point_start : int64[E + 1];  point_lon, point_lat, point_m : float64[P]   chainage within the edge
    succ_start : int32[E + 1];  succ_edge : int32[S];  succ_turn_deg : float64[S]
    kind : int8[S];  rule : float64[S, 8]     see `holds`
    """

    node_id: I64
    node_lon: F64
    node_lat: F64
    edge_from: I32
    edge_to: I32
    edge_m: F64
    edge_mps: F64
    edge_way: I64
    is_open: NDArray[np.uint8]
    point_start: I64
    point_lon: F64
    point_lat: F64
    point_m: F64
    succ_start: I32
    succ_edge: I32
    succ_turn_deg: F64
    kind: NDArray[np.int8]
    rule: F64


def metres_per_degree(lat_deg: F64) -> tuple[F64, F64]:
    """Give metres per degree of longitude and latitude (METHODS.md section 3), element by element."""
    e2 = 0.0066943799901413
    sine = np.sin(np.radians(lat_deg))
    w = 1.0 - e2 * sine * sine
    n = 6_378_137.0 / np.sqrt(w)
    return np.radians(n * np.cos(np.radians(lat_deg))), np.radians(n * (1.0 - e2) / w)


def chainages(start: I64, lon: F64, lat: F64, length_m: F64) -> F64:
    """Give the chainage of each shape point within its line, scaled so that the last is length_m."""
    k_lon, k_lat = metres_per_degree((lat[1:] + lat[:-1]) / 2.0)
    turn = (np.diff(lon) + 180.0) % 360.0 - 180.0
    steps = np.concatenate([[0.0], np.hypot(turn * k_lon, np.diff(lat) * k_lat)])
    run = np.cumsum(steps)
    first = start[:-1]
    count = np.diff(start)
    at = run - np.repeat(run[first], count)
    raw = at[start[1:] - 1]
    factor = np.where(raw > 0.0, length_m / np.where(raw > 0.0, raw, 1.0), 1.0)
    at = at * np.repeat(factor, count)
    at[start[1:] - 1] = length_m
    return np.asarray(at, np.float64)


def _both_ways(streets: Streets) -> tuple[I64, F64, F64]:
    """Lay the shape of every road out twice, along the drawing and against it, as edges are numbered."""
    count = np.diff(streets.point_start).astype(np.int64)
    start = np.concatenate([[0], np.cumsum(np.repeat(count, 2))]).astype(np.int64)
    first = np.repeat(streets.point_start[:-1].astype(np.int64), 2)
    size = np.repeat(count, 2)
    within = np.arange(start[-1]) - np.repeat(start[:-1], size)
    is_back = np.repeat(np.arange(size.size) % 2 == 1, size)
    source = np.repeat(first, size) + np.where(is_back, np.repeat(size, size) - 1 - within, within)
    lon = np.asarray(streets.point_lon_e7[source] * 1e-7, np.float64)
    return start, lon, np.asarray(streets.point_lat_e7[source] * 1e-7, np.float64)


def roads_of(streets: Streets, stop_share: float, wait_max_s: float, back_max_m: float) -> Roads:
    """Turn a built network into drivers' roads, with random stops ahead of its junctions.

    One-way and banned movements are honoured; reversals are left out (dead ends end a trip).
    """
    n_edges = streets.edge_open.size
    edge = np.arange(n_edges)
    road = edge >> 1
    is_back = (edge & 1) == 1
    owner = np.repeat(edge, np.diff(streets.succ_start))
    keep = (streets.succ_edge != owner ^ 1) & (streets.succ_banned == 0) & (streets.edge_open[owner] == 1)
    succ_start = np.concatenate([[0], np.cumsum(np.bincount(owner[keep], minlength=n_edges))])
    edge_to = np.where(is_back, streets.road_from[road], streets.road_to[road])
    outside = streets.road_inside[road] < 0
    kind = np.where(outside & (streets.node_junction[edge_to] >= 0), FIXED, 0)[owner[keep]]
    rule = np.zeros((kind.size, 8))
    rule[:, FLOW], rule[:, GAP_S], rule[:, BACK_M] = stop_share, wait_max_s, back_max_m
    start, lon, lat = _both_ways(streets)
    length = streets.road_length_m[road]
    return Roads(
        node_id=streets.node_id,
        node_lon=np.asarray(streets.node_lon_e7 * 1e-7, np.float64),
        node_lat=np.asarray(streets.node_lat_e7 * 1e-7, np.float64),
        edge_from=np.where(is_back, streets.road_to[road], streets.road_from[road]).astype(np.int32),
        edge_to=edge_to.astype(np.int32),
        edge_m=length,
        edge_mps=streets.edge_speed_mps.astype(np.float64),
        edge_way=streets.road_way_id[road],
        is_open=(streets.edge_open == 1).astype(np.uint8) & outside.astype(np.uint8),
        point_start=start,
        point_lon=lon,
        point_lat=lat,
        point_m=chainages(start, lon, lat, length),
        succ_start=succ_start.astype(np.int32),
        succ_edge=streets.succ_edge[keep].astype(np.int32),
        succ_turn_deg=streets.succ_turn_deg[keep].astype(np.float64),
        kind=kind.astype(np.int8),
        rule=rule,
    )
