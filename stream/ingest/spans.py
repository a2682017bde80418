"""When each vehicle of a batch was seen: spans of time, parted by silences of an hour.

Guarantee: every ping near the network lies in a span; the spans depend on the order of the pings, not on
how they were cut into chunks.
"""

from collections.abc import Sequence
from typing import Any

import numpy as np
import polars as pl
from numpy.typing import NDArray

from stream.kernel import kernel
from stream.store import Store
from stream.store.fleet import NEVER_US, Pings

I64 = NDArray[np.int64]
F64 = NDArray[np.float64]
_SILENCE_US = 3_600_000_000


@kernel
def span_kernel(
    vehicle_ix: NDArray[np.int32],
    t_us: I64,
    lon: F64,
    lat: F64,
    box: F64,
    newest: I64,
    max_gap_us: int,
    first: I64,
    last: I64,
    top: I64,
    vehicle_out: NDArray[np.int32],
    first_out: I64,
    last_out: I64,
) -> tuple[int, bool]:
    """Widen the open span of each vehicle, or end it and begin another.

    Parameters
    ----------
    vehicle_ix : int32[n]     dense
    t_us : int64[n]           UTC epoch, any order
    lon, lat : float64[n]     degrees; pings outside the box are left out
    box : float64[4]          least longitude, least latitude, greatest of both
    newest : int64[v]         newest ping before the batch; a silence since then up to max_gap_us counts in
    max_gap_us : int64
    first, last : int64[v]    the open spans; first > last: none; changed
    top : int64[v]            end of the latest span that ended; changed
    vehicle_out, first_out, last_out : [n]    written: spans that ended

    Returns
    -------
    n_ended : int64
    is_mixed : bool           a span lies within an hour of one that ended: they are to be joined
    """
    n_ended = 0
    is_mixed = False
    for i in range(vehicle_ix.shape[0]):
        if not (box[0] <= lon[i] <= box[2] and box[1] <= lat[i] <= box[3]):
            continue
        v = vehicle_ix[i]
        t = t_us[i]
        is_open = first[v] <= last[v]
        if is_open and first[v] - _SILENCE_US <= t <= last[v] + _SILENCE_US:
            first[v] = min(first[v], t)
            last[v] = max(last[v], t)
        else:
            if is_open:
                vehicle_out[n_ended] = v
                first_out[n_ended] = first[v]
                last_out[n_ended] = last[v]
                n_ended += 1
                top[v] = max(top[v], last[v])
            first[v] = newest[v] + 1 if newest[v] < t <= newest[v] + max_gap_us else t
            last[v] = t
        if first[v] <= top[v] + _SILENCE_US:
            is_mixed = True
    return n_ended, is_mixed


class Spans:
    """Gathers the spans of one batch, and writes them: ended ones chunk by chunk, open ones at the end.

    Parameters
    ----------
    store
        Written to within the batch's transaction.
    batch_id
        Number of the batch.
    box
        float64[4], the network's area with some room around it.
    max_gap_us
        The longest silence within a trip.
    """

    def __init__(self, store: Store, batch_id: int, box: F64, max_gap_us: int) -> None:
        self._store = store
        self._batch_id = batch_id
        self._box = box
        self._max_gap_us = max_gap_us
        self._first: I64 = np.zeros(0, np.int64)
        self._last: I64 = np.zeros(0, np.int64)
        self._top: I64 = np.zeros(0, np.int64)
        self._is_mixed = False

    def add(self, pings: Pings, names: Sequence[str], newest_us: I64, *, is_backfill: bool) -> None:
        """Take the pings of one chunk.

        Parameters
        ----------
        pings
            vehicle_ix, t_us, lon, lat.
        names, newest_us
            Of each vehicle, by code; a backfill goes on from nothing.
        """
        n_new = len(names) - len(self._first)
        self._first = np.concatenate([self._first, np.full(n_new, np.iinfo(np.int64).max)])
        self._last = np.concatenate([self._last, np.full(n_new, np.iinfo(np.int64).min)])
        self._top = np.concatenate([self._top, np.full(n_new, NEVER_US)])
        newest = np.full(len(names), NEVER_US) if is_backfill else newest_us
        n = len(pings[1])
        out = np.empty(n, np.int32), np.empty(n, np.int64), np.empty(n, np.int64)
        state = self._first, self._last, self._top
        n_ended, is_mixed = span_kernel(*pings, self._box, newest, self._max_gap_us, *state, *out)
        self._is_mixed |= is_mixed
        self._put(out[0][:n_ended], out[1][:n_ended], out[2][:n_ended], names, is_backfill)

    def finish(self, names: Sequence[str], *, is_backfill: bool) -> None:
        """Write what is open; where times came out of order, join what belongs together."""
        met = np.flatnonzero(self._first <= self._last).astype(np.int32)
        self._put(met, self._first[met], self._last[met], names, is_backfill)
        if self._is_mixed:
            wanted = {"batch_id": self._batch_id}
            joined = joined_up(self._store.frame("ledger/span_of", wanted))
            self._store.run("ledger/clear_span", wanted)
            self._store.run("batch/put_span", {**wanted, "is_backfill": is_backfill}, joined)

    def _put(
        self, vehicle_ix: NDArray[np.int32], first: I64, last: I64, names: Sequence[str], is_backfill: bool
    ) -> None:
        if len(vehicle_ix) == 0:
            return
        rows = pl.DataFrame(
            {"vehicle": [names[v] for v in vehicle_ix.tolist()], "first_us": first, "last_us": last}
        )
        said: dict[str, Any] = {"batch_id": self._batch_id, "is_backfill": is_backfill}
        self._store.run("batch/put_span", said, rows)


def joined_up(spans: pl.DataFrame) -> pl.DataFrame:
    """Join spans of a vehicle that overlap or lie within an hour.

    Parameters
    ----------
    spans
        vehicle, first_us, last_us, in any order.

    Returns
    -------
    The spans, an hour apart or more, sorted by vehicle and time.
    """
    ordered = spans.sort("vehicle", "first_us")
    reached = pl.col("last_us").cum_max().shift(1).over("vehicle")
    is_apart = reached.is_null() | (pl.col("first_us") > reached + _SILENCE_US)
    return (
        ordered.with_columns(is_apart.cum_sum().alias("part"))
        .group_by("vehicle", "part")
        .agg(pl.col("first_us").min(), pl.col("last_us").max())
        .select("vehicle", "first_us", "last_us")
        .sort("vehicle", "first_us")
    )
