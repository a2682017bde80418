"""Settle the path: match an anchor, commit what the survivors agree on, break off, or end the trip.

Guarantee: what a commit writes depends on the record and the streets alone, not on when the output is read.
"""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from stream.detect.advance import advance
from stream.detect.candidates import PLACES
from stream.detect.carry import MAX_COLUMNS, OTHER, UNFINISHED
from stream.detect.follow import (
    ADDED,
    UNREACHABLE,
    agreed_column,
    ancestor,
    choose,
    extend,
    rebase,
    trace,
)
from stream.detect.passages import (
    BY_BREAK,
    BY_CLOSE,
    BY_DWELL,
    BY_GAP,
    BY_TIMEOUT,
    Out,
    leave_unfinished,
    write_trip,
)
from stream.detect.room import COLUMN
from stream.detect.search import ROUTES, forget
from stream.detect.step import STEP
from stream.detect.trips import END_CLOSE, END_DWELL, END_JUMP, TIMEOUT, drop_kept, is_full, rest
from stream.kernel import spliced
from stream.network.model import NONE
from stream.network.routes import StreetIndex

MAX_SKIPPED = 3  # anchors left out before the path is broken off


WORK = np.dtype(
    [
        ("routes", ROUTES),
        ("places", PLACES),
        ("column", COLUMN),
        ("step", STEP),
        ("chain", np.int32, (MAX_COLUMNS,)),
    ],
    align=True,
)
Work = Any  # record of WORK: a thread's scratch room; only the remembered routes outlive a ping


def new_work() -> NDArray[Any]:
    """Make a thread's scratch room: one record."""
    work = np.zeros(1, WORK)
    forget(work[0]["routes"])
    return work


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
