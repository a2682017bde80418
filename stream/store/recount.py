"""Histograms counted once more from the stored passages and sections, to set beside those that are kept.

Guarantee: the code that counted a batch when it was taken in counts it again, from the stored rows alone.
"""

import json
from typing import Any

import polars as pl

from stream.config import Settings, load_settings
from stream.errors import ConfigError, StoreError
from stream.store.counting import RowCounter
from stream.store.database import Store
from stream.tally import Counts


def kept_settings(store: Store) -> Settings | None:
    """Give the configuration that the batches were made with; None before the first batch.

    Raises
    ------
    StoreError
        What the store keeps is no configuration.
    """
    kept = store.meta().get("config")
    try:
        return None if kept is None else load_settings(over=json.loads(kept))
    except (ConfigError, ValueError) as err:
        raise StoreError(
            f"{store.path}: the configuration that it keeps is damaged ({str(err).splitlines()[0]}); "
            "put back a copy of the store"
        ) from err


def recount_held(store: Store, batch_id: int, settings: Settings) -> Counts:
    """Count all that the histograms under one batch's number stand for: its own, or its month's."""
    return RowCounter(store, settings).held(batch_id)


def _differ(kept: pl.DataFrame, counted: pl.DataFrame, keys: list[str], values: list[str]) -> pl.DataFrame:
    """Find rows that one side lacks, or whose values are not the same."""
    both = kept.join(counted, on=keys, how="full", coalesce=True, suffix="_recounted")
    unlike = [pl.col(v).ne_missing(pl.col(f"{v}_recounted")) for v in values]
    return both.filter(pl.any_horizontal(unlike)).sort(keys)


def recount_faults(store: Store, settings: Settings | None) -> list[dict[str, Any]]:
    """Set every batch's histograms, moments and strata beside those counted again under its configuration.

    Returns
    -------
    list of dict
        One per cell that differs: `batch_id`, the key, and each value with its `_recounted` twin.
    """
    if settings is None:
        return []
    counter = RowCounter(store, settings)
    out: list[dict[str, Any]] = []
    known = store.frame("recount/all_stratum")
    for row in store.rows("ledger/all_batch"):
        batch_id = int(row["batch_id"])
        counted = counter.held(batch_id)
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
