"""Advance along the committed path: one step, its gates in order, each with its time."""

from typing import Any

from stream.detect.carry import SECTION
from stream.detect.clean import apart_m
from stream.detect.passages import Out, enter, leave
from stream.detect.search import Routes
from stream.detect.step import Step, kept_speed, lay_pieces, place_kept
from stream.detect.times import (
    AT_GATES,
    LONG_S,
    between_gates,
    cubic_share,
    drive_s,
    gate_error_s,
    long_share,
    standing,
)
from stream.kernel import kernel, spliced
from stream.network.model import NONE
from stream.network.routes import StreetIndex

STAND_US = 2_000_000  # a slow stretch this long is a stand
AT_MOUTH_M = 15.0  # who turns so near the mouth turns at the junction


@kernel
def next_gate(index: StreetIndex, step: Step, n: int, cursor: int) -> int:
    """Find the next gate of a step from 2 * piece (+ 1: entry gate) on; -1 none."""
    while cursor < 2 * n:
        i = cursor >> 1
        e = index.edge[step.edge[i]]
        at = e.entry_at if cursor & 1 else e.exit_at
        begins = i > 0 and at == 0.0 and step.from_m[i] == 0.0
        if at >= 0.0 and (step.from_m[i] < at <= step.to_m[i] or begins):
            return cursor
        cursor += 1
    return NONE


@kernel
def gate_place(index: StreetIndex, step: Step, cursor: int) -> float:
    """Give where a gate lies, m along the step."""
    i = cursor >> 1
    e = index.edge[step.edge[i]]
    return step.start_m[i] + (e.entry_at if cursor & 1 else e.exit_at) - step.from_m[i]


@kernel
def mean_speed(step: Step, a: int, b: int) -> float:
    """Give the mean speed from point a to point b of a step, m/s; 0 without time."""
    dt_us = step.t_us[b] - step.t_us[a]
    return (step.at_m[b] - step.at_m[a]) / (dt_us * 1e-6) if dt_us > 0 else 0.0


@spliced
def speed_before(st: Any, first: int, index: StreetIndex, step: Step, j: int) -> float:
    """Give the speed before point j, a leave: from the point before the stay, -1 unknown."""
    if step.t_us[j] - step.t_us[j - 1] > STAND_US:
        return mean_speed(step, j - 1, j)
    if j >= 3:
        return mean_speed(step, j - 2, j - 1)
    return kept_speed(st, first, index) if first > 0 else -1.0


@spliced
def speed_after(st: Any, last: int, index: StreetIndex, step: Step, j: int, m: int) -> float:
    """Give the speed after point j, an arrival; -1 unknown."""
    if j + 2 < m:
        if step.t_us[j + 1] - step.t_us[j] > STAND_US:
            return mean_speed(step, j, j + 1)
        return mean_speed(step, j + 1, j + 2)
    if st.leave_us[last] - st.arrive_us[last] > STAND_US:
        return 0.0
    return kept_speed(st, last + 1, index) if last + 1 < st.n_kept else -1.0


