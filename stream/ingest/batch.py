"""One batch from its first row to its commit."""

import logging
import time
from typing import Any

from stream.detect.records import DROP_REASONS, Found
from stream.ingest.job import Job
from stream.ingest.prefetch import prefetch
from stream.ingest.progress import Progress
from stream.ingest.usable import Sample, check_usable
from stream.pings import PingChunk, VehicleBook, open_source, watched
from stream.store.batch import BatchWriter
from stream.store.fleet import Fleet
from stream.store.ledger import Delivery
from stream.tally import Counts

log = logging.getLogger(__name__)


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
    with job.store.transaction():
        batch = _Batch(job, delivery, ix)
        if delivery.files:
            batch.read()
        if is_closing:
            batch.close()
        report = batch.finish(is_closing=is_closing)
    _log(report)
    return report


class _Batch:
    """What one batch has gathered so far."""

    def __init__(self, job: Job, delivery: Delivery, ix: int) -> None:
        self._job = job
        self._delivery = delivery
        self._at = (ix, job.n_batches)
        self._start = time.monotonic()
        self._writer = BatchWriter(job.store, job.settings, job.namer.key_id)
        self._fleet = Fleet(job.store, job.namer, round(job.settings.clean.lateness_s * 1e6))
        self._counts = Counts.empty()
        self._sample = Sample()

    def read(self) -> None:
        """Read all files, a chunk ahead of detection."""
        book, given = VehicleBook(), self._delivery
        source = open_source(given.files, self._job.settings)
        with prefetch(watched(source.chunks(book), given.files, given.stamps, given.digest)) as chunks:
            for chunk in chunks:
                self._fleet.grow(book.names)
                self._feed(chunk)
                self._tell(chunk)

    def _feed(self, chunk: PingChunk) -> None:
        totals = self._writer.totals
        totals.rows_in += chunk.n_rows_in
        for reason, n in chunk.dropped.items():
            totals.drop(reason, n)
        if len(chunk) == 0:
            return
        totals.span(int(chunk.t_us.min()), int(chunk.t_us.max()))
        self._sample.add(chunk.lon, chunk.lat)
        pings = self._fleet.in_order((chunk.vehicle_ix, chunk.t_us, chunk.lon, chunk.lat))
        self._put(self._job.detector.feed(self._fleet.states, *pings))

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
        """End what is open, also of vehicles that this delivery did not name."""
        self._fleet.add_open()
        self._put(self._job.detector.feed(self._fleet.states, *self._fleet.let_go()))
        self._put(self._job.detector.close(self._fleet.states))

    def finish(self, *, is_closing: bool) -> dict[str, Any]:
        """Check what was read, and write counts, carry and ledger."""
        job, totals = self._job, self._writer.totals
        totals.n_vehicles = len(self._fleet.names)
        totals.rows_held = self._fleet.held_now - self._fleet.held_before
        if self._delivery.files:
            check_usable(job.store, job.settings, self._delivery, totals, job.network, self._sample)
        self._writer.put_counts(self._counts, job.reference_id)
        self._fleet.put_carry(self._writer.batch_id)
        job.namer.save()
        return self._writer.finish(self._delivery, job.network["network_digest"], is_closed=is_closing)


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
