"""One batch from its first row to its commit.

Guarantee: a batch in order goes on from the carry and changes it; a backfill, older than what is in, starts
from nothing, is closed at its end, and leaves the carry as it is.
"""

import logging
import time
from collections.abc import Sequence
from typing import Any

import numpy as np

from stream.detect.records import DROP_REASONS, Found
from stream.ingest.job import Job
from stream.ingest.prefetch import prefetch
from stream.ingest.progress import Progress
from stream.ingest.spans import Spans
from stream.ingest.standing import OtherKindError, Standing
from stream.ingest.usable import Sample, check_usable
from stream.pings import PingChunk, VehicleBook, open_source, watched
from stream.store.batch import BatchWriter
from stream.store.fleet import Fleet, Pings
from stream.store.ledger import Delivery
from stream.tally import Counts

log = logging.getLogger(__name__)
_AROUND_DEG = 0.01  # about 1 km: farther than any road can be followed from the network


def take_in(job: Job, delivery: Delivery, ix: int, *, is_closing: bool) -> dict[str, Any]:
    """Take one delivery in as one transaction.

    Parameters
    ----------
    job
        Store, settings, detector.
    delivery
        Its files are read as one stream; none for a batch that only closes.
    ix
        Which of the call's batches it is, from 0.
    is_closing
        End what is open, of all vehicles, after the last row.

    Returns
    -------
    dict
        The batch as `ingest` reports it.

    Raises
    ------
    InputError
        A file can't be read or used; nothing is written.
    StoreError
        The store can't be written.
    """
    try:
        report = _attempt(job, delivery, ix, None, is_closing=is_closing)
    except OtherKindError as other:
        log.info("batch_anew batch=%s is_backfill=%s", delivery.name, other.is_backfill)
        report = _attempt(job, delivery, ix, other.is_backfill, is_closing=is_closing)
    _log(report)
    return report


def _attempt(
    job: Job, delivery: Delivery, ix: int, is_backfill: bool | None, *, is_closing: bool
) -> dict[str, Any]:
    with job.store.transaction():
        batch = _Batch(job, delivery, ix, is_backfill)
        if delivery.files:
            batch.read()
        if is_closing or batch.is_backfill:
            batch.close()
        return batch.finish(is_closing=is_closing)


