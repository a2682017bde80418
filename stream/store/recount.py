"""Histograms counted once more from the stored passages and sections, to set beside those that are kept.

Guarantee: the code that counted a batch when it was taken in counts it again, from the stored rows alone.
"""

import json
from typing import Any

import polars as pl

from stream.config import Settings, load_settings
from stream.store.database import Store
from stream.tally import Counts, count_passages, count_sections, with_local_time

_ROWS = 200_000  # passages in memory at once


def kept_settings(store: Store) -> Settings | None:
    """Give the configuration that the batches were made with; None before the first batch."""
    kept = store.meta().get("config")
    return None if kept is None else load_settings(over=json.loads(kept))


def recount(store: Store, batch_id: int, settings: Settings) -> Counts:
    """Count the passages and sections of one batch."""
    total = Counts.empty()
    wanted = {"batch_id": batch_id}
    for part in store.batches("recount/passages_of", wanted, batch_rows=_ROWS):
        passages = pl.DataFrame(part)
        total += count_passages(with_local_time(passages, settings.time, "entry_us"), settings)
    for part in store.batches("recount/sections_of", wanted, batch_rows=_ROWS):
        sections = pl.DataFrame(part)
        total += count_sections(with_local_time(sections, settings.time, "from_us"), settings)
    return total


def recount_held(store: Store, batch_id: int, settings: Settings) -> Counts:
    """Count all that the histograms under one batch's number stand for: its own, or its month's."""
    total = Counts.empty()
    for (part,) in store.run("recount/parts_of", {"batch_id": batch_id}):
        total += recount(store, part, settings)
    return total


def _differ(kept: pl.DataFrame, counted: pl.DataFrame, keys: list[str], values: list[str]) -> pl.DataFrame:
    """Find rows that one side lacks, or whose values are not the same."""
    both = kept.join(counted, on=keys, how="full", coalesce=True, suffix="_recounted")
    unlike = [pl.col(v).ne_missing(pl.col(f"{v}_recounted")) for v in values]
    return both.filter(pl.any_horizontal(unlike)).sort(keys)


def recount_faults(store: Store) -> list[dict[str, Any]]:
    """Set every batch's histograms, moments and strata beside those counted again.

    Returns
    -------
    list of dict
        One per cell that differs: `batch_id`, the key, and each value with its `_recounted` twin.
    """
    settings = kept_settings(store)
    if settings is None:
        return []
    out: list[dict[str, Any]] = []
    known = store.frame("recount/all_stratum")
    for row in store.rows("ledger/all_batch"):
        batch_id = int(row["batch_id"])
        counted = recount_held(store, batch_id, settings)
        wanted = {"batch_id": batch_id}
        cells = _differ(
            store.frame("recount/histogram_of", wanted),
            counted.histogram,
            ["tally", "stratum_id", "bin_ix"],
            ["n"],
        )
        sums = _differ(
            store.frame("recount/moment_of", wanted),
            counted.moment,
            ["tally", "stratum_id"],
            ["n", "sum", "sum_sq"],
        )
        unknown = counted.stratum.join(known, on=counted.stratum.columns, how="anti")
        for frame in (cells, sums, unknown):
            out += [{"batch_id": batch_id, **fault} for fault in frame.to_dicts()]
    return out
