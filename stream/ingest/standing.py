"""Where a batch stands to what is in: newer, older, or both; and which of its pings are in already.

Guarantee: no time of a vehicle is taken in twice. The verdict rests on the batch as a whole, not on its
chunks: a batch that turns out to be of the other kind is taken in anew.
"""

from collections.abc import Sequence

import numpy as np
import polars as pl
from numpy.typing import NDArray

from stream.config import Settings
from stream.store import Store
from stream.store.fleet import NEVER_US, Pings

I64 = NDArray[np.int64]
Mask = NDArray[np.bool_]
LATE_SHARE = 0.2  # late rows, above which a batch is refused, or is no late part of those before it
PARTLY_SHARE = 0.01  # rows newer than all that is in, above which a batch is no backfill


class OtherKindError(Exception):
    """A batch was begun as the wrong kind; it has to begin anew as `is_backfill` says."""

    def __init__(self, is_backfill: bool) -> None:
        super().__init__()
        self.is_backfill = is_backfill


def _is_backfill(n_rows: int, n_older: int, n_apart: int, n_newer: int) -> bool:
    """Tell a batch that is older than what is in from one with some late rows."""
    return n_newer <= PARTLY_SHARE * n_rows and (n_apart > 0 or n_older > LATE_SHARE * n_rows)


class Standing:
    """Looks at the pings of one batch before they are taken in.

    Attributes
    ----------
    is_backfill : None until a chunk brings a vehicle that is known
    n_older : pings older than the newest one of their vehicle, at times that are not in
    n_apart : those of them that are farther than a trip's silence from any
    n_newer : pings newer than all that is in
    n_in : pings whose time is in already
    newest_us : newest ping in the store, of batches in order
    """

    def __init__(self, store: Store, settings: Settings, is_backfill: bool | None) -> None:
        self._store = store
        self._lateness_us = round(settings.clean.lateness_s * 1e6)
        self._max_gap_us = round(settings.trips.max_gap_s * 1e6)
        newest = store.run("carry/newest_ping")[0][0]
        self.newest_us = NEVER_US if newest is None else int(newest)
        seen = store.run("ledger/newest_span")[0]
        self._any_us, self._backfill_us = (NEVER_US if us is None else int(us) for us in seen)
        self.is_backfill = is_backfill
        self.n_older = 0
        self.n_apart = 0
        self.n_newer = 0
        self.n_in = 0

    def look(self, pings: Pings, names: Sequence[str], newest_us: I64) -> Mask:
        """Count how the pings of a chunk stand, and find those that may be taken in.

        Parameters
        ----------
        pings
            vehicle_ix, t_us, lon, lat.
        names, newest_us
            Of each vehicle, by code.

        Returns
        -------
        bool[n], False for pings whose time is in already; detection counts the other late ones itself
        """
        vehicle_ix, t_us = pings[0], pings[1]
        newest = newest_us[vehicle_ix]
        is_behind = t_us < newest - self._lateness_us  # never true of an unknown vehicle
        n_newer = int((t_us > self.newest_us).sum())
        n_older, n_apart = self._older(vehicle_ix[is_behind], t_us[is_behind], names)
        if self.is_backfill is None and bool((newest > NEVER_US).any()):
            self.is_backfill = _is_backfill(len(t_us), n_older, n_apart, n_newer)
        self.n_older += n_older
        self.n_apart += n_apart
        self.n_newer += n_newer
        if self.is_backfill:
            keep = ~self._is_in(vehicle_ix, t_us, names, only_backfill=False)
            self.n_in += len(keep) - int(keep.sum())
            return keep
        self.n_in += int(is_behind.sum()) - n_older
        keep = np.ones(len(t_us), np.bool_)
        ahead = np.flatnonzero(t_us > newest)  # detection itself tells those that are not
        if len(ahead) and int(t_us[ahead].min()) <= self._backfill_us + self._max_gap_us:
            keep[ahead] = ~self._is_in(vehicle_ix[ahead], t_us[ahead], names, only_backfill=True)
            self.n_in += len(keep) - int(keep.sum())
        return keep

    def verdict(self, n_rows: int) -> bool:
        """Tell whether the batch, now that all of it was seen, is a backfill.

        Raises
        ------
        OtherKindError
            It was taken for the other kind.
        """
        is_backfill = _is_backfill(n_rows, self.n_older, self.n_apart, self.n_newer)
        if is_backfill != bool(self.is_backfill):
            raise OtherKindError(is_backfill)
        return is_backfill

    def _older(self, vehicle_ix: NDArray[np.int32], t_us: I64, names: Sequence[str]) -> tuple[int, int]:
        """Count the pings at times that are not in, and those farther than a trip's silence from any."""
        if len(t_us) == 0:
            return 0, 0
        spans = self._spans(vehicle_ix, t_us, names, only_backfill=False)
        n_older = int((~within(vehicle_ix, t_us, spans)).sum())
        wide = [(pl.col("first_us") - self._max_gap_us), (pl.col("last_us") + self._max_gap_us)]
        return n_older, int((~within(vehicle_ix, t_us, spans.with_columns(wide))).sum())

    def _is_in(
        self, vehicle_ix: NDArray[np.int32], t_us: I64, names: Sequence[str], *, only_backfill: bool
    ) -> Mask:
        """Tell the pings whose time is in already.

        A span shorter than a trip's silence is drawn out by it: else a trip could run on across it.
        """
        if len(t_us) == 0 or int(t_us.min()) > self._any_us + self._max_gap_us:
            return np.zeros(len(t_us), np.bool_)
        spans = self._spans(vehicle_ix, t_us, names, only_backfill=only_backfill)
        is_short = pl.col("last_us") - pl.col("first_us") < self._max_gap_us
        drawn = pl.col("last_us") + pl.when(is_short).then(self._max_gap_us).otherwise(0)
        return within(vehicle_ix, t_us, spans.with_columns(drawn.alias("last_us")))

    def _spans(
        self, vehicle_ix: NDArray[np.int32], t_us: I64, names: Sequence[str], *, only_backfill: bool
    ) -> pl.DataFrame:
        """Find what is in of these vehicles around these times."""
        met = np.unique(vehicle_ix)
        asked = pl.DataFrame(
            {"ix": met.astype(np.int64), "vehicle": [names[v] for v in met.tolist()]},
        )
        around = {
            "from_us": int(t_us.min()) - self._max_gap_us,
            "to_us": int(t_us.max()) + self._max_gap_us,
            "only_backfill": only_backfill,
        }
        return self._store.frame("ledger/spans_near", around, asked)


def within(vehicle_ix: NDArray[np.int32], t_us: I64, spans: pl.DataFrame) -> Mask:
    """Tell which pings lie in a span of their vehicle, ends included.

    Parameters
    ----------
    vehicle_ix, t_us
        int32[n] and int64[n].
    spans
        ix, first_us, last_us; may overlap.

    Returns
    -------
    bool[n]
    """
    if spans.height == 0:
        return np.zeros(len(t_us), np.bool_)
    ordered = spans.sort("ix", "first_us").with_columns(pl.col("last_us").cum_max().over("ix"))
    pings = pl.DataFrame({"ix": vehicle_ix.astype(np.int64), "t_us": t_us}).with_row_index("row")
    met = pings.sort("t_us").join_asof(
        ordered.sort("first_us"), left_on="t_us", right_on="first_us", by="ix", check_sortedness=False
    )
    inside = met.select("row", (pl.col("t_us") <= pl.col("last_us")).fill_null(False).alias("is_in"))
    return inside.sort("row")["is_in"].to_numpy()
