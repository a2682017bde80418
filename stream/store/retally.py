"""New tallies, bins, time bands, maneuvers, zones or reference, from what is stored: no ping is read.

Guarantee: one transaction, so that the old counts stand until the new ones are committed; afterwards the
store is, row for row, what a fresh ingest of the same batches under the new configuration would have made.
"""

import json
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import polars as pl

from stream.config import Settings
from stream.errors import StoreError
from stream.store.batch import put_counts, put_tallies
from stream.store.counting import RowCounter
from stream.store.database import Store
from stream.store.ledger import differences, is_under, network_config, pinned, result_keys, uncounted
from stream.tally import BINS_DIGEST, check_tallies, unimpeded_ms, with_local_time

_OF_ZONES = ("network.time_zone", "network.driving_side")
_TABLES = ("junction", "arm", "link", "movement", "zone")  # in the order of the digest
_COUNTS = {"histogram": "070", "moment": "071", "stratum": "060", "tally": "061"}
_ROWS = 500_000  # passages in memory at once

Tell = Callable[[int, int], None]


def retally(
    store: Store, settings: Settings, zones: Path | None = None, progress: Tell | None = None
) -> dict[str, Any]:
    """Count everything anew under a configuration, in one transaction.

    Parameters
    ----------
    store
        Open for writing, with a network.
    settings
        May differ from the store's configuration in `ledger.COUNTED` and in keys that change no result.
    zones
        GeoJSON polygons that replace the store's zones; None keeps those.
    progress
        Called with rows done and rows in all.

    Returns
    -------
    dict
        `changed` (keys, each as `key: old -> new`), `network_digest`, `is_network_changed`, `batches`,
        `passages` and `sections` counted, `passages_rewritten`, `tallies` (strata by name), `seconds`.

    Raises
    ------
    ConfigError
        A tally that can't be counted.
    InputError
        The zones can't be used.
    StoreError
        There is no network, a key differs that can't be counted anew, or passages name a movement that the
        network has not.
    """
    started = time.monotonic()
    check_tallies(settings.tallies)
    changed = _check(store, settings, zones)
    is_known = "config" in store.meta()
    with store.transaction():
        is_relabelled, is_moved = _relabel(store, settings, zones)
        reference_id = int(store.meta()["reference_id"])
        ((n_other,),) = store.run("retally/other_reference", {"reference_id": reference_id})
        is_retimed = is_moved or any(one.startswith("time.") for one in changed)
        at = _Progress(store, progress, n_passes=2 if n_other or is_retimed else 1)
        rewritten = _write_anew(store, settings, reference_id, at) if n_other or is_retimed else 0
        store.run("retally/drop_bin")
        store.run("view/bin")
        store.put_meta("bins", BINS_DIGEST)
        strata = _count_anew(store, settings, reference_id, at) if is_known else {}
        digest = store.rows("network/find_network")[0]["network_digest"]
        store.run("retally/mark_batch", {"config_digest": settings.digest(), "network_digest": digest})
        if is_known:
            store.put_meta("config", json.dumps(result_keys(settings)))
    return {
        "changed": changed,
        "network_digest": digest,
        "is_network_changed": is_relabelled,
        "batches": len(store.run("ledger/all_batch")),
        "passages": at.n_passages,
        "sections": at.n_sections,
        "passages_rewritten": rewritten,
        "tallies": strata,
        "seconds": round(time.monotonic() - started, 3),
    }


class _Progress:
    """Rows done of all rows, over one or two passes."""

    def __init__(self, store: Store, tell: Tell | None, n_passes: int) -> None:
        ((self.n_passages, self.n_sections),) = store.run("retally/count_rows")
        self._tell = tell
        self._total = self.n_passages * n_passes + self.n_sections
        self._done = 0

    def step(self, n: int) -> None:
        """Count rows as done."""
        self._done += n
        if self._tell is not None:
            self._tell(self._done, self._total)


