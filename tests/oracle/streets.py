"""Small made-up streets as arrays: grids of two-way roads, each crossing a junction with gates.

Built here with plain lists, apart from `stream.network`, so that detection can be tested alone.
"""

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from stream.geodesy import metres_per_degree
from stream.network.model import Streets


def wrapped(lon_e7: int) -> int:
    """Bring a longitude in 1e-7 degree into [-180, 180) degrees."""
    return (lon_e7 + 1_800_000_000) % 3_600_000_000 - 1_800_000_000


def grid_streets(
    n: int = 4,
    spacing_m: float = 150.0,
    lon: float = 5.0,
    lat: float = 52.0,
    entry_m: float = 60.0,
    exit_m: float = 40.0,
    speed_mps: float = 13.9,
) -> Streets:
    """Build n x n crossings, `spacing_m` apart; node i * n + j lies i steps north, j steps east."""
    k_lon, k_lat = metres_per_degree(lat)
    node_lon, node_lat = [], []
    for i in range(n):
        for j in range(n):
            node_lon.append(wrapped(round((lon + j * spacing_m / k_lon) * 1e7)))
            node_lat.append(round((lat + i * spacing_m / k_lat) * 1e7))
    pairs = [(i * n + j, i * n + j + 1) for i in range(n) for j in range(n - 1)]
    pairs += [(i * n + j, (i + 1) * n + j) for i in range(n - 1) for j in range(n)]
    return _streets(node_lon, node_lat, pairs, entry_m, exit_m, speed_mps)


def streets_of(
    points: Sequence[tuple[int, int]],
    pairs: Sequence[tuple[int, int]],
    entry_m: float = 60.0,
    exit_m: float = 40.0,
    speed_mps: float = 13.9,
) -> Streets:
    """Build straight two-way roads between points in 1e-7 degree, named by their place in the list."""
    lon, lat = [p[0] for p in points], [p[1] for p in points]
    return _streets(lon, lat, list(pairs), entry_m, exit_m, speed_mps)


def close_edges(streets: Streets, closed: Sequence[int]) -> Streets:
    """Give the streets with some edges closed to cars: none of them follows any edge."""
    starts, succ, turn = [0], [], []
    for e in range(len(streets.edge_open)):
        for k in range(streets.succ_start[e], streets.succ_start[e + 1]):
            if streets.succ_edge[k] not in closed and e not in closed:
                succ.append(streets.succ_edge[k])
                turn.append(streets.succ_turn_deg[k])
        starts.append(len(succ))
    is_open = streets.edge_open.copy()
    is_open[list(closed)] = 0
    return replace(
        streets,
        edge_open=is_open,
        succ_start=np.array(starts, np.int32),
        succ_edge=np.array(succ, np.int32),
        succ_turn_deg=np.array(turn, np.float32),
        succ_banned=np.zeros(len(succ), np.uint8),
    )


def _streets(
    node_lon: list[int],
    node_lat: list[int],
    pairs: list[tuple[int, int]],
    entry_m: float,
    exit_m: float,
    speed_mps: float,
) -> Streets:
    n_edges = 2 * len(pairs)
    tail = [pairs[e // 2][e % 2] for e in range(n_edges)]
    head = [pairs[e // 2][1 - e % 2] for e in range(n_edges)]
    k_lon, k_lat = metres_per_degree(sum(node_lat) / len(node_lat) * 1e-7)

    def vector(e: int) -> tuple[float, float]:
        a, b = tail[e], head[e]
        east = wrapped(node_lon[b] - node_lon[a]) * 1e-7 * k_lon
        return east, (node_lat[b] - node_lat[a]) * 1e-7 * k_lat

    length = [math.hypot(*vector(2 * r)) for r in range(len(pairs))]
    degree = [sum(v in p for p in pairs) for v in range(len(node_lon))]
    junction_of = {v: k for k, v in enumerate(v for v in range(len(node_lon)) if degree[v] >= 3)}
    # An arm is an edge that leaves a junction; its number is its place in this list.
    arms = [e for e in range(n_edges) if tail[e] in junction_of]
    arm_of = {e: k for k, e in enumerate(arms)}
    entry_arm, exit_arm = [-1] * n_edges, [-1] * n_edges
    entry_at, exit_at = [0.0] * n_edges, [0.0] * n_edges
    arm_entry, arm_exit = [], []
    for e in arms:
        metres = length[e // 2]
        arm_entry.append(min(entry_m, metres / 2))
        arm_exit.append(min(exit_m, metres / 2))
        exit_arm[e], exit_at[e] = arm_of[e], arm_exit[-1]
        entry_arm[e ^ 1], entry_at[e ^ 1] = arm_of[e], metres - arm_entry[-1]
    start, succ, turn = [0], [], []
    for e in range(n_edges):
        x, y = vector(e)
        for f in range(n_edges):
            if tail[f] == head[e]:
                u, v = vector(f)
                succ.append(f)
                angle = math.degrees(math.atan2(x * v - y * u, x * u + y * v))
                turn.append(180.0 if f == e ^ 1 else -angle)
        start.append(len(succ))
    points = [v for p in pairs for v in p]
    i32 = np.int32
    return Streets(
        node_id=np.arange(1, len(node_lon) + 1, dtype=np.int64),
        node_lon_e7=np.array(node_lon, i32),
        node_lat_e7=np.array(node_lat, i32),
        node_junction=np.array([junction_of.get(v, -1) for v in range(len(node_lon))], i32),
        road_from=np.array([p[0] for p in pairs], i32),
        road_to=np.array([p[1] for p in pairs], i32),
        road_length_m=np.array(length),
        road_class=np.zeros(len(pairs), np.uint8),
        road_inside=np.full(len(pairs), -1, i32),
        road_way_id=np.arange(100, 100 + len(pairs), dtype=np.int64),
        point_start=np.arange(0, 2 * len(pairs) + 1, 2, dtype=i32),
        point_lon_e7=np.array([node_lon[v] for v in points], i32),
        point_lat_e7=np.array([node_lat[v] for v in points], i32),
        edge_open=np.ones(n_edges, np.uint8),
        edge_speed_mps=np.full(n_edges, speed_mps, np.float32),
        edge_link=np.repeat(np.arange(len(pairs), dtype=i32), 2),
        succ_start=np.array(start, i32),
        succ_edge=np.array(succ, i32),
        succ_turn_deg=np.array(turn, np.float32),
        succ_banned=np.zeros(len(succ), np.uint8),
        entry_gate_arm=np.array(entry_arm, i32),
        entry_gate_at_m=np.array(entry_at),
        exit_gate_arm=np.array(exit_arm, i32),
        exit_gate_at_m=np.array(exit_at),
        arm_junction=np.array([junction_of[tail[e]] for e in arms], i32),
        arm_entry_gate_m=np.array(arm_entry),
        arm_exit_gate_m=np.array(arm_exit),
        arm_in_mps=np.full(len(arms), speed_mps, np.float32),
        arm_out_mps=np.full(len(arms), speed_mps, np.float32),
        class_names=("residential",),
    )
