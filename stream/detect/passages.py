"""Gates along the committed path: passages, sections, unfinished passages, and where the time went.

Guarantee: the time between a trip's first and last gate is split without rest into passages, sections,
unfinished passages and other time, in integer microseconds.
"""

from typing import Any

import numpy as np

from stream.detect.carry import OTHER, PASSAGE, SECTION, UNFINISHED
from stream.detect.records import DROP_REASONS
from stream.detect.records import PASSAGE as PASSAGE_ROW
from stream.detect.records import SECTION as SECTION_ROW
from stream.detect.records import TRIP as TRIP_ROW
from stream.detect.records import UNFINISHED as UNFINISHED_ROW
from stream.kernel import kernel
from stream.network.model import NONE
from stream.network.routes import StreetIndex

# Reasons of an unfinished passage, as in `records.UNFINISHED_REASONS`.
BY_GAP, BY_DWELL, BY_BREAK, BY_CLOSE, BY_TIMEOUT, BY_TURN = range(6)
# Places in `Out.n`.
N_PASSAGE, N_SECTION, N_UNFINISHED, N_TRIP, N_USED = range(5)


BLOCK_ROWS = 12_288  # rows of each kind in a block of output
OUT = np.dtype(
    [
        ("n", np.int64, (5,)),  # rows of each kind, pings used
        ("dropped", np.int64, (len(DROP_REASONS),)),
        ("passage", PASSAGE_ROW, (BLOCK_ROWS,)),
        ("section", SECTION_ROW, (BLOCK_ROWS,)),
        ("unfinished", UNFINISHED_ROW, (BLOCK_ROWS,)),
        ("trip", TRIP_ROW, (BLOCK_ROWS,)),
    ],
    align=True,
)
Out = Any  # record of OUT: a thread's output


@kernel
def credit(st: Any, t_us: int, kind: int) -> None:
    """Give the time since the last gate to what it was spent in, and move the last gate on."""
    if st.first_gate_us == NONE:
        st.first_gate_us = t_us
    else:
        spent = t_us - st.last_gate_us
        if kind == PASSAGE:
            st.passage_us += spent
        elif kind == SECTION:
            st.section_us += spent
        elif kind == UNFINISHED:
            st.unfinished_us += spent
        else:
            st.other_us += spent
    st.last_gate_us = t_us


@kernel
def leave_unfinished(st: Any, vehicle: int, reason: int, last_us: int, out: Out) -> None:
    """Write the open passage as unfinished, where one is open."""
    if st.open_arm == NONE:
        return
    row = out.unfinished[out.n[N_UNFINISHED]]
    out.n[N_UNFINISHED] += 1
    row.vehicle_ix = vehicle
    row.arm_in_ix = st.open_arm
    row.reason = reason
    row.trip_start_us = st.trip_start_us
    row.entry_us = st.open_us
    row.last_us = max(last_us, st.open_us)
    st.open_arm = NONE
    st.since = UNFINISHED


@kernel
def enter(
    st: Any,
    vehicle: int,
    arm: int,
    t_us: int,
    at_m: float,
    speed_mps: float,
    error_s: float,
    par: Any,
    out: Out,
) -> None:
    """Pass an entry gate."""
    leave_unfinished(st, vehicle, BY_TURN, t_us, out)
    if st.since == SECTION and st.section_arm != NONE:
        row = out.section[out.n[N_SECTION]]
        out.n[N_SECTION] += 1
        row.vehicle_ix = vehicle
        row.arm_from_ix = st.section_arm
        row.arm_to_ix = arm
        row.max_step_ms = st.section_step_ms
        row.trip_start_us = st.trip_start_us
        row.from_us = st.last_gate_us
        row.to_us = t_us
        row.path_m = at_m - st.section_at_m
    credit(st, t_us, st.since)
    st.section_arm = NONE
    st.since = PASSAGE
    st.open_arm = arm
    st.open_us = t_us
    st.open_slow_us = 0
    st.open_at_m = at_m
    st.open_n = 0
    st.open_step_ms = 0
    st.open_speed_mps = speed_mps
    st.open_error_s = error_s
    st.has_met = 0
    st.is_queued = speed_mps < par.queue_mps or at_m - st.slow_at_m <= par.queue_look_m


@kernel
def leave(
    st: Any, vehicle: int, arm: int, t_us: int, at_m: float, error_s: float, index: StreetIndex, out: Out
) -> None:
    """Pass an exit gate: it ends a passage of its junction, and opens a section."""
    kind = OTHER
    if st.open_arm != NONE:
        same = index.arm_junction[st.open_arm] == index.arm_junction[arm]
        if same and (st.open_arm != arm or st.has_met):
            kind = PASSAGE
            row = out.passage[out.n[N_PASSAGE]]
            out.n[N_PASSAGE] += 1
            row.vehicle_ix = vehicle
            row.arm_in_ix = st.open_arm
            row.arm_out_ix = arm
            row.trip_start_us = st.trip_start_us
            row.entry_us = st.open_us
            row.exit_us = t_us
            beside = index.arm_entry_m[st.open_arm] + index.arm_exit_m[arm]
            row.inside_m = max(0.0, at_m - st.open_at_m - beside)
            row.n_pings = st.open_n
            row.max_step_ms = st.open_step_ms
            row.slow_ms = min(st.open_slow_us, t_us - st.open_us) // 1000
            both = np.sqrt(st.open_error_s * st.open_error_s + error_s * error_s)
            row.timing_error_ms = int(both * 1000.0 + 0.5)
            row.entry_speed_mps = st.open_speed_mps
            row.is_queued_at_gate = st.is_queued
            st.n_passages += 1
            st.open_arm = NONE
        else:
            leave_unfinished(st, vehicle, BY_TURN if same else BY_BREAK, t_us, out)
            kind = UNFINISHED
    elif st.since == UNFINISHED:
        kind = UNFINISHED
    credit(st, t_us, kind)
    st.since = SECTION
    st.section_arm = arm
    st.section_step_ms = 0
    st.section_at_m = at_m


@kernel
def write_trip(st: Any, vehicle: int, reason: int, end_us: int, out: Out) -> None:
    """Write the trip's row."""
    row = out.trip[out.n[N_TRIP]]
    out.n[N_TRIP] += 1
    row.vehicle_ix = vehicle
    row.end_reason = reason
    row.n_pings = st.n_pings
    row.n_passages = st.n_passages
    row.n_breaks = st.n_breaks
    row.n_caps = st.n_caps
    row.trip_start_us = st.trip_start_us
    row.end_us = max(end_us, st.last_gate_us)
    row.first_gate_us = st.first_gate_us
    row.last_gate_us = st.last_gate_us
    row.passage_us = st.passage_us
    row.section_us = st.section_us
    row.unfinished_us = st.unfinished_us
    row.other_us = st.other_us
    row.path_mm = int(st.path_m * 1000.0 + 0.5)
