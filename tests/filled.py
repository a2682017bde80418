"""A store with the tiny town and made-up passages on its real movements: for tests of export and report."""

from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np

from stream.config import Settings
from stream.detect.records import DROP_REASONS, PASSAGE, SECTION, TRIP, UNFINISHED, Found
from stream.network import Built
from stream.store import Store, put_network
from stream.store.batch import BatchWriter
from stream.store.ledger import Delivery, network_config
from stream.store.rows import RowMaker
from stream.store.vehicles import name_code

START_US = int(datetime(2026, 3, 27, tzinfo=UTC).timestamp()) * 1_000_000
SPAN_US = 4 * 86_400_000_000  # over a week-end and a clock change


def found_at_random(built: Built, n: int, n_vehicles: int, seed: int) -> Found:
    """Make n passages on random movements and as many sections, times spread over four days."""
    random = np.random.default_rng(seed)
    movement = built.tables["movement"]
    # A few movements get most of the traffic, many get little.
    pick = np.minimum(random.geometric(0.08, n) - 1, movement.height - 1)
    passages = np.zeros(n, PASSAGE)
    passages["vehicle_ix"] = random.integers(0, n_vehicles, n)
    passages["arm_in_ix"] = movement["arm_in_ix"].to_numpy()[pick]
    passages["arm_out_ix"] = movement["arm_out_ix"].to_numpy()[pick]
    slot_us = SPAN_US // max(n, 1)
    passages["entry_us"] = START_US + np.arange(n) * slot_us + random.integers(0, slot_us, n)
    passages["trip_start_us"] = passages["entry_us"] - 60_000_000
    passages["exit_us"] = passages["entry_us"] + random.gamma(2.0, 9e6, n).astype(np.int64) + 7_000_000
    passages["inside_m"] = movement["inside_m"].to_numpy()[pick]
    passages["n_pings"] = 9
    passages["max_step_ms"] = 1000
    passages["timing_error_ms"] = 400
    passages["entry_speed_mps"] = 11.5
    passages["is_queued_at_gate"] = random.random(n) < 0.1
    sections = np.zeros(n, SECTION)
    for name in ("vehicle_ix", "trip_start_us"):
        sections[name] = passages[name]
    sections["arm_from_ix"] = passages["arm_out_ix"]
    sections["arm_to_ix"] = passages["arm_in_ix"]
    sections["from_us"] = passages["exit_us"]
    sections["to_us"] = passages["exit_us"] + random.integers(5_000_000, 40_000_000, n)
    sections["path_m"] = random.uniform(20, 300, n)
    dropped = np.zeros(len(DROP_REASONS), np.int64)
    dropped[0] = 3
    return Found(passages, sections, np.zeros(0, UNFINISHED), np.zeros(0, TRIP), dropped, 9 * n)


def fill(store: Store, built: Built, settings: Settings, found: Found, batch: str = "day") -> None:
    """Write one batch of what was found, as ingest does."""
    names = [f"vehicle {i:03d}" for i in range(int(found.passages["vehicle_ix"].max(initial=-1)) + 1)]
    put_network(store, built, network_config(settings))
    with store.transaction():
        writer = BatchWriter(store, settings, "plain")
        rows = RowMaker(store, settings, 1).make(found, names, name_code(names))
        writer.put(rows)
        writer.put_counts(rows.counts, 1)
        totals: Any = writer.totals
        totals.rows_in, totals.rows_used, totals.n_vehicles = found.n_used + 3, found.n_used, len(names)
        totals.drop("bad_coordinate", 3)
        totals.span(START_US, START_US + SPAN_US)
        writer.finish(
            Delivery(batch, (Path(f"{batch}.parquet"),), f"digest of {batch}"), built.digest, is_closed=True
        )
