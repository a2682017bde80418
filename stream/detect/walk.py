"""The short way to a new column: walk on from each survivor, and project the ping on what lies ahead.

For steps of some metres and seconds this finds what the cells would find, at a fraction of the cost;
where even the best is poor, the caller looks in the cells.
"""

from typing import Any

import numpy as np

from stream.detect.candidates import project_kernel
from stream.detect.room import MAX_CANDIDATES, Column
from stream.geodesy import wrap_e7
from stream.kernel import kernel
from stream.network.cells import CELL_E7, HALF_LAT_E7
from stream.network.model import NONE
from stream.network.routes import StreetIndex

NEAR_M = 60.0  # longest chord walked
NEAR_US = 8_000_000  # longest step walked
AHEAD_M = 25.0  # how far beyond the chord edges are looked at
GOOD_COST = 2.0  # log units that the best may cost more than the best before
MAX_AHEAD = 12  # edges looked at from a survivor


@kernel
def project_on_edge(
    index: StreetIndex, e: int, lon: int, lat: int, k_lon: float, k_lat: float
) -> tuple[float, float]:
    """Project a point on an edge: chainage, squared distance off it."""
    record = index.edge[e]
    best = np.inf
    at = 0.0
    for k in range(record.segment, record.segment + record.n_segment):
        s = index.segment[k]
        along, square = project_kernel(s, wrap_e7(np.int64(lon) - s.lon) * k_lon, (lat - s.lat) * k_lat)
        if square < best:
            best = square
            at = s.at + along
    return record.length - at if e & 1 else at, best


@kernel
def look_at(
    index: StreetIndex, e: int, lon: int, lat: int, k_lon: float, k_lat: float, column: Column, n: int
) -> tuple[int, int]:
    """Find an edge among the candidates, or add it; give its place and their count (-1: no room)."""
    for c in range(n):
        if column.edge[c] == e:
            return c, n
    if n == MAX_CANDIDATES:
        return NONE, n
    at_m, square = project_on_edge(index, e, lon, lat, k_lon, k_lat)
    column.edge[n] = e
    column.at_m[n] = np.float32(at_m)  # as the record keeps it
    column.square_m2[n] = square
    column.back[n] = NONE
    column.cost[n] = np.inf
    return n, n + 1


@kernel
def walk_kernel(
    st: Any, lon: int, lat: int, chord_m: float, index: StreetIndex, par: Any, column: Column
) -> int:
    """Write the candidates ahead of the survivors of the newest column, each with its cost.

    Parameters
    ----------
    lon, lat : int     1e-7 degree
    chord_m : float    from the newest column's ping

    Returns
    -------
    n : int    candidates; 0 where the best is poor, or there is more ahead than is looked at
    """
    row = min(
        max((np.int64(lat) + HALF_LAT_E7) // CELL_E7 - index.row_first, 0), index.row_scale.shape[0] - 1
    )
    k_lon = index.row_scale[row, 0]
    k_lat = index.row_scale[row, 1]
    per_m = 1.0 / (par.beta_m + par.beta_share * chord_m)
    per_m2 = 0.5 / (par.sigma_m * par.sigma_m)
    limit_m2 = par.radius_m * par.radius_m
    last = st.n_columns - 1
    n = 0
    best = np.inf
    for s in range(st.column_n[last]):
        e = st.at_edge[last, s]
        at_m = st.at_m[last, s]
        column.ahead[0] = e
        column.ahead_m[0] = -at_m
        column.ahead_cost[0] = st.cost[s]
        m = 1
        k = 0
        while k < m:
            edge = column.ahead[k]
            start_m = column.ahead_m[k]
            c, n = look_at(index, edge, lon, lat, k_lon, k_lat, column, n)
            if c == NONE:
                return 0
            route_m = start_m + column.at_m[c]
            if column.square_m2[c] < limit_m2 and (k > 0 or route_m >= -par.back_m):
                cost = column.ahead_cost[k] + abs(max(route_m, 0.0) - chord_m) * per_m
                cost += column.square_m2[c] * per_m2
                if cost < column.cost[c]:
                    column.cost[c] = cost
                    column.back[c] = s
                    best = min(best, cost)
            end_m = start_m + index.edge[edge].length
            if end_m <= chord_m + AHEAD_M:
                first = index.edge[edge].succ
                for j in range(first, first + index.edge[edge].n_succ):
                    if m == MAX_AHEAD:
                        return 0
                    column.ahead[m] = index.succ_edge[j]
                    column.ahead_m[m] = end_m
                    column.ahead_cost[m] = column.ahead_cost[k] + index.succ_cost[j]
                    m += 1
            k += 1
    return n if best <= GOOD_COST else 0
