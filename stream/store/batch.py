"""One batch being written: rows chunk by chunk, then counts, carry and the ledger row.

Guarantee: a writer lives inside one transaction of the store; its ledger row is the last statement, and it
is written only when every row in is accounted for.
"""

import time
from dataclasses import dataclass, field
from typing import Any

import polars as pl

from stream.config import Settings
from stream.store.database import Store, now_us
from stream.store.ledger import Delivery, pin_config
from stream.store.rows import Rows
from stream.tally import Counts


@dataclass
class BatchTotals:
    """What a batch has taken in and given so far; integers only.

    Attributes
    ----------
    rows_in, rows_used, rows_held : rows read; rows decided on and kept; rows waiting, after minus before
    dropped, unfinished : counts by reason, without zeros
    passages, sections, trips : rows written
    n_vehicles : vehicles seen
    first_ping_us, last_ping_us : range of the times read, None while there are none
    """

    rows_in: int = 0
    rows_used: int = 0
    rows_held: int = 0
    dropped: dict[str, int] = field(default_factory=dict)
    unfinished: dict[str, int] = field(default_factory=dict)
    passages: int = 0
    sections: int = 0
    trips: int = 0
    n_vehicles: int = 0
    first_ping_us: int | None = None
    last_ping_us: int | None = None

    def drop(self, reason: str, n: int) -> None:
        """Count rows dropped for one reason."""
        if n:
            self.dropped[reason] = self.dropped.get(reason, 0) + n

    def span(self, first_us: int, last_us: int) -> None:
        """Widen the range of times read."""
        self.first_ping_us = first_us if self.first_ping_us is None else min(self.first_ping_us, first_us)
        self.last_ping_us = last_us if self.last_ping_us is None else max(self.last_ping_us, last_us)

    def check(self) -> None:
        """Hold the promise that no row is lost or counted twice.

        Raises
        ------
        RuntimeError
            Rows don't add up: a fault of this program, so nothing may be committed.
        """
        found = self.rows_used + sum(self.dropped.values()) + self.rows_held
        if found != self.rows_in:
            raise RuntimeError(
                f"rows don't add up: {self.rows_in} in, {self.rows_used} used + {self.dropped} dropped "
                f"+ {self.rows_held} held = {found}; nothing was written; please report this"
            )


def put_tallies(store: Store, settings: Settings, reference_id: int) -> None:
    """Name the tallies that the store has not yet."""
    tallies = settings.tallies
    named = {
        "tally": list(tallies),
        "value": [t.value for t in tallies.values()],
        "dimensions": [list(t.dimensions) for t in tallies.values()],
        "reference_id": [reference_id] * len(tallies),
    }
    store.run("batch/put_tally", incoming=pl.DataFrame(named))


def put_counts(store: Store, batch_id: int, counts: Counts) -> None:
    """Write counts under a batch's number."""
    batch = {"batch_id": batch_id}
    store.run("batch/put_stratum", incoming=counts.stratum)
    store.run("batch/add_histogram", batch, counts.histogram)
    store.run("batch/add_moment", batch, counts.moment)


class BatchWriter:
    """Writes one batch into the open transaction of a store.

    Attributes
    ----------
    batch_id : int
    totals : BatchTotals, kept by the writer for rows written, by the caller for rows read
    """

    def __init__(self, store: Store, settings: Settings, key_id: str) -> None:
        self._store = store
        self._settings = settings
        self._started_us = now_us()
        self._start_s = time.monotonic()
        self.batch_id = int(store.run("ledger/next_batch_id")[0][0])
        self.totals = BatchTotals()
        pin_config(store, settings, key_id)

    def put(self, rows: Rows) -> None:
        """Write what one chunk gave."""
        batch = {"batch_id": self.batch_id}
        for table in ("passage", "section", "unfinished", "trip"):
            frame: pl.DataFrame = getattr(rows, table)
            if frame.height:
                self._store.run(f"batch/put_{table}", batch, frame)
        self.totals.passages += rows.passage.height
        self.totals.sections += rows.section.height
        self.totals.trips += rows.trip.height
        for reason, n in rows.unfinished["reason"].value_counts().iter_rows():
            self.totals.unfinished[reason] = self.totals.unfinished.get(reason, 0) + n

    def put_counts(self, counts: Counts, reference_id: int) -> None:
        """Write the batch's tallies."""
        put_tallies(self._store, self._settings, reference_id)
        put_counts(self._store, self.batch_id, counts)

    def finish(
        self,
        delivery: Delivery,
        network_digest: str,
        *,
        is_closed: bool,
        is_backfill: bool = False,
        trips_cut: tuple[int, int] = (0, 0),
    ) -> dict[str, Any]:
        """Check the rows and write the ledger.

        Parameters
        ----------
        delivery, network_digest
            What came, and the network it was set on.
        is_closed
            What was open has been ended.
        is_backfill
            It was taken in alone.
        trips_cut
            Trips that may be parts of longer ones: at their start, at their end.

        Returns
        -------
        dict
            The batch as `ingest` reports it.

        Raises
        ------
        RuntimeError
            Rows don't add up.
        """
        got = self.totals
        got.check()
        reasons = {"reason": list(got.dropped), "n": list(got.dropped.values())}
        counted = pl.DataFrame(reasons, schema={"reason": pl.String, "n": pl.Int64})
        self._store.run("batch/put_batch_count", {"batch_id": self.batch_id}, counted)
        row = {
            "batch_id": self.batch_id,
            "batch_name": delivery.name,
            "content_digest": delivery.digest,
            "config_digest": self._settings.digest(),
            "network_digest": network_digest,
            "files": [f.name for f in delivery.files],
            "rows_in": got.rows_in,
            "rows_used": got.rows_used,
            "rows_dropped": sum(got.dropped.values()),
            "rows_held": got.rows_held,
            "n_vehicles": got.n_vehicles,
            "first_ping_us": got.first_ping_us,
            "last_ping_us": got.last_ping_us,
            "started_us": self._started_us,
            "ended_us": max(now_us(), self._started_us),  # the clock may have been set back
            "is_closed": is_closed,
            "is_backfill": is_backfill,
            "trips_cut_start": trips_cut[0],
            "trips_cut_end": trips_cut[1],
        }
        self._store.run("batch/put_batch", row)
        return self._report(row)

    def _report(self, row: dict[str, Any]) -> dict[str, Any]:
        got = self.totals
        return {
            "batch": row["batch_name"],
            "batch_id": self.batch_id,
            "status": "taken in" if row["files"] else "closed",
            "rows_in": got.rows_in,
            "rows_used": got.rows_used,
            "rows_dropped": row["rows_dropped"],
            "rows_held": got.rows_held,
            "dropped": dict(sorted(got.dropped.items())),
            "n_vehicles": got.n_vehicles,
            "passages": got.passages,
            "sections": got.sections,
            "trips": got.trips,
            "unfinished": dict(sorted(got.unfinished.items())),
            "is_closed": row["is_closed"],
            "is_backfill": row["is_backfill"],
            "trips_cut_start": row["trips_cut_start"],
            "trips_cut_end": row["trips_cut_end"],
            "seconds": round(time.monotonic() - self._start_s, 3),
        }
