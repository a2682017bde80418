"""Unimpeded times: what a gate-to-gate path takes at cruise speed, and the delay on top of it.

Guarantee: whole milliseconds from additions, multiplications and divisions of doubles alone, so that the
same passage has the same delay on every machine.

Source: DESIGN.md section 6.
"""

from typing import Any

import numpy as np
from numpy.typing import NDArray

Reals = NDArray[np.floating[Any]]
I64 = NDArray[np.int64]


def traversal_ms(entry_us: NDArray[np.int64], exit_us: NDArray[np.int64]) -> I64:
    """Give exit minus entry in whole milliseconds, half a millisecond up."""
    return (exit_us - entry_us + 500) // 1000


def unimpeded_ms(
    gate_in_m: Reals, inside_m: Reals, gate_out_m: Reals, cruise_in_mps: Reals, cruise_out_mps: Reals
) -> I64:
    """Give the time from gate to gate at cruise speed.

    The pace inside the junction is the mean of the paces of the two arms.

    Parameters
    ----------
    gate_in_m, inside_m, gate_out_m
        float[n], entry gate to mouth, mouth to mouth, mouth to exit gate.
    cruise_in_mps, cruise_out_mps
        float[n], > 0, cruise speeds of the arm in (inbound) and the arm out (outbound).

    Returns
    -------
    int64[n], ms, rounded to the nearest (ties to even)
    """
    pace_in = 1.0 / np.asarray(cruise_in_mps, dtype=np.float64)
    pace_out = 1.0 / np.asarray(cruise_out_mps, dtype=np.float64)
    seconds = gate_in_m * pace_in + inside_m * ((pace_in + pace_out) * 0.5) + gate_out_m * pace_out
    return np.rint(seconds * 1000.0).astype(np.int64)


def pace_ms(duration_ms: NDArray[Any], path_m: Reals) -> I64:
    """Give the pace of sections in ms per km.

    Parameters
    ----------
    duration_ms
        int[n].
    path_m
        float[n], > 0.

    Returns
    -------
    int64[n], rounded to the nearest (ties to even)
    """
    return np.rint(np.asarray(duration_ms, dtype=np.float64) * 1000.0 / path_m).astype(np.int64)