class _Batch:
    """What one batch has gathered so far."""

    def __init__(self, job: Job, delivery: Delivery, ix: int, is_backfill: bool | None) -> None:
        self._job = job
        self._delivery = delivery
        self._at = (ix, job.n_batches)
        self._start = time.monotonic()
        self._writer = BatchWriter(job.store, job.settings, job.namer.key_id)
        self._fleet = Fleet(job.store, job.namer, round(job.settings.clean.lateness_s * 1e6))
        self._standing = Standing(job.store, job.settings, is_backfill)
        max_gap_us = round(job.settings.trips.max_gap_s * 1e6)
        box = [job.network[name] for name in ("min_lon", "min_lat", "max_lon", "max_lat")]
        around = np.array(box) + _AROUND_DEG * np.array([-1, -1, 1, 1])
        self._spans = Spans(job.store, self._writer.batch_id, around, max_gap_us)
        self._counts = Counts.empty()
        self._sample = Sample()

    @property
    def is_backfill(self) -> bool:
        """Whether the batch is taken in alone."""
        return bool(self._standing.is_backfill)

    def read(self) -> None:
        """Read all files, a chunk ahead of detection."""
        book, given = VehicleBook(), self._delivery
        source = open_source(given.files, self._job.settings)
        with prefetch(watched(source.chunks(book), given.files, given.stamps, given.digest)) as chunks:
            for chunk in chunks:
                self._feed(chunk, book.names)
                self._tell(chunk)
        self._fleet.meet(book.names)
        self._standing.verdict(self._writer.totals.rows_in)

    def _feed(self, chunk: PingChunk, names: Sequence[str]) -> None:
        totals = self._writer.totals
        totals.rows_in += chunk.n_rows_in
        for reason, n in chunk.dropped.items():
            totals.drop(reason, n)
        if len(chunk) == 0:
            return
        totals.span(int(chunk.t_us.min()), int(chunk.t_us.max()))
        self._sample.add(chunk.lon, chunk.lat)
        fleet = self._fleet
        fleet.meet(names[: int(chunk.vehicle_ix.max()) + 1])  # the reader is ahead and knows more
        pings = self._new(chunk)
        fleet.load(is_alone=self.is_backfill)
        self._spans.add(pings, fleet.names, fleet.newest_us, is_backfill=self.is_backfill)
        self._put(self._job.detector.feed(fleet.states, *fleet.in_order(pings)))

    def _new(self, chunk: PingChunk) -> Pings:
        """Leave out, as late, what is in already.

        Raises
        ------
        OtherKindError
            The batch is a backfill, and states were loaded before that was seen.
        """
        was_open = self._standing.is_backfill is None
        pings = (chunk.vehicle_ix, chunk.t_us, chunk.lon, chunk.lat)
        keep = self._standing.look(pings, self._fleet.names, self._fleet.newest_us)
        if was_open and self.is_backfill and self._fleet.has_states:
            raise OtherKindError(is_backfill=True)
        if keep.all():
            return pings
        self._writer.totals.drop("late", len(keep) - int(keep.sum()))
        return (pings[0][keep], pings[1][keep], pings[2][keep], pings[3][keep])

    def _put(self, found: Found) -> None:
        totals = self._writer.totals
        totals.rows_used += found.n_used
        for reason, n in zip(DROP_REASONS, found.dropped.tolist(), strict=True):
            totals.drop(reason, n)
        rows = self._job.maker.make(found, self._fleet.names, self._fleet.codes)
        self._writer.put(rows)
        self._counts += rows.counts

    def _tell(self, chunk: PingChunk) -> None:
        totals = self._writer.totals
        seconds = time.monotonic() - self._start
        at = Progress(
            self._delivery.name,
            *self._at,
            totals.rows_in,
            totals.passages,
            chunk.bytes_done,
            chunk.bytes_total,
            seconds,
        )
        log.debug("chunk_done batch=%s rows=%d passages=%d", at.batch, at.rows, at.passages)
        self._job.tell(at)

    def close(self) -> None:
        """End what is open; but for a backfill, also of vehicles that this delivery did not name."""
        if not self.is_backfill:
            self._fleet.load()
            self._fleet.add_open()
        self._put(self._job.detector.feed(self._fleet.states, *self._fleet.let_go()))
        self._put(self._job.detector.close(self._fleet.states))

    def finish(self, *, is_closing: bool) -> dict[str, Any]:
        """Check what was read, and write counts, carry and ledger."""
        job, totals = self._job, self._writer.totals
        totals.n_vehicles = len(self._fleet.names)
        totals.rows_held = self._fleet.held_now - self._fleet.held_before
        if self._delivery.files:
            check_usable(job, self._delivery, totals, self._standing, self._sample)
        self._writer.put_counts(self._counts, job.reference_id)
        self._spans.finish(self._fleet.names, is_backfill=self.is_backfill)
        cut = (0, 0)
        if self.is_backfill:
            cut = self._count_cut()
        else:
            self._fleet.load()
            self._fleet.put_carry(self._writer.batch_id)
        job.namer.save()
        return self._writer.finish(
            self._delivery,
            job.network["network_digest"],
            is_closed=is_closing or self.is_backfill,
            is_backfill=self.is_backfill,
            trips_cut=cut,
        )

    def _count_cut(self) -> tuple[int, int]:
        """Count the trips that may be parts of longer ones."""
        wanted = {
            "batch_id": self._writer.batch_id,
            "max_gap_us": round(self._job.settings.trips.max_gap_s * 1e6),
        }
        ((n_start, n_end),) = self._job.store.run("ledger/count_cut", wanted)
        return n_start, n_end


def _log(report: dict[str, Any]) -> None:
    said = " ".join(f"{key}={value}" for key, value in report.items())
    log.info("batch_done %s peak_rss_mb=%s", said, _peak_mb())


def _peak_mb() -> int | None:
    """Give the peak memory of this process, None where the system doesn't tell."""
    try:
        import resource
    except ImportError:
        return None
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss // 1024
