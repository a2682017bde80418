"""Room for a new column of candidates; nothing in it outlives a ping."""

from typing import NamedTuple

import numpy as np

from stream.detect.candidates import MAX_ROADS
from stream.network.model import F64, I32


class Column(NamedTuple):
    """Candidates of one ping, and the edges ahead of a survivor."""

    edge: I32  # [2 * MAX_ROADS]
    back: I32  # survivor they come from, -1 none
    at_m: F64
    square_m2: F64  # off the edge
    cost: F64
    best: F64
    ahead: I32
    ahead_m: F64
    ahead_cost: F64


def new_column() -> Column:
    """Make room for the candidates of one ping."""
    n = 2 * MAX_ROADS
    whole = [np.zeros(n, np.int32) for _ in range(3)]
    real = [np.zeros(n) for _ in range(6)]
    return Column(whole[0], whole[1], real[0], real[1], real[2], real[3], whole[2], real[4], real[5])
