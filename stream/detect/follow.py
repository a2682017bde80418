"""Follow the road: hidden Markov matching of anchors over directed edges, committed where survivors agree.

Guarantee: a column depends on the record and the ping alone; what is committed never changes afterwards.

Source: Newson & Krumm 2009, Hidden Markov map matching through noise and sparseness (Gaussian offset,
exponential |route - chord|); online Viterbi: commit where all surviving paths share a state.
"""

from typing import Any

import numpy as np

from stream.detect.candidates import Places, find_places_kernel
from stream.detect.carry import MAX_SURVIVORS
from stream.detect.clean import apart_m
from stream.detect.room import Column
from stream.detect.search import SHORT_M, Routes, find_route, row_kernel
from stream.detect.walk import NEAR_M, NEAR_US, walk_kernel
from stream.kernel import kernel, spliced
from stream.network.model import I32, NONE
from stream.network.routes import StreetIndex

# How one position follows another.
SAME_EDGE, TURNED, ROUTED = 1, 2, 3
SHORT_CHORD_M = 120.0  # shorter steps look in the short rows
NO_COST = 1e18
# A route that no driver covers in the time, or that goes far around, is none: where a street is missing or
# turned round on the map, a break is better than passages that nobody made. With 13 of 273 roads of a real
# centre made wrong, these bounds raise precision from 0.87 to 1.00 at 1 s and from 0.58 to 0.89 at 30 s, and
# change nothing on the right map.
FAST_MPS = 14.0
FAST_SHARE = 1.5
FAST_SLACK_S = 5.0
DETOUR_SHARE = 2.0
DETOUR_M = 100.0

# What `extend` says.
ADDED, NOWHERE, UNREACHABLE = 0, 1, 2


@kernel
def scale_m(chord_m: float, par: Any) -> float:
    """Give the scale of the exponential in |route - chord|."""
    return par.beta_m + par.beta_share * chord_m


@kernel
def transition(
    index: StreetIndex,
    e: int,
    at_m: float,
    to: int,
    to_m: float,
    chord_m: float,
    dt_us: int,
    slot: int,
    routes: Routes,
    par: Any,
) -> tuple[float, int]:
    """Price the way from one position to another.

    Parameters
    ----------
    e, at_m, to, to_m : edge and chainage before and after
    dt_us : int            time between the two pings
    slot : int             row of routes from e, -1 where it isn't needed

    Returns
    -------
    cost : float    log units, NO_COST where there is no way
    kind : int      SAME_EDGE, TURNED (reversed between nodes) or ROUTED
    """
    scale = scale_m(chord_m, par)
    length = index.edge[e].length
    cost = NO_COST
    kind = ROUTED
    if to == e and to_m >= at_m - par.back_m:
        return abs(max(to_m - at_m, 0.0) - chord_m) / scale, SAME_EDGE
    if to == e ^ 1:
        cost = par.reverse_cost + abs(abs(length - at_m - to_m) - chord_m) / scale
        kind = TURNED
    if slot != NONE:
        found = find_route(routes, slot, to)
        if found != NONE:
            route = length - at_m + routes.route[found].metres + to_m
            fast = FAST_SHARE * max(FAST_MPS, index.edge[e].speed, index.edge[to].speed)
            far = DETOUR_SHARE * chord_m + DETOUR_M
            if route > min(fast * (dt_us * 1e-6 + FAST_SLACK_S), far):
                return cost, kind
            routed = routes.route[found].cost + abs(route - chord_m) / scale
            if routed < cost:
                cost = routed
                kind = ROUTED
    return cost, kind


@spliced
def list_candidates(index: StreetIndex, places: Places, n: int, par: Any, column: Column) -> int:
    """Spread places on roads into open directions, priced by their offset; give their count."""
    m = 0
    for i in range(n):
        cost = places.square_m2[i] / (2.0 * par.sigma_m * par.sigma_m)
        if cost > places.square_m2[0] / (2.0 * par.sigma_m * par.sigma_m) + 2.0 * par.prune:
            break
        road = places.road[i]
        for direction in range(2):
            e = 2 * road + direction
            if index.edge[e].is_open:
                column.edge[m] = e
                at_m = places.at_m[i] if direction == 0 else index.edge[e].length - places.at_m[i]
                column.at_m[m] = np.float32(at_m)  # as the record keeps it: priced and laid are one place
                column.cost[m] = cost
                column.back[m] = 0
                m += 1
    return m


@spliced
def connect(
    st: Any, index: StreetIndex, par: Any, routes: Routes, column: Column, n: int, chord_m: float, dt_us: int
) -> bool:
    """Add to each candidate the cheapest way from a survivor; False where none has a way."""
    last = st.n_columns - 1
    is_long = 0 if chord_m <= SHORT_CHORD_M else 1
    reach = par.reach_m if is_long else SHORT_M
    any_way = False
    for c in range(n):
        column.back[c] = NONE
        column.best[c] = NO_COST
    for s in range(st.column_n[last]):
        e = st.at_edge[last, s]
        at_m = st.at_m[last, s]
        slot = NONE
        for c in range(n):
            to = column.edge[c]
            to_m = column.at_m[c]
            if slot == NONE and not (to == e and to_m >= at_m - par.back_m):
                slot = row_kernel(index, e, is_long, reach, routes)
            cost, _ = transition(index, e, at_m, to, to_m, chord_m, dt_us, slot, routes, par)
            if st.cost[s] + cost < column.best[c]:
                column.best[c] = st.cost[s] + cost
                column.back[c] = s
                any_way = True
    for c in range(n):
        column.cost[c] += column.best[c]
    return any_way


