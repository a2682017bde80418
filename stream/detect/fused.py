"""The fused pass: each ping of a vehicle, in order, through cleaning, trips, following, and gates.

Guarantee: what a vehicle gives depends on its own pings, its record, the streets and the settings alone.
"""

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from stream.detect.advance import advance
from stream.detect.candidates import Places, new_places
from stream.detect.carry import IDLE, MAX_COLUMNS, MOVING, OTHER, PARKED, UNFINISHED
from stream.detect.clean import (
    DROP_HELD,
    GOOD,
    HELD_ELSEWHERE,
    HOLD,
    IMPOSSIBLE_SPEED,
    REPLACE_HELD,
    apart_m,
    judge,
)
from stream.detect.follow import (
    ADDED,
    UNREACHABLE,
    Column,
    agreed_column,
    ancestor,
    choose,
    extend,
    new_column,
    rebase,
    trace,
)
from stream.detect.passages import (
    BY_BREAK,
    BY_CLOSE,
    BY_DWELL,
    BY_GAP,
    BY_TIMEOUT,
    N_PASSAGE,
    N_SECTION,
    N_TRIP,
    N_UNFINISHED,
    N_USED,
    Out,
    leave_unfinished,
    write_trip,
)
from stream.detect.search import Routes, new_routes
from stream.detect.step import Step, new_step
from stream.detect.trips import (
    END_CLOSE,
    END_DWELL,
    END_GAP,
    END_JUMP,
    begin_trip,
    drop_kept,
    end_stay,
    is_full,
    is_inside,
    keep_ping,
    rest,
)
from stream.kernel import kernel, spliced
from stream.network.model import I32, I64, NONE
from stream.network.routes import StreetIndex

MAX_SKIPPED = 3  # anchors left out before the path is broken off
MAX_WAIT = 14  # kept pings after which one is an anchor though it did not move on
CLOSE = -2  # in place of a reason to drop: no ping, the end of all that is open
TIMEOUT = END_JUMP + 1  # a dwell between gates
RESERVE = 4096  # rows of output that one ping can't exceed


class Work(NamedTuple):
    """A thread's scratch room; nothing in it outlives a ping, save the remembered routes."""

    routes: Routes
    places: Places
    column: Column
    step: Step
    chain: I32  # [MAX_COLUMNS]


def new_work() -> Work:
    """Make a thread's scratch room."""
    return Work(new_routes(), new_places(), new_column(), new_step(), np.zeros(MAX_COLUMNS, np.int32))


@spliced
def commit_to(
    st: Any, vehicle: int, column: int, candidate: int, index: StreetIndex, par: Any, work: Work, out: Out
) -> None:
    """Commit the path to a candidate of a column, gates and all."""
    trace(st, column, candidate, work.chain)
    c = work.chain[0]
    if not st.is_placed:
        st.is_placed = 1
        st.edge = st.at_edge[0, c]
        st.reach_m = st.at_m[0, c]
    for k in range(1, column + 1):
        before = work.chain[k - 1]
        c = work.chain[k]
        advance(
            st,
            vehicle,
            st.at_m[k - 1, before],
            st.at_edge[k, c],
            st.at_m[k, c],
            st.column_kept[k - 1],
            st.column_kept[k],
            index,
            par,
            work.routes,
            work.step,
            out,
        )
    rebase(st, column, candidate)


@spliced
def commit_all(st: Any, vehicle: int, index: StreetIndex, par: Any, work: Work, out: Out) -> None:
    """Commit the best path whole."""
    if st.n_columns > 0:
        commit_to(st, vehicle, st.n_columns - 1, 0, index, par, work, out)


@spliced
def force_one(st: Any, vehicle: int, index: StreetIndex, par: Any, work: Work, out: Out) -> None:
    """Commit one step of the best path though not all survivors agree, and count it."""
    st.n_caps += 1
    candidate = ancestor(st, 0, 1)
    choose(st, 1, candidate)
    commit_to(st, vehicle, 1, candidate, index, par, work, out)


