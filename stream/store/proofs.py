"""Audits that no query can make alone: digests worked out again, open trips, local times.

Guarantee: each gives the rows at fault, none where the store is sound; the store is only read.
"""

from typing import Any

import numpy as np
import polars as pl

from stream.config import Settings
from stream.errors import NetworkError, StoreError
from stream.store.database import Store
from stream.store.vehicles import name_code, trip_id
from stream.tally import BINS_DIGEST, with_local_time

_TABLES = ("junction", "arm", "link", "movement", "zone")  # in the order of the digest
_PART = ["n_passages", "passage_us", "section_us"]
_NAMES = ["day_type", "time_band"]


def digest_faults(store: Store, settings: Settings | None) -> list[dict[str, Any]]:
    """Work the digests of bins, network and configuration out again.

    Returns
    -------
    list of dict
        `what` differs, what is `held`, and what was `found`.
    """
    held = store.rows("network/find_network")
    if not held:
        return []
    pairs = [
        ("bins", store.meta().get("bins", ""), BINS_DIGEST),
        ("network", held[0]["network_digest"], _network(store)),
    ]
    if settings is not None:
        pairs += [
            (f"configuration of batch {row['batch_id']}", row["config_digest"], settings.digest())
            for row in store.rows("ledger/all_batch")
        ]
    return [{"what": what, "held": old, "found": new} for what, old, new in pairs if old != new]


def _network(store: Store) -> str:
    """Give the digest of the stored network, or why there is none."""
    from stream.network import network_digest  # loads the OSM reader: not for those who only query

    tables = {table: store.frame(f"network/all_{table}") for table in _TABLES}
    try:
        return network_digest(store.streets(), tables)
    except (NetworkError, StoreError) as err:
        return str(err)


def open_trip_faults(store: Store) -> list[dict[str, Any]]:
    """Set passages and sections whose trip has no row beside the trips that are open.

    Nothing is asked of a store from whose middle a batch was taken back: trips that ended in it are gone.

    Returns
    -------
    list of dict
        Vehicle and trip, the sums of the rows, and those of the open trip with `_open`; null where there is
        no such trip, or it has no rows but says so.
    """
    numbers = [row["batch_id"] for row in store.rows("ledger/all_batch")]
    if len(numbers) != max(numbers, default=0):
        return []
    opened = store.frame("recount/open_trip")
    codes = name_code(opened["vehicle"].to_list())
    starts = opened["trip_start_us"].to_numpy().astype(np.int64)
    keyed = opened.with_columns(pl.Series("trip_id", trip_id(codes, starts), pl.Int64)).drop("trip_start_us")
    parts = store.frame("recount/tripless_part")
    both = parts.join(keyed, on=["vehicle", "trip_id"], how="full", coalesce=True, suffix="_open")
    # A trip may be open and have passed no gate: both sides are zero then.
    unlike = [pl.col(c).fill_null(0) != pl.col(f"{c}_open").fill_null(0) for c in _PART]
    is_lost = pl.col("n_passages_open").is_null()
    return both.filter(is_lost | pl.any_horizontal(unlike)).sort("vehicle", "trip_id").to_dicts()


def local_time_faults(store: Store, settings: Settings | None) -> list[dict[str, Any]]:
    """Work the day types and time bands of all passages out again.

    Returns
    -------
    list of dict
        One per half minute and time zone: `at_us`, names as they are, `_found` beside them, `n` passages.
    """
    if settings is None:
        return []
    held = store.frame("recount/local_time")
    found = with_local_time(held.drop(_NAMES), settings.time, "at_us").select(
        pl.col(name).alias(f"{name}_found") for name in _NAMES
    )
    unlike = [pl.col(name) != pl.col(f"{name}_found") for name in _NAMES]
    return held.hstack(found).filter(pl.any_horizontal(unlike)).to_dicts()
