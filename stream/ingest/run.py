"""One batch after the other: read, detect, tally, commit.

Guarantee: a batch is one transaction. Whatever ends it early (an error, an interrupt, a kill), the store
stands at its last commit; content that is in is never taken in twice.
"""

import logging
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from stream.config import Settings
from stream.errors import ConfigError
from stream.ingest.batch import take_in
from stream.ingest.deliveries import name_batches
from stream.ingest.job import Job
from stream.ingest.progress import Tell
from stream.pings import content_digest, expand, stamp
from stream.store import Store
from stream.store.ledger import Delivery, find_known
from stream.tally import check_tallies

log = logging.getLogger(__name__)


def ingest(
    store_path: Path,
    paths: Sequence[Path],
    settings: Settings,
    batch_name: str | None = None,
    close: bool = False,
    progress: Tell | None = None,
) -> list[dict[str, Any]]:
    """Take deliveries of pings in, in the order of their names.

    Parameters
    ----------
    store_path
        A store with a network.
    paths
        Files, folders or patterns; one batch a file.
    settings
        The configuration; the keys that change results must be those of the earlier batches.
    batch_name
        Take all files in as one batch of this name.
    close
        End what is open after the last batch; without files, end what earlier batches left open.
    progress
        Called after each chunk.

    Returns
    -------
    list of dict
        One per batch: `batch`, `batch_id`, `status` (`taken in`, `closed`, `already in`, `nothing open`),
        and but for the last two `rows_in`, `rows_used`, `rows_dropped`, `rows_held`, `dropped` and
        `unfinished` by reason, `n_vehicles`, `passages`, `sections`, `trips`, `is_closed`, `is_backfill`,
        `trips_cut_start` and `trips_cut_end` (of a backfill: trips that begin, or were left open, within
        `trips.max_gap_s` of pings that other batches hold), `seconds`.

    Raises
    ------
    ConfigError
        Nothing to do was named, or a tally that can't be counted.
    InputError
        A file that can't be used; earlier batches of the call stay, nothing of its own is written.
    StoreError
        The store can't be used, a name is taken by other content, or the configuration differs.
    """
    if not paths and not close:
        raise ConfigError("no file to take in; name files or folders, or --close to end what is open")
    check_tallies(settings.tallies)
    named = name_batches(expand(paths), batch_name) if paths else []
    run = settings.run
    with Store.open(store_path, memory_mb=run.memory_mb, threads=run.threads) as store:
        job = Job(store, settings, progress, len(named))
        reports = []
        for ix, (name, files) in enumerate(named):
            stamps = tuple(stamp(file) for file in files)  # before the digest: no change slips between
            delivery = Delivery(name, tuple(files), content_digest(files), stamps)
            is_last = ix == len(named) - 1
            reports.append(_deliver(job, delivery, ix, is_closing=close and is_last))
        last = reports[-1] if reports else {}
        if close and (not last.get("is_closed") or last["is_backfill"]):
            reports.append(_end_open(job))
        return reports


def _deliver(job: Job, delivery: Delivery, ix: int, *, is_closing: bool) -> dict[str, Any]:
    """Take one delivery in, unless it is in."""
    known = find_known(job.store, delivery)
    if known is None:
        return take_in(job, delivery, ix, is_closing=is_closing)
    log.info("batch_known batch=%s batch_id=%d", known["batch_name"], known["batch_id"])
    return {
        "batch": known["batch_name"],
        "batch_id": known["batch_id"],
        "status": "already in",
        "since": known["ended_at"],
    }


def _end_open(job: Job) -> dict[str, Any]:
    """End what earlier batches left open, as a batch without rows."""
    if not job.store.run("carry/all_open"):
        return {"batch": "close", "batch_id": None, "status": "nothing open"}
    number = int(job.store.run("ledger/next_batch_id")[0][0])
    return take_in(job, Delivery(f"close {number}", (), f"close:{number}"), job.n_batches, is_closing=True)