@spliced
def break_path(
    st: Any, vehicle: int, last_us: int, index: StreetIndex, par: Any, work: Work, out: Out
) -> None:
    """Break the path off: commit what there is, leave what is open unfinished, begin anew."""
    commit_all(st, vehicle, index, par, work, out)
    leave_unfinished(st, vehicle, BY_BREAK, last_us, out)
    if st.since != UNFINISHED:
        st.since = OTHER
    st.section_arm = NONE
    st.n_breaks += 1
    st.is_placed = 0
    st.n_columns = 0
    st.n_skipped = 0


@spliced
def anchor_at(st: Any, vehicle: int, kept: int, index: StreetIndex, par: Any, work: Work, out: Out) -> None:
    """Match a kept ping as an anchor, and commit what is agreed on."""
    if st.n_columns == MAX_COLUMNS:
        force_one(st, vehicle, index, par, work, out)
    said = extend(st, kept, index, par, work.routes, work.places, work.column)
    st.anchor = kept
    if said == ADDED:
        st.n_skipped = 0
        column, candidate = agreed_column(st)
        if column > 0 or (column == 0 and not st.is_placed):
            commit_to(st, vehicle, column, candidate, index, par, work, out)
        return
    if st.n_columns == 0:
        return
    st.n_skipped += 1
    if st.n_skipped > MAX_SKIPPED:
        break_path(st, vehicle, st.arrive_us[st.column_kept[st.n_columns - 1]], index, par, work, out)
        if said == UNREACHABLE:
            extend(st, kept, index, par, work.routes, work.places, work.column)


@spliced
def end_trip(st: Any, vehicle: int, ending: int, index: StreetIndex, par: Any, work: Work, out: Out) -> None:
    """End a trip: match its last kept ping, commit all, write what is unfinished and the trip's row."""
    last = st.n_kept - 1
    if st.anchor != last and st.n_columns > 0:
        if st.n_columns == MAX_COLUMNS:
            force_one(st, vehicle, index, par, work, out)
        extend(st, last, index, par, work.routes, work.places, work.column)
    commit_all(st, vehicle, index, par, work, out)
    end_us = st.t_us
    end_reason = ending
    reason = BY_GAP
    if ending == END_DWELL:
        reason = BY_DWELL
        end_us = st.stay_us
    elif ending == TIMEOUT:
        end_reason = END_DWELL
        reason = BY_TIMEOUT
        end_us = st.stay_us
    elif ending == END_CLOSE:
        reason = BY_CLOSE
    elif ending == END_JUMP:
        reason = BY_BREAK
    leave_unfinished(st, vehicle, reason, end_us, out)
    write_trip(st, vehicle, end_reason, end_us, out)
    rest(st)


@spliced
def make_room(st: Any, vehicle: int, index: StreetIndex, par: Any, work: Work, out: Out) -> None:
    """Make room for one more kept ping."""
    drop_kept(st)
    while is_full(st):
        if st.n_columns > 1:
            force_one(st, vehicle, index, par, work, out)
        else:
            break_path(st, vehicle, st.leave_us[st.n_kept - 1], index, par, work, out)
            st.anchor = NONE
        drop_kept(st)


@kernel
def judge_trip(st: Any, t_us: int, lon: int, lat: int, index: StreetIndex, par: Any) -> int:
    """Decide whether a good ping ends the open trip.

    Returns
    -------
    ending : int    NONE, END_GAP before the ping, END_DWELL or TIMEOUT with it
    """
    if st.mode != MOVING:
        return NONE
    if t_us - st.t_us > par.max_gap_us:
        return END_GAP
    if end_stay(st, t_us, lon, lat, par.dwell_radius_m):
        return NONE
    stayed_us = t_us - st.stay_us
    if stayed_us < par.dwell_us:
        return NONE
    if not is_inside(st, index):
        return END_DWELL
    return TIMEOUT if stayed_us >= par.max_passage_us else NONE