@spliced
def gate_time(
    st: Any,
    first: int,
    last: int,
    index: StreetIndex,
    par: Any,
    step: Step,
    n: int,
    m: int,
    j: int,
    gate_m: float,
) -> tuple[int, float, float]:
    """Time a gate between points j and j + 1 of a step.

    Returns
    -------
    t_us, speed_mps, error_s
    """
    t0 = step.t_us[j]
    dt_us = step.t_us[j + 1] - t0
    length = step.at_m[j + 1] - step.at_m[j]
    dt_s = dt_us * 1e-6
    if dt_us <= 0 or length <= 0.0:
        return step.t_us[j + 1], 0.0, gate_error_s(dt_s, 0.0, dt_s)
    slope = length / dt_s
    share = (gate_m - step.at_m[j]) / length
    drive = dt_s
    speed = slope
    if j & 1:  # a move; a stay is even
        before = speed_before(st, first, index, step, j)
        after = speed_after(st, last, index, step, j + 1, m)
        if dt_s > LONG_S:
            drive = drive_s(index, step, n, step.at_m[j], step.at_m[j + 1], par.drive_share)
            stood = standing(step.t_us[j] - step.t_us[j - 1], before)
            stay_us = (
                step.t_us[j + 2] - step.t_us[j + 1] if j + 2 < m else st.leave_us[last] - st.arrive_us[last]
            )
            stands = standing(stay_us, after)
            if stood == 0.0 and between_gates(index, step, n, step.at_m[j]):
                stood = AT_GATES
            if stands == 0.0 and between_gates(index, step, n, step.at_m[j + 1]):
                stands = AT_GATES
            share = long_share(
                index, step, n, step.at_m[j], step.at_m[j + 1], gate_m, dt_s, stood, stands, par.drive_share
            )
            speed = min(length / drive, max(slope, 0.1)) if drive > 0.0 else slope
        else:
            v0 = 0.5 * (before + slope) if before >= 0.0 else slope
            v1 = 0.5 * (after + slope) if after >= 0.0 else slope
            share = cubic_share(share, slope, v0, v1)
            drive = drive_s(index, step, n, step.at_m[j], step.at_m[j + 1], par.drive_share)
    return t0 + int(share * dt_us + 0.5), speed, gate_error_s(dt_s, speed, drive)


@kernel
def spend(st: Any, from_us: int, to_us: int, is_slow: bool, step_ms: int) -> None:
    """Add a stretch of time to what is open."""
    if st.open_arm != NONE:
        if is_slow and to_us > from_us:
            st.open_slow_us += to_us - from_us
        st.open_step_ms = max(st.open_step_ms, step_ms)
    elif st.since == SECTION:
        st.section_step_ms = max(st.section_step_ms, step_ms)


@kernel
def meet(st: Any, index: StreetIndex, step: Step, from_piece: int, to_piece: int) -> None:
    """Note whether pieces of the path come to the open passage's junction: over its node, or turned there."""
    if st.open_arm == NONE:
        return
    junction = index.arm_junction[st.open_arm]
    for i in range(max(from_piece, 1), to_piece + 1):
        e = index.edge[step.edge[i]]
        if step.edge[i] == step.edge[i - 1] ^ 1 and step.from_m[i] > 0.0:
            before = index.edge[step.edge[i - 1]]
            left_m = before.to_mouth + before.length - step.to_m[i - 1]
            if before.to_mouth >= 0.0 and left_m <= AT_MOUTH_M:
                st.has_met = 1
        elif e.from_junction == junction:
            st.has_met = 1


@kernel
def is_slow_stretch(st: Any, k: int, is_move: int, dt_us: int, index: StreetIndex, par: Any) -> bool:
    """Tell whether the vehicle was slow in the stay at kept ping k, or on the way from it to the next."""
    if is_move:
        metres = apart_m(index, st.left_lon[k], st.left_lat[k], st.kept_lon[k + 1], st.kept_lat[k + 1])
    else:
        metres = apart_m(index, st.kept_lon[k], st.kept_lat[k], st.left_lon[k], st.left_lat[k])
    return dt_us > 0 and metres < par.slow_mps * dt_us * 1e-6


