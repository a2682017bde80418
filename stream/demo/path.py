"""Paths of routes: shape and nodes by chainage, and the speed caps that limits and bends put on them."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stream.demo.roads import Roads
from stream.kernel import kernel

F64 = NDArray[np.float64]
I32 = NDArray[np.int32]
I64 = NDArray[np.int64]

TANGENT_M = 8.0  # m before and after a bend where a turning path leaves the centre line


@dataclass(frozen=True)
class Paths:
    """T paths laid end to end: points (mps[i] is the limit from point i to the next) and nodes passed."""

    point_start: I64
    lon: F64
    lat: F64
    m: F64
    mps: F64
    node_start: I64
    node: I32
    node_m: F64
    way: I64


@kernel
def path_kernel(
    first: int, last: int, route: I32, from_m: float, to_m: float, edge_m: F64, edge_mps: F64, edge_to: I32,
    edge_way: I64, shape_start: I64, shape_lon: F64, shape_lat: F64, shape_m: F64, p: int, q: int,
    lon_out: F64, lat_out: F64, m_out: F64, mps_out: F64, node_out: I32, node_m_out: F64, way_out: I64,
) -> tuple[int, int]:  # fmt: skip
    """Lay out one trip over edges route[first:last]; returns the rows of points and nodes reached.

    mps_out[i] is the limit between point i and the next.
    """
    base = -from_m
    for r in range(first, last):
        e = route[r]
        low = from_m if r == first else 0.0
        high = to_m if r == last - 1 else edge_m[e]
        for i in range(shape_start[e], shape_start[e + 1]):
            is_last = i == shape_start[e + 1] - 1
            m0 = shape_m[i]
            m1 = edge_m[e] if is_last else shape_m[i + 1]
            f = -1.0
            if r == first and m0 <= low and low < m1:
                f = 0.0 if m1 <= m0 else (low - m0) / (m1 - m0)
            elif (m0 > low and m0 < high and not is_last) or (r > first and i == shape_start[e]):
                f = 0.0
            if f >= 0.0:
                j = min(i + 1, shape_start[e + 1] - 1)
                lon_out[p] = shape_lon[i] + f * (shape_lon[j] - shape_lon[i])
                lat_out[p] = shape_lat[i] + f * (shape_lat[j] - shape_lat[i])
                m_out[p] = base + m0 + f * (m1 - m0)
                mps_out[p] = edge_mps[e]
                p += 1
            if r == last - 1 and (not is_last) and m0 < high and high <= m1:
                f = (high - m0) / (m1 - m0)
                lon_out[p] = shape_lon[i] + f * (shape_lon[i + 1] - shape_lon[i])
                lat_out[p] = shape_lat[i] + f * (shape_lat[i + 1] - shape_lat[i])
                m_out[p], mps_out[p] = base + high, edge_mps[e]
                p += 1
        if r < last - 1:
            base += edge_m[e]
            node_out[q], node_m_out[q], way_out[q] = edge_to[e], base, edge_way[e]
            q += 1
    return p, q


@kernel
def look_kernel(
    lon: F64, lat: F64, m: F64, i: int, first: int, last: int, way: int, k_lon: float
) -> tuple[float, float]:
    """Give the vector (degrees of latitude) from point i to TANGENT_M along the path, up or down."""
    j = i
    while j + way >= first and j + way < last and abs(m[j + way] - m[i]) < TANGENT_M:
        j += way
    x, y = lon[j], lat[j]
    if j + way >= first and j + way < last:
        f = (TANGENT_M - abs(m[j] - m[i])) / max(abs(m[j + way] - m[j]), 1e-9)
        x += f * (lon[j + way] - lon[j])
        y += f * (lat[j + way] - lat[j])
    return (x - lon[i]) * k_lon, y - lat[i]


@kernel
def caps_kernel(
    lon: F64,
    lat: F64,
    m: F64,
    mps: F64,
    first: int,
    last: int,
    share: float,
    lateral: float,
    at_m: F64,
    cap: F64,
) -> int:
    """Cut a path into pieces with speed caps: the driver's share of the limit, and less in bends.

    A bend by the angle b over tangents of TANGENT_M has the radius TANGENT_M / tan(b / 2); its speed is
    sqrt(lateral * radius) (METHODS.md section 6), held over the arc. Returns the number of pieces.
    """
    k = 0
    at_m[0] = 0.0
    limit = mps[first] * share
    bx = by = fx = fy = 0.0
    for i in range(first + 1, last - 1):
        k_lon = math.cos(lat[i] * math.pi / 180.0)
        for way in (-1, 1):
            x, y = look_kernel(lon, lat, m, i, first, last, way, k_lon)
            bx, by, fx, fy = (x, y, 0.0, 0.0) if way < 0 else (bx, by, x, y)
        bend = abs(math.atan2(-bx * fy + by * fx, -bx * fx - by * fy))
        after = mps[i] * share
        radius = TANGENT_M / max(math.tan(min(0.5 * bend, 1.55)), 1e-6)
        slow = max(math.sqrt(lateral * radius), 1.8)
        if slow < min(limit, after):
            half = 0.5 * radius * bend
            low = m[i] - min(half, 0.5 * (m[i] - m[i - 1]))
            high = m[i] + min(half, 0.5 * (m[i + 1] - m[i]))
            if low > at_m[k]:
                cap[k] = limit
                k += 1
                at_m[k] = low
            if high > at_m[k]:
                cap[k] = slow
                k += 1
                at_m[k] = high
        elif after != limit and m[i] > at_m[k]:
            cap[k] = limit
            k += 1
            at_m[k] = m[i]
        limit = after
    if m[last - 1] > at_m[k]:
        cap[k] = limit
        k += 1
        at_m[k] = m[last - 1]
    return k


def lay_paths(
    roads: Roads, start: I64, edge: I32, goes_on: NDArray[np.uint8], share: tuple[F64, F64]
) -> Paths:
    """Lay out the path of each route, from a share of its first edge to a share of its last.

    A trip that goes on starts where the one before it ended. One with a single edge (no way was found)
    moves half of what is left of it.
    """
    n = goes_on.size
    n_points = int(np.diff(roads.point_start)[edge].sum()) + 2 * n
    lon, lat, m, mps = (np.zeros(n_points) for _ in range(4))
    node, node_m, way = np.zeros(edge.size, np.int32), np.zeros(edge.size), np.zeros(edge.size, np.int64)
    point_start, node_start = np.zeros(n + 1, np.int64), np.zeros(n + 1, np.int64)
    begin = 0.0
    p = q = 0
    for i in range(n):
        first, last = int(start[i]), int(start[i + 1])
        from_m = (
            begin
            if goes_on[i] and i > 0 and edge[first] == edge[first - 1]
            else share[0][i] * roads.edge_m[edge[first]]
        )
        to_m = share[1][i] * roads.edge_m[edge[last - 1]]
        if last - first == 1:
            to_m = from_m + 0.5 * (roads.edge_m[edge[first]] - from_m)
        p, q = path_kernel(
            first, last, edge, from_m, to_m, roads.edge_m, roads.edge_mps, roads.edge_to, roads.edge_way,
            roads.point_start, roads.point_lon, roads.point_lat, roads.point_m, p, q, lon, lat, m, mps, node,
            node_m, way,
        )  # fmt: skip
        point_start[i + 1], node_start[i + 1] = p, q
        begin = to_m
    points = (lon[:p], lat[:p], m[:p], mps[:p])
    return Paths(point_start, *points, node_start, node[:q], node_m[:q], way[:q])
