"""One committed step: the pieces of edges between two anchors, and the kept pings placed along them.

Guarantee: places along a step never run backward, and no gate is passed twice without leaving its edge.
"""

from typing import Any

import numpy as np

from stream.detect.candidates import project_kernel
from stream.detect.carry import MAX_KEPT
from stream.detect.clean import apart_m
from stream.detect.follow import SAME_EDGE, SHORT_CHORD_M, TURNED, transition
from stream.detect.search import MAX_LABELS, SHORT_M, Routes, find_route, row_kernel
from stream.geodesy import wrap_e7
from stream.kernel import kernel, spliced
from stream.network.cells import CELL_E7, HALF_LAT_E7
from stream.network.model import NONE
from stream.network.routes import StreetIndex

MAX_PIECES = MAX_LABELS + 2
STEP = np.dtype(
    [
        ("edge", np.int32, (MAX_PIECES,)),  # pieces in order
        ("from_m", np.float64, (MAX_PIECES,)),  # chainage on the edge
        ("to_m", np.float64, (MAX_PIECES,)),
        ("start_m", np.float64, (MAX_PIECES,)),  # metres along the step where the piece starts
        ("route", np.int32, (MAX_PIECES,)),  # scratch: the edges between, last first
        ("t_us", np.int64, (2 * MAX_KEPT,)),  # arrival and leave of each kept ping, in turn
        ("at_m", np.float64, (2 * MAX_KEPT,)),  # metres along the step
    ],
    align=True,
)
Step = Any  # record of STEP: room for one step


@kernel
def add_piece(step: Step, n: int, edge: int, from_m: float, to_m: float) -> int:
    """Add a piece at the end of a step; give the new count."""
    step.edge[n] = edge
    step.from_m[n] = from_m
    step.to_m[n] = to_m
    step.start_m[n] = step.start_m[n - 1] + step.to_m[n - 1] - step.from_m[n - 1] if n else 0.0
    return n + 1


@spliced
def lay_pieces(
    st: Any,
    at_m: float,
    to: int,
    to_m: float,
    chord_m: float,
    dt_us: int,
    index: StreetIndex,
    par: Any,
    routes: Routes,
    step: Step,
) -> int:
    """Lay the way from the committed position to the next one; without a route, straight over.

    Returns
    -------
    n : int    pieces; the first starts at the greatest chainage reached
    """
    e = st.edge
    reach = st.reach_m
    length = index.edge[e].length
    is_long = 0 if chord_m <= SHORT_CHORD_M else 1
    slot = NONE
    if not (to == e and to_m >= at_m - par.back_m):
        slot = row_kernel(index, e, is_long, par.reach_m if is_long else SHORT_M, routes)
    _, kind = transition(index, e, at_m, to, to_m, chord_m, dt_us, slot, routes, par)
    if kind == SAME_EDGE:
        return add_piece(step, 0, e, reach, max(reach, to_m))
    if kind == TURNED:
        turn_m = min(max(reach, length - to_m), length)
        n = add_piece(step, 0, e, reach, turn_m)
        return add_piece(step, n, to, length - turn_m, max(to_m, length - turn_m))
    found = find_route(routes, slot, to)
    if found == NONE and to == e:
        return add_piece(step, 0, e, reach, max(reach, to_m))
    n = add_piece(step, 0, e, reach, length)
    m = 0
    between = routes.route[found].before if found != NONE else NONE
    while between != NONE:
        step.route[m] = between
        m += 1
        between = routes.route[find_route(routes, slot, between)].before
    for k in range(m - 1, -1, -1):
        n = add_piece(step, n, step.route[k], 0.0, index.edge[step.route[k]].length)
    return add_piece(step, n, to, 0.0, to_m)


@kernel
def project_on_step(index: StreetIndex, lon: int, lat: int, from_m: float, step: Step, n: int) -> float:
    """Place a point on a step, not before `from_m`; metres along the step."""
    row = (np.int64(lat) + HALF_LAT_E7) // CELL_E7 - index.row_first
    if row < 0 or row >= index.row_scale.shape[0]:
        return from_m
    k_lon = index.row_scale[row, 0]
    k_lat = index.row_scale[row, 1]
    best = np.inf
    best_at = from_m
    for i in range(n):
        low = step.start_m[i]
        high = low + step.to_m[i] - step.from_m[i]
        if high < from_m:
            continue
        e = step.edge[i]
        record = index.edge[e]
        for k in range(record.segment, record.segment + record.n_segment):
            s = index.segment[k]
            along, square = project_kernel(s, wrap_e7(np.int64(lon) - s.lon) * k_lon, (lat - s.lat) * k_lat)
            if square >= best:
                continue
            at = s.at + along
            if e & 1:
                at = record.length - at
            at_step = low + at - step.from_m[i]
            if at_step < max(low, from_m) - 1e-6 or at_step > high + 1e-6:
                # The nearest place of the segment is off the piece: clamp, and measure again.
                clamped = min(max(at_step, max(low, from_m)), high)
                gap = abs(clamped - at_step)
                square = square + gap * gap
                at_step = clamped
                if square >= best:
                    continue
            best = square
            best_at = at_step
    return best_at


@spliced
def place_kept(st: Any, first: int, last: int, index: StreetIndex, step: Step, n: int) -> None:
    """Place arrival and leave of the kept pings `first` to `last` along a step; not the leave of the last."""
    total = step.start_m[n - 1] + step.to_m[n - 1] - step.from_m[n - 1]
    at = 0.0
    for k in range(first, last + 1):
        i = 2 * (k - first)
        if k == last:
            at = total
        elif k > first:
            at = project_on_step(index, st.kept_lon[k], st.kept_lat[k], at, step, n)
        step.t_us[i] = st.arrive_us[k]
        step.at_m[i] = at
        if k < last and st.kept_n[k] > 1:
            at = max(at, project_on_step(index, st.left_lon[k], st.left_lat[k], at, step, n))
        step.t_us[i + 1] = st.leave_us[k]
        step.at_m[i + 1] = at


@kernel
def kept_speed(st: Any, k: int, index: StreetIndex) -> float:
    """Give the speed between a kept ping and the one before it by their chord, m/s."""
    dt_us = st.arrive_us[k] - st.leave_us[k - 1]
    if dt_us <= 0:
        return 0.0
    chord_m = apart_m(index, st.left_lon[k - 1], st.left_lat[k - 1], st.kept_lon[k], st.kept_lat[k])
    return chord_m / (dt_us * 1e-6)