@spliced
def keep_best(st: Any, par: Any, column: Column, n: int, kept: int) -> None:
    """Write the best candidates as the newest column: those within `prune` of the best, few at most."""
    least = NO_COST
    for c in range(n):
        least = min(least, column.cost[c])
    at = st.n_columns
    m = 0
    while m < MAX_SURVIVORS:
        pick = NONE
        for c in range(n):
            if column.cost[c] <= least + par.prune and (pick == NONE or column.cost[c] < column.cost[pick]):
                pick = c
        if pick == NONE:
            break
        st.at_edge[at, m] = column.edge[pick]
        st.at_m[at, m] = column.at_m[pick]
        st.back[at, m] = column.back[pick]
        st.cost[m] = column.cost[pick] - least
        column.cost[pick] = NO_COST * 2.0
        m += 1
    st.column_n[at] = m
    st.column_kept[at] = kept
    st.n_columns = at + 1


@kernel
def extend(
    st: Any, kept: int, index: StreetIndex, par: Any, routes: Routes, places: Places, column: Column
) -> int:
    """Add a column for a kept ping; there is room for one.

    Returns
    -------
    said : int    ADDED, NOWHERE (no street within reach) or UNREACHABLE (none that can be reached)
    """
    chord_m = 0.0
    dt_us = 0
    if st.n_columns > 0:
        before = st.column_kept[st.n_columns - 1]
        chord_m = apart_m(
            index, st.kept_lon[before], st.kept_lat[before], st.kept_lon[kept], st.kept_lat[kept]
        )
        dt_us = st.arrive_us[kept] - st.leave_us[before]
        if chord_m <= NEAR_M and dt_us <= NEAR_US:
            n = walk_kernel(st, st.kept_lon[kept], st.kept_lat[kept], chord_m, index, par, column)
            if n > 0:
                keep_best(st, par, column, n, kept)
                return ADDED
    n_places = find_places_kernel(index, st.kept_lon[kept], st.kept_lat[kept], par.radius_m, places)
    if n_places == 0:
        return NOWHERE
    n = list_candidates(index, places, n_places, par, column)
    if n == 0:
        return NOWHERE
    if st.n_columns > 0 and not connect(st, index, par, routes, column, n, chord_m, dt_us):
        return UNREACHABLE
    keep_best(st, par, column, n, kept)
    return ADDED


@kernel
def agreed_column(st: Any) -> tuple[int, int]:
    """Find the newest column on whose candidate all survivors agree: column and candidate, (-1, -1) none."""
    at = st.n_columns - 1
    alive = (1 << st.column_n[at]) - 1
    while at >= 0:
        if alive & (alive - 1) == 0:
            c = 0
            while alive >> (c + 1):
                c += 1
            return at, c
        if at == 0:
            break
        before = 0
        for c in range(st.column_n[at]):
            if alive >> c & 1:
                before |= 1 << st.back[at, c]
        alive = before
        at -= 1
    return NONE, NONE


@kernel
def ancestor(st: Any, candidate: int, column: int) -> int:
    """Trace a candidate of the newest column back to an earlier one."""
    at = st.n_columns - 1
    while at > column:
        candidate = st.back[at, candidate]
        at -= 1
    return candidate


@kernel
def choose(st: Any, column: int, candidate: int) -> None:
    """Drop the survivors that don't descend from a candidate of a column; at least one does."""
    at = st.n_columns - 1
    m = 0
    for c in range(st.column_n[at]):
        if ancestor(st, c, column) == candidate:
            st.at_edge[at, m] = st.at_edge[at, c]
            st.at_m[at, m] = st.at_m[at, c]
            st.back[at, m] = st.back[at, c]
            st.cost[m] = st.cost[c]
            m += 1
    st.column_n[at] = m


@kernel
def trace(st: Any, column: int, candidate: int, chain_out: I32) -> None:
    """Write the candidate of each column up to this one that leads to it."""
    while column >= 0:
        chain_out[column] = candidate
        candidate = st.back[column, candidate]
        column -= 1


@kernel
def rebase(st: Any, column: int, candidate: int) -> None:
    """Make a candidate the committed one: its column becomes column 0."""
    st.at_edge[0, 0] = st.at_edge[column, candidate]
    st.at_m[0, 0] = st.at_m[column, candidate]
    st.column_kept[0] = st.column_kept[column]
    if column == st.n_columns - 1:
        st.cost[0] = 0.0
    n = st.n_columns - column
    for k in range(1, n):
        for c in range(st.column_n[column + k]):
            st.at_edge[k, c] = st.at_edge[column + k, c]
            st.at_m[k, c] = st.at_m[column + k, c]
            st.back[k, c] = 0 if k == 1 else st.back[column + k, c]
        st.column_n[k] = st.column_n[column + k]
        st.column_kept[k] = st.column_kept[column + k]
    st.column_n[0] = 1
    st.n_columns = n
