"""The record per vehicle: all that detection remembers between two pings, chunks or batches.

Guarantee: the record is complete. A run cut anywhere and gone on with from the carry gives the same
answer, to the bit. Its form has a version; columns of another version are refused by the store.
"""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

CARRY_VERSION = 1
MAX_KEPT = 48  # kept pings that wait for a commit, and one before them
MAX_COLUMNS = 24  # uncommitted columns (DESIGN.md section 5: 99 % within 7, at most 24)
MAX_SURVIVORS = 4  # candidates kept in a column

IDLE, MOVING, PARKED = 0, 1, 2  # mode
OTHER, PASSAGE, SECTION, UNFINISHED = 0, 1, 2, 3  # what the time since the last gate belongs to

STATE = np.dtype(
    [
        # last good ping, and one that is held because it may be a jump
        ("t_us", np.int64),
        ("lon", np.int32),  # 1e-7 degree
        ("lat", np.int32),
        ("held_us", np.int64),
        ("held_lon", np.int32),
        ("held_lat", np.int32),
        ("has_last", np.uint8),
        ("is_held", np.uint8),
        ("mode", np.uint8),
        ("is_placed", np.uint8),  # a committed position is there
        ("since", np.uint8),  # what the time since the last gate belongs to
        ("has_met", np.uint8),  # the open passage went over a node of its junction
        ("is_queued", np.uint8),
        ("n_skipped", np.uint8),  # anchors left out since the last column
        # dwell: where and since when the vehicle stays
        ("stay_us", np.int64),
        ("stay_lon", np.int32),
        ("stay_lat", np.int32),
        # trip
        ("trip_start_us", np.int64),
        ("first_gate_us", np.int64),  # -1 none
        ("last_gate_us", np.int64),
        ("passage_us", np.int64),
        ("section_us", np.int64),
        ("unfinished_us", np.int64),
        ("other_us", np.int64),
        ("path_m", np.float64),  # along the committed path
        ("n_pings", np.int32),
        ("n_passages", np.int32),
        ("n_breaks", np.int32),
        ("n_caps", np.int32),
        # committed position
        ("edge", np.int32),
        ("n_kept", np.int32),
        ("reach_m", np.float64),  # greatest chainage reached on it
        ("slow_at_m", np.float64),  # path_m where the vehicle last stood
        # open passage
        ("open_us", np.int64),
        ("open_slow_us", np.int64),
        ("open_at_m", np.float64),  # path_m of its entry gate
        ("open_arm", np.int32),  # -1 none
        ("open_n", np.int32),
        ("open_step_ms", np.int32),
        ("open_speed_mps", np.float32),
        ("open_error_s", np.float32),
        # open section
        ("section_arm", np.int32),  # whose exit gate opened it
        ("section_step_ms", np.int32),
        ("section_at_m", np.float64),
        # kept pings: arrival and leave, each with its place
        ("arrive_us", np.int64, (MAX_KEPT,)),
        ("leave_us", np.int64, (MAX_KEPT,)),
        ("kept_lon", np.int32, (MAX_KEPT,)),
        ("kept_lat", np.int32, (MAX_KEPT,)),
        ("left_lon", np.int32, (MAX_KEPT,)),
        ("left_lat", np.int32, (MAX_KEPT,)),
        ("kept_n", np.int32, (MAX_KEPT,)),  # pings in the stay
        ("kept_step_ms", np.int32, (MAX_KEPT,)),  # largest step up to and within the stay
        # columns of candidates; column 0 is the committed one
        ("n_columns", np.int32),
        ("anchor", np.int32),  # kept ping of the last anchor, -1 none
        ("column_kept", np.int8, (MAX_COLUMNS,)),
        ("column_n", np.int8, (MAX_COLUMNS,)),
        ("at_edge", np.int32, (MAX_COLUMNS, MAX_SURVIVORS)),
        ("back", np.int8, (MAX_COLUMNS, MAX_SURVIVORS)),  # in the column before
        ("at_m", np.float32, (MAX_COLUMNS, MAX_SURVIVORS)),
        ("cost", np.float64, (MAX_SURVIVORS,)),  # of the newest column, log units
    ],
    align=True,
)

_NAMES = tuple(STATE.names or ())
_SCALARS = tuple(n for n in _NAMES if not STATE[n].shape)
_KEPT = tuple(n for n in _NAMES if STATE[n].shape == (MAX_KEPT,))
_COLUMN = tuple(n for n in _NAMES if STATE[n].shape == (MAX_COLUMNS,))
_GRID = tuple(n for n in _NAMES if STATE[n].shape == (MAX_COLUMNS, MAX_SURVIVORS))


def new_states(n: int) -> NDArray[Any]:
    """Make records of vehicles that were never seen.

    Returns
    -------
    structured[n] of `STATE`
    """
    states = np.zeros(n, STATE)
    for name in ("first_gate_us", "last_gate_us", "edge", "open_arm", "section_arm", "anchor"):
        states[name] = -1
    return states


def held_rows(states: NDArray[Any]) -> int:
    """Count the pings that wait in the records for a decision."""
    return int(states["is_held"].sum())


def _used(name: str, states: NDArray[Any]) -> NDArray[np.int64]:
    """Count the values of a list field that each record uses."""
    n_columns = states["n_columns"].astype(np.int64)
    if name in _KEPT:
        return states["n_kept"].astype(np.int64)
    if name in _GRID:
        return n_columns * MAX_SURVIVORS
    return n_columns if name in _COLUMN else np.where(n_columns > 0, MAX_SURVIVORS, 0)


def _flat(name: str, states: NDArray[Any]) -> NDArray[Any]:
    """Give a list field as one row a record; a view."""
    return states[name].reshape(len(states), int(np.prod(STATE[name].shape)))


def carry_columns(states: NDArray[Any]) -> dict[str, Any]:
    """Spread records into columns, one a field.

    Returns
    -------
    dict
        An array for a scalar; for a list (the used part of a field) all values and how many each record has.
    """
    out: dict[str, Any] = {name: np.ascontiguousarray(states[name]) for name in _SCALARS}
    for name in (*_KEPT, *_COLUMN, *_GRID, "cost"):
        flat, lengths = _flat(name, states), _used(name, states)
        out[name] = (flat[np.arange(flat.shape[1]) < lengths[:, None]], lengths)
    return out


def states_from_columns(columns: Mapping[str, Any]) -> NDArray[Any]:
    """Put records together again from what `carry_columns` gave.

    Raises
    ------
    ValueError
        A column is missing, or a list is longer than the record has room for.
    """
    missing = [n for n in _NAMES if n not in columns]
    if missing:
        raise ValueError(f"columns missing in the carry: {missing}")
    states = new_states(len(columns["t_us"]))
    for name in _SCALARS:
        states[name] = np.asarray(columns[name])
    for name in (*_KEPT, *_COLUMN, *_GRID, "cost"):
        values, lengths = columns[name]
        flat = _flat(name, states)
        if len(lengths) and lengths.max() > flat.shape[1]:
            i = int(np.argmax(lengths))
            raise ValueError(f"{name} of vehicle {i} holds {lengths[i]} values, room for {flat.shape[1]}")
        flat[np.arange(flat.shape[1]) < lengths[:, None]] = values
    return states