@kernel
def go_along(st: Any, to_m: float, first: int, last: int, index: StreetIndex, par: Any) -> bool:
    """Commit a step that stays on its edge and passes no gate; False (nothing done) for others."""
    e = index.edge[st.edge]
    reach = st.reach_m
    far = max(reach, to_m)
    if reach < e.exit_at <= far or reach < e.entry_at <= far:
        return False
    total = far - reach
    for k in range(first, last):
        for is_move in range(2):
            from_us = st.leave_us[k] if is_move else st.arrive_us[k]
            to_us = st.arrive_us[k + 1] if is_move else st.leave_us[k]
            dt_us = to_us - from_us
            is_slow = False
            if st.open_arm != NONE or dt_us >= STAND_US:
                is_slow = is_slow_stretch(st, k, is_move, dt_us, index, par)
            spend(st, from_us, to_us, is_slow, dt_us // 1000 if is_move else st.kept_step_ms[k])
            if is_slow and dt_us >= STAND_US:
                st.slow_at_m = st.path_m + total * (k + is_move - first) / (last - first)
            if st.open_arm != NONE:
                st.open_n += 1 if is_move else st.kept_n[k] - 1
    st.path_m += total
    st.reach_m = far
    return True


@kernel
def advance(
    st: Any,
    vehicle: int,
    at_m: float,
    to: int,
    to_m: float,
    first: int,
    last: int,
    index: StreetIndex,
    par: Any,
    routes: Routes,
    step: Step,
    out: Out,
) -> None:
    """Commit one step.

    Parameters
    ----------
    at_m : float         chainage of the last committed anchor on `st.edge`
    to, to_m : edge and chainage of the next one
    first, last : int    their kept pings
    """
    if to == st.edge and to_m >= at_m - par.back_m and go_along(st, to_m, first, last, index, par):
        return
    chord_m = apart_m(index, st.kept_lon[first], st.kept_lat[first], st.kept_lon[last], st.kept_lat[last])
    dt_us = st.arrive_us[last] - st.leave_us[first]
    n = lay_pieces(st, at_m, to, to_m, chord_m, dt_us, index, par, routes, step)
    total = step.start_m[n - 1] + step.to_m[n - 1] - step.from_m[n - 1]
    cursor = next_gate(index, step, n, 0)
    m = 2 * (last - first) + 1
    if cursor != NONE:
        place_kept(st, first, last, index, step, n)
    else:
        for k in range(first, last + 1):
            i = 2 * (k - first)
            step.t_us[i] = st.arrive_us[k]
            step.t_us[i + 1] = st.leave_us[k]
            step.at_m[i] = step.at_m[i + 1] = total * (k - first) / max(last - first, 1)
    piece = 0
    for j in range(m - 1):
        k = first + (j >> 1)
        is_move = j & 1
        from_us = step.t_us[j]
        dt_us = step.t_us[j + 1] - from_us
        step_ms = dt_us // 1000 if is_move else st.kept_step_ms[k]
        is_slow = False
        if st.open_arm != NONE or cursor != NONE or dt_us >= STAND_US:
            is_slow = is_slow_stretch(st, k, is_move, dt_us, index, par)
        while cursor != NONE:
            gate_m = gate_place(index, step, cursor)
            if gate_m > step.at_m[j + 1] and j < m - 2:
                break
            i = cursor >> 1
            meet(st, index, step, piece, i)
            piece = i + 1
            t_us, speed, error = gate_time(st, first, last, index, par, step, n, m, j, gate_m)
            t_us = max(t_us, from_us, st.last_gate_us)
            spend(st, from_us, t_us, is_slow, step_ms)
            from_us = t_us
            e = index.edge[step.edge[i]]
            if cursor & 1:
                enter(st, vehicle, e.entry_arm, t_us, st.path_m + gate_m, speed, error, par, out)
            else:
                leave(st, vehicle, e.exit_arm, t_us, st.path_m + gate_m, error, index, out)
            cursor = next_gate(index, step, n, cursor + 1)
        spend(st, from_us, step.t_us[j + 1], is_slow, step_ms)
        if is_slow and dt_us >= STAND_US:
            st.slow_at_m = st.path_m + step.at_m[j + 1]
        if st.open_arm != NONE:
            st.open_n += 1 if is_move else st.kept_n[k] - 1
    meet(st, index, step, piece, n - 1)
    st.path_m += total
    st.edge = to
    st.reach_m = step.to_m[n - 1]