def _check(store: Store, settings: Settings, zones: Path | None) -> list[str]:
    """Find what differs, and refuse what stored rows can't tell."""
    changed = differences(*pinned(store, settings))
    fixed = uncounted(changed)
    if fixed:
        raise StoreError(
            f"{store.path}: these keys shape the network or what is found in the pings, so stored passages "
            "can't be counted anew under them:\n  "
            + "\n  ".join(fixed)
            + "\nput these keys back, or ingest into another --store"
        )
    of_zones = [one for one in changed if is_under(one, _OF_ZONES)]
    if of_zones and zones is None and store.run("network/all_zone"):
        raise StoreError(
            f"{store.path}: its zones were made with other keys:\n  "
            + "\n  ".join(of_zones)
            + "\nname the file of zones again with --zones, or put these keys back"
        )
    return changed


def _relabel(store: Store, settings: Settings, zones: Path | None) -> tuple[bool, bool]:
    """Give zones and maneuvers anew; tell whether the network changed, and whether a local time may have."""
    from stream.network import network_digest, relabel  # loads the OSM reader: not for those who only query

    held = store.rows("network/find_network")
    if not held:
        store.streets()  # raises what a store without network is told
    old = {table: store.frame(f"network/all_{table}") for table in _TABLES}
    new = relabel(old, settings, held[0]["seen_side"], zones)
    stale = [table for table in _TABLES if not new[table].equals(old[table])]
    digest = held[0]["network_digest"]
    for table in stale:
        store.run(f"network/clear_{table}")
        store.run(f"network/put_{table}", incoming=new[table])
    if stale:
        digest = network_digest(store.streets(), new)
    config = network_config(settings) if held[0]["config"] else ""
    store.run("retally/mark_network", {"network_digest": digest, "config": config})
    return bool(stale), not new["junction"]["time_zone"].equals(old["junction"]["time_zone"])


def _write_anew(store: Store, settings: Settings, reference_id: int, at: _Progress) -> int:
    """Write every passage anew with its delay, day type and time band of now."""
    store.run("retally/set_passage_aside")
    store.run("schema/040_passage")
    ((n_rows,),) = store.run("retally/count_passage_before")
    written = 0
    for first in range(0, n_rows, _ROWS):
        reach = {"first": first, "last": first + _ROWS - 1}
        rows = store.frame("retally/passage_before", reach)
        _refuse_unknown(store, rows.height - rows.drop_nulls().height)
        unimpeded = unimpeded_ms(
            *(rows[name].to_numpy() for name in ("gate_in_m", "inside_m", "gate_out_m")),
            *(rows[name].to_numpy() / 3.6 for name in ("in_kmh", "out_kmh")),
        )
        new = with_local_time(rows, settings.time, "entry_us").select(
            "row_ix",
            (pl.col("traversal_ms") - pl.Series(unimpeded)).alias("delay_ms"),
            "day_type",
            "time_band",
        )
        store.run("retally/put_passage", {**reach, "reference_id": reference_id}, new)
        written += rows.height
        at.step(rows.height)
    store.run("retally/drop_passage_before")
    return written


def _count_anew(store: Store, settings: Settings, reference_id: int, at: _Progress) -> dict[str, int]:
    """Replace all counts; give the number of strata of each tally."""
    for table, number in _COUNTS.items():
        store.run(f"retally/drop_{table}")
        store.run(f"schema/{number}_{table}")
    put_tallies(store, settings, reference_id)
    counter = RowCounter(store, settings, at.step)
    for (holder_id,) in store.run("retally/holders"):
        put_counts(store, holder_id, counter.held(holder_id))
        _refuse_unknown(store, counter.n_unknown)
    strata = dict.fromkeys(settings.tallies, 0)
    return {**strata, **dict(store.run("retally/count_strata"))}


def _refuse_unknown(store: Store, n: int) -> None:
    if n:
        raise StoreError(
            f"{store.path}: {n} passages or sections name a movement or arm that the network has not; "
            "nothing was changed; `turntally audit` shows which, a copy made before the damage mends it"
        )
