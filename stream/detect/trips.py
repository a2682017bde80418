"""Trips: where they begin, how pings are kept in them, and what ends them (gap, dwell, close, jump)."""

from typing import Any

from stream.detect.carry import IDLE, MAX_KEPT, MOVING, OTHER
from stream.detect.clean import square_m2
from stream.kernel import kernel
from stream.network.model import NONE
from stream.network.routes import StreetIndex

# Reasons a trip ends, as in `records.END_REASONS`.
END_GAP, END_DWELL, END_CLOSE, END_JUMP = range(4)
TIMEOUT = END_JUMP + 1  # a dwell between gates: told apart until the row is written
FAR_BACK_M = -1e9


@kernel
def begin_trip(st: Any, t_us: int, lon: int, lat: int) -> None:
    """Begin a trip at a ping."""
    st.mode = MOVING
    st.is_placed = 0
    st.since = OTHER
    st.n_skipped = 0
    st.stay_us = t_us
    st.stay_lon = lon
    st.stay_lat = lat
    st.trip_start_us = t_us
    st.first_gate_us = NONE
    st.last_gate_us = NONE
    st.passage_us = 0
    st.section_us = 0
    st.unfinished_us = 0
    st.other_us = 0
    st.path_m = 0.0
    st.n_pings = 0
    st.n_passages = 0
    st.n_breaks = 0
    st.n_caps = 0
    st.edge = NONE
    st.reach_m = 0.0
    st.slow_at_m = FAR_BACK_M
    st.open_arm = NONE
    st.section_arm = NONE
    st.n_kept = 0
    st.n_columns = 0
    st.anchor = NONE


@kernel
def end_stay(st: Any, t_us: int, lon: int, lat: int, k_lon: float, k_lat: float, radius_m: float) -> bool:
    """Tell whether a ping lies outside the place where the vehicle stayed; if so, a new stay begins there."""
    if square_m2(k_lon, k_lat, st.stay_lon, st.stay_lat, lon, lat) <= radius_m * radius_m:
        return False
    st.stay_us = t_us
    st.stay_lon = lon
    st.stay_lat = lat
    return True


@kernel
def is_inside(st: Any, index: StreetIndex) -> bool:
    """Tell whether the likeliest place is between the gates of a junction."""
    if st.n_columns == 0:
        return st.open_arm != NONE
    e = index.edge[st.at_edge[st.n_columns - 1, 0]]
    at_m = st.at_m[st.n_columns - 1, 0]
    return at_m >= e.inside_from or at_m < e.inside_to


@kernel
def keep_ping(st: Any, t_us: int, lon: int, lat: int, k_lon: float, k_lat: float, keep_m: float) -> bool:
    """Keep a ping, or let it extend the stay at the last kept one; True where it was kept as a new one."""
    k = st.n_kept - 1
    if k >= 0 and square_m2(k_lon, k_lat, st.kept_lon[k], st.kept_lat[k], lon, lat) < keep_m * keep_m:
        step_ms = (t_us - st.leave_us[k]) // 1000
        if step_ms > st.kept_step_ms[k]:
            st.kept_step_ms[k] = step_ms
        st.leave_us[k] = t_us
        st.left_lon[k] = lon
        st.left_lat[k] = lat
        st.kept_n[k] += 1
        return False
    k += 1
    st.arrive_us[k] = t_us
    st.leave_us[k] = t_us
    st.kept_lon[k] = lon
    st.kept_lat[k] = lat
    st.left_lon[k] = lon
    st.left_lat[k] = lat
    st.kept_n[k] = 1
    st.kept_step_ms[k] = 0
    st.n_kept = k + 1
    return True


@kernel
def drop_kept(st: Any) -> None:
    """Drop the kept pings that nothing can ask for any more: all but one before the committed anchor."""
    base = st.column_kept[0] if st.n_columns > 0 else st.n_kept - 1
    shift = base - 1
    if shift <= 0:
        return
    for k in range(shift, st.n_kept):
        st.arrive_us[k - shift] = st.arrive_us[k]
        st.leave_us[k - shift] = st.leave_us[k]
        st.kept_lon[k - shift] = st.kept_lon[k]
        st.kept_lat[k - shift] = st.kept_lat[k]
        st.left_lon[k - shift] = st.left_lon[k]
        st.left_lat[k - shift] = st.left_lat[k]
        st.kept_n[k - shift] = st.kept_n[k]
        st.kept_step_ms[k - shift] = st.kept_step_ms[k]
    st.n_kept -= shift
    st.anchor = max(st.anchor - shift, NONE)
    for column in range(st.n_columns):
        st.column_kept[column] -= shift


@kernel
def is_full(st: Any) -> bool:
    """Tell whether there is no room for one more kept ping."""
    return st.n_kept == MAX_KEPT


@kernel
def rest(st: Any) -> None:
    """Forget the trip."""
    st.mode = IDLE
    st.n_kept = 0
    st.n_columns = 0
    st.anchor = NONE
    st.open_arm = NONE
    st.section_arm = NONE
