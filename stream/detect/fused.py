"""The fused pass: each ping of a vehicle, in order, through cleaning, trips, following, and gates.

Guarantee: what a vehicle gives depends on its own pings, its record, the streets and the settings alone.
"""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from stream.detect.carry import IDLE, MOVING, PARKED
from stream.detect.clean import (
    DROP_HELD,
    GOOD,
    HELD_ELSEWHERE,
    HOLD,
    IMPOSSIBLE_SPEED,
    REPLACE_HELD,
    judge,
    scale_at,
    square_m2,
)
from stream.detect.passages import BLOCK_ROWS, N_PASSAGE, N_SECTION, N_TRIP, N_UNFINISHED, N_USED, Out
from stream.detect.settle import Work, anchor_at, end_trip, make_room
from stream.detect.trips import (
    END_CLOSE,
    END_DWELL,
    END_GAP,
    END_JUMP,
    TIMEOUT,
    begin_trip,
    end_stay,
    is_full,
    is_inside,
    keep_ping,
)
from stream.kernel import kernel, spliced
from stream.network.model import I32, I64, NONE
from stream.network.routes import StreetIndex

MAX_WAIT = 14  # kept pings after which one is an anchor though it did not move on
CLOSE = -2  # in place of a reason to drop: no ping, the end of all that is open
RESERVE = 4096  # rows of output that one ping can't exceed


@spliced
def judge_trip(
    st: Any, t_us: int, lon: int, lat: int, k_lon: float, k_lat: float, index: StreetIndex, par: Any
) -> int:
    """Decide whether a good ping ends the open trip.

    Returns
    -------
    ending : int    NONE, END_GAP before the ping, END_DWELL or TIMEOUT with it
    """
    if st.mode != MOVING:
        return NONE
    if t_us - st.t_us > par.max_gap_us:
        return END_GAP
    if end_stay(st, t_us, lon, lat, k_lon, k_lat, par.dwell_radius_m):
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
    k_lon, k_lat = scale_at(index, lat)
    if ending == NONE:
        ending = judge_trip(st, t_us, lon, lat, k_lon, k_lat, index, par)
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
        if st.mode == PARKED and end_stay(st, t_us, lon, lat, k_lon, k_lat, par.dwell_radius_m):
            st.mode = IDLE
        if st.mode == IDLE:
            begin_trip(st, t_us, lon, lat)
        if st.mode == MOVING:
            st.n_pings += 1
            if is_full(st):
                make_room(st, vehicle, index, par, work, out)
            if keep_ping(st, t_us, lon, lat, k_lon, k_lat, par.keep_m) and is_anchor(
                st, k_lon, k_lat, par.anchor_m
            ):
                anchor_at(st, vehicle, st.n_kept - 1, index, par, work, out)
        st.t_us = t_us
        st.lon = lon
        st.lat = lat
        st.has_last = 1


@spliced
def is_anchor(st: Any, k_lon: float, k_lat: float, anchor_m: float) -> bool:
    """Tell whether the newest kept ping is to be matched."""
    k = st.n_kept - 1
    a = st.anchor
    if a == NONE or k - a >= MAX_WAIT:
        return True
    square = square_m2(k_lon, k_lat, st.kept_lon[a], st.kept_lat[a], st.kept_lon[k], st.kept_lat[k])
    return square >= anchor_m * anchor_m


@spliced
def drives_off(st: Any, t_us: int, lon: int, lat: int, index: StreetIndex, par: Any) -> bool:
    """Tell whether a parked vehicle leaves its place, seen not long before."""
    if st.mode != PARKED or t_us - st.t_us > par.max_gap_us:
        return False
    k_lon, k_lat = scale_at(index, lat)
    radius_m = par.dwell_radius_m
    return square_m2(k_lon, k_lat, st.stay_lon, st.stay_lat, lon, lat) > radius_m * radius_m


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
    works: NDArray[Any],
    outs: NDArray[Any],
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
    works : WORK[1]
    outs : OUT[1]            rows are added from its counters on

    Returns
    -------
    at : int    `end`, or where to go on with an empty block of output

    Source: DESIGN.md section 5.
    """
    par = parameters[0]
    work = works[0]
    out = outs[0]
    room = BLOCK_ROWS - RESERVE
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
            k_lon, k_lat = scale_at(index, lat[p])
            said = judge(st, t_us[p], lon[p], lat[p], k_lon, k_lat, par)
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
        drives = False
        if said in (GOOD, DROP_HELD) and reason[p] != CLOSE:
            drives = drives_off(st, t_us[p], lon[p], lat[p], index, par)
        if drives:
            st.mode = IDLE
            out.n[N_USED] -= 1  # the ping before is taken once more: the trip begins where it stood
        for turn in range(0 if drives or said == HELD_ELSEWHERE else 1, 2):
            at_us = t_us[p]
            at_lon = lon[p]
            at_lat = lat[p]
            if turn == 0:
                at_us = st.t_us if drives else st.held_us
                at_lon = st.lon if drives else st.held_lon
                at_lat = st.lat if drives else st.held_lat
            ending = END_JUMP if turn == 0 and not drives else NONE
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
