"""Take a batch back.

Guarantee: the newest batch in order is undone exactly, the carry included: the store is as it was before it.
An older one loses its own contribution; trips that ran across its edges can't be joined again and are
counted; one that is still open is given up. The histograms equal the passages that stay, and time is
conserved in the trips that stay.
"""

from typing import Any

import numpy as np
import polars as pl

from stream.errors import StoreError
from stream.store.database import Store
from stream.store.ledger import find_batch
from stream.store.recount import kept_settings, recount_held
from stream.store.vehicles import name_code, trip_id

_OWN = ("passage", "section", "unfinished", "trip", "histogram", "moment", "batch_count", "span", "batch")
_PINNED = ("config", "key_id")  # set by the first batch


def retract(store: Store, named: str) -> dict[str, Any]:
    """Take one batch back, in one transaction.

    Parameters
    ----------
    store
        Open for writing.
    named
        Name of the batch, else its number.

    Returns
    -------
    dict
        `batch`, `batch_id`, `is_exact` (the store is as if the batch had never been), `is_backfill`,
        `rows_in`, `passages`, `sections` and `trips` taken back (`edge_passages` and `edge_sections` of
        them recorded by later batches), and `trips_cut_start`, `trips_cut_end`: trips that lost this part
        but have others in earlier batches, in later ones.

    Raises
    ------
    StoreError
        There is no such batch, or `compact` rolled it up.
    """
    row = find_batch(store, named)
    if row["rolled_into"] is not None:
        raise StoreError(
            f"{store.path}: batch {row['batch_name']} was rolled up by `turntally compact`, its own counts "
            "are gone; ingest its month anew into another --store"
        )
    batch_id = int(row["batch_id"])
    later = [r["batch_id"] for r in store.rows("ledger/all_batch") if r["batch_id"] > batch_id]
    in_order = [r["batch_id"] for r in store.rows("ledger/all_batch") if not r["is_backfill"]]
    is_exact = bool(row["is_backfill"]) or batch_id == max(in_order)
    edges = {"edge_passages": 0, "edge_sections": 0, "trips_cut_start": 0, "trips_cut_end": 0}
    with store.transaction():
        if later and not is_exact:
            edges = _cut_out(store, batch_id)
        gave = {kind: n for b, kind, _, n in store.run("ledger/batch_yield") if b == batch_id}
        _drop(store, batch_id)
    return {
        "batch": row["batch_name"],
        "batch_id": batch_id,
        "is_exact": is_exact,
        "is_backfill": row["is_backfill"],
        "rows_in": row["rows_in"],
        **{
            f"{kind}s": gave.get(kind, 0) + edges.get(f"edge_{kind}s", 0)
            for kind in ("passage", "section", "trip")
        },
        **edges,
    }


def _drop(store: Store, batch_id: int) -> None:
    """Take back the batch's own rows, and let the states before it count again."""
    wanted = {"batch_id": batch_id}
    store.run("retract/relink_carry", wanted)
    store.run("retract/drop_carry", wanted)
    for table in _OWN:
        store.run(f"retract/drop_{table}", wanted)
    store.run("retract/drop_stratum")
    if not store.run("ledger/all_batch"):
        store.run("retract/drop_tally")
        for key in _PINNED:
            store.run("meta/drop_meta", {"key": key})


def _cut_out(store: Store, batch_id: int) -> dict[str, int]:
    """Part an older batch from the later ones that went on from it."""
    wanted = {"batch_id": batch_id}
    heirs = {row[0] for row in store.run("retract/heirs", wanted)}
    for table in ("passage", "section", "unfinished", "trip"):
        store.run(f"retract/hand_on_{table}", wanted)
    edges = store.run("retract/edge_batches", wanted)
    lost = store.frame("retract/lost_parts", wanted)
    for table in ("passage", "section", "unfinished"):
        store.run(f"retract/drop_edge_{table}", wanted)
    store.run("retract/drop_empty_trip", wanted)
    ((n_start, n_end),) = store.run("retract/count_cut", wanted)
    store.run("retract/mend_trip", incoming=lost)
    begun = _begun(store, batch_id)
    for table in ("passage", "section", "unfinished", "trip"):
        store.run(f"retract/renumber_{table}", wanted, begun)
    store.run("retract/end_carry", wanted)
    settings = kept_settings(store)
    assert settings is not None
    for holder_id in sorted(heirs | {row[0] for row in edges}):
        held = {"batch_id": holder_id}
        counts = recount_held(store, holder_id, settings)
        store.run("retract/drop_histogram", held)
        store.run("retract/drop_moment", held)
        store.run("batch/add_histogram", held, counts.histogram)
        store.run("batch/add_moment", held, counts.moment)
    return {
        "edge_passages": sum(n for _, n, _ in edges),
        "edge_sections": sum(n for _, _, n in edges),
        "trips_cut_start": n_start,
        "trips_cut_end": n_end,
    }


def _begun(store: Store, batch_id: int) -> pl.DataFrame:
    """Find the trips of later batches that began with this one's pings: vehicle, trip_id."""
    opened = store.frame("retract/open_trips", {"batch_id": batch_id})
    codes = name_code(opened["vehicle"].to_list())
    numbers = trip_id(codes, opened["trip_start_us"].to_numpy().astype(np.int64))
    open_trips = opened.select("vehicle", pl.Series("trip_id", numbers, pl.Int64))
    return pl.concat([store.frame("retract/ended_trips", {"batch_id": batch_id}), open_trips]).unique()
