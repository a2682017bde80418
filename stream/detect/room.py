"""Room for a new column of candidates; nothing in it outlives a ping."""

from typing import Any

import numpy as np

from stream.detect.candidates import MAX_ROADS

MAX_CANDIDATES = 2 * MAX_ROADS
COLUMN = np.dtype(
    [
        ("edge", np.int32, (MAX_CANDIDATES,)),
        ("back", np.int32, (MAX_CANDIDATES,)),  # survivor they come from, -1 none
        ("at_m", np.float64, (MAX_CANDIDATES,)),
        ("square_m2", np.float64, (MAX_CANDIDATES,)),  # off the edge
        ("cost", np.float64, (MAX_CANDIDATES,)),
        ("best", np.float64, (MAX_CANDIDATES,)),
        # edges ahead of a survivor
        ("ahead", np.int32, (MAX_CANDIDATES,)),
        ("ahead_m", np.float64, (MAX_CANDIDATES,)),
        ("ahead_cost", np.float64, (MAX_CANDIDATES,)),
    ],
    align=True,
)
Column = Any  # record of COLUMN