@spliced
def take(
    st: Any,
    vehicle: int,
    t_us: int,
    lon: int,
    lat: int,
    ending: int,
    index: StreetIndex,
    par: Any,
    work: Work,
    out: Out,
) -> None:
    """Take a good ping; `ending` END_JUMP or END_CLOSE ends the trip first (then without a ping)."""
    if ending == NONE:
        ending = judge_trip(st, t_us, lon, lat, index, par)
    stays = ending in (END_DWELL, TIMEOUT)
    if ending != NONE and st.mode == MOVING:
        if stays:
            st.n_pings += 1
        end_trip(st, vehicle, ending, index, par, work, out)
    if stays:
        st.mode = PARKED
    elif ending != NONE:
        st.mode = IDLE
    if ending != END_CLOSE:
        out.n[N_USED] += 1
        if st.mode == PARKED and apart_m(st.stay_lon, st.stay_lat, lon, lat) > par.dwell_radius_m:
            st.mode = IDLE
        if st.mode == IDLE:
            begin_trip(st, t_us, lon, lat)
        if st.mode == MOVING:
            st.n_pings += 1
            if is_full(st):
                make_room(st, vehicle, index, par, work, out)
            if keep_ping(st, t_us, lon, lat, par.keep_m) and is_anchor(st, par.anchor_m):
                anchor_at(st, vehicle, st.n_kept - 1, index, par, work, out)
        st.t_us = t_us
        st.lon = lon
        st.lat = lat
        st.has_last = 1


@kernel
def is_anchor(st: Any, anchor_m: float) -> bool:
    """Tell whether the newest kept ping is to be matched."""
    k = st.n_kept - 1
    a = st.anchor
    if a == NONE or k - a >= MAX_WAIT:
        return True
    return apart_m(st.kept_lon[a], st.kept_lat[a], st.kept_lon[k], st.kept_lat[k]) >= anchor_m


@kernel
def pass_kernel(
    vehicle_ix: I32,
    t_us: I64,
    lon: I32,
    lat: I32,
    reason: NDArray[np.int8],
    order: I32,
    index: StreetIndex,
    begin: int,
    end: int,
    parameters: NDArray[Any],
    states: NDArray[Any],
    work: Work,
    out: Out,
) -> int:
    """Take pings `order[begin:end]`, grouped by vehicle, in order within each.

    Parameters
    ----------
    vehicle_ix : int32[n]    row in `states`
    t_us : int64[n]          UTC epoch
    lon, lat : int32[n]      1e-7 degree
    reason : int8[n]         -1, a reason to drop that is known already, or CLOSE: no ping, end what is open
    order : int32[n]
    parameters : PARAMETERS[1]
    states : STATE[v]        changed
    out : rows are added from its counters on

    Returns
    -------
    at : int    `end`, or where to go on once `out` has more room

    Source: DESIGN.md section 5.
    """
    par = parameters[0]
    room = min(out.passage.shape[0], out.trip.shape[0]) - RESERVE
    for i in range(begin, end):
        if max(out.n[N_PASSAGE], out.n[N_SECTION], out.n[N_UNFINISHED], out.n[N_TRIP]) > room:
            return i
        p = order[i]
        if reason[p] >= 0:
            out.dropped[reason[p]] += 1
            continue
        v = vehicle_ix[p]
        st = states[v]
        said = GOOD
        if reason[p] == CLOSE:
            said = DROP_HELD if st.is_held else GOOD
        else:
            said = judge(st, t_us[p], lon[p], lat[p], par)
        if said >= 0:
            out.dropped[said] += 1
            continue
        if said in (DROP_HELD, REPLACE_HELD):
            out.dropped[IMPOSSIBLE_SPEED] += 1
        if said in (HOLD, REPLACE_HELD):
            st.is_held = 1
            st.held_us = t_us[p]
            st.held_lon = lon[p]
            st.held_lat = lat[p]
            continue
        for turn in range(0 if said == HELD_ELSEWHERE else 1, 2):
            at_us = t_us[p] if turn else st.held_us
            at_lon = lon[p] if turn else st.held_lon
            at_lat = lat[p] if turn else st.held_lat
            ending = NONE if turn else END_JUMP
            if reason[p] == CLOSE:
                ending = END_CLOSE
            take(st, v, at_us, at_lon, at_lat, ending, index, par, work, out)
        st.is_held = 0
    return end


@kernel
def group_kernel(vehicle_ix: I32, start: I64, order_out: I32) -> None:
    """Group pings by vehicle, in order within each: a stable counting sort.

    Parameters
    ----------
    start : int64[v]    first place of each vehicle; used up
    """
    for i in range(vehicle_ix.shape[0]):
        v = vehicle_ix[i]
        order_out[start[v]] = i
        start[v] += 1
