"""What detection gives back: plain numpy records and the codes that stand in them."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

# Order = code. The last two are counted by the reader, the others by the pass.
DROP_REASONS = (
    "bad_coordinate",
    "null_island",
    "outside_area",
    "duplicate",
    "same_time_elsewhere",
    "late",
    "impossible_speed",
    "bad_time",
    "bad_vehicle",
)

UNFINISHED_REASONS = ("gap", "dwell", "break", "close", "timeout", "turned_back")
END_REASONS = ("gap", "dwell", "close", "jump")

PASSAGE = np.dtype(
    [
        ("vehicle_ix", np.int32),
        ("arm_in_ix", np.int32),
        ("arm_out_ix", np.int32),
        ("trip_start_us", np.int64),  # names the trip within the vehicle
        ("entry_us", np.int64),
        ("exit_us", np.int64),
        ("inside_m", np.float64),  # path between the two mouths
        ("n_pings", np.int32),
        ("max_step_ms", np.int32),
        ("slow_ms", np.int32),
        ("timing_error_ms", np.int32),
        ("entry_speed_mps", np.float32),
        ("is_queued_at_gate", np.uint8),
    ],
    align=True,
)
SECTION = np.dtype(
    [
        ("vehicle_ix", np.int32),
        ("arm_from_ix", np.int32),  # its exit gate opens the section
        ("arm_to_ix", np.int32),  # its entry gate closes it
        ("max_step_ms", np.int32),
        ("trip_start_us", np.int64),
        ("from_us", np.int64),
        ("to_us", np.int64),
        ("path_m", np.float64),
    ],
    align=True,
)
UNFINISHED = np.dtype(
    [
        ("vehicle_ix", np.int32),
        ("arm_in_ix", np.int32),
        ("reason", np.int32),  # index into UNFINISHED_REASONS
        ("trip_start_us", np.int64),
        ("entry_us", np.int64),
        ("last_us", np.int64),  # last sight inside
    ],
    align=True,
)
# Times between the first and the last gate of a trip add up, exactly:
# last_gate_us - first_gate_us = passage_us + section_us + unfinished_us + other_us.
TRIP = np.dtype(
    [
        ("vehicle_ix", np.int32),
        ("end_reason", np.int32),  # index into END_REASONS
        ("n_pings", np.int32),
        ("n_passages", np.int32),
        ("n_breaks", np.int32),
        ("n_caps", np.int32),
        ("trip_start_us", np.int64),
        ("end_us", np.int64),
        ("first_gate_us", np.int64),  # -1: the trip met no gate
        ("last_gate_us", np.int64),
        ("passage_us", np.int64),
        ("section_us", np.int64),
        ("unfinished_us", np.int64),
        ("other_us", np.int64),
        ("path_mm", np.int64),  # length of the followed path
    ],
    align=True,
)


def new_record(dtype: np.dtype[Any]) -> Any:
    """Make one zeroed record whose fields are attributes; kernels take it by reference."""
    return np.zeros(1, dtype).view(np.recarray)[0]


@dataclass(frozen=True)
class Found:
    """What one chunk gave: structured arrays of the dtypes above, and counts.

    `dropped` is int64[len(DROP_REASONS)]; `n_used` + sum(dropped) + change of held rows = rows in.
    """

    passages: NDArray[Any]
    sections: NDArray[Any]
    unfinished: NDArray[Any]
    trips: NDArray[Any]
    dropped: NDArray[np.int64]
    n_used: int
