"""The network in the store: loaded once per digest, never changed under batches that rest on it."""

from typing import TYPE_CHECKING

import numpy as np
import polars as pl

from stream.errors import StoreError
from stream.store.database import Store, now_us

if TYPE_CHECKING:
    from stream.network import Built

_TABLES = ("zone", "junction", "arm", "link", "movement")


def _refuse(store: Store, old: str, new: str) -> None:
    n = len(store.run("ledger/all_batch"))
    if n:
        raise StoreError(
            f"{store.path}: holds {n} batches on network {old}, the one given is {new}; "
            "results of two networks don't mix: name another file with --store; "
            "where only zones differ, run `turntally retally --zones FILE`"
        )


def put_network(store: Store, built: "Built", config: str = "") -> None:
    """Load a network; the same one again changes nothing, another one replaces it while no batch is in.

    Parameters
    ----------
    store
        An open store.
    built
        Streets, tables and digest as `stream.network.build_network` gives them.
    config
        The keys that the network was built with, as `Settings.model_dump_json` text of those parts;
        `ingest` refuses a configuration that differs from it.

    Raises
    ------
    StoreError
        Batches rest on another network.
    """
    held = store.rows("network/find_network")
    if held and held[0]["network_digest"] == built.digest:
        return
    if held:
        _refuse(store, held[0]["network_digest"], built.digest)
    lon, lat = built.streets.node_lon_e7, built.streets.node_lat_e7
    row = {
        "network_digest": built.digest,
        "class_names": list(built.streets.class_names),
        "n_junctions": built.tables["junction"].height,
        "n_arms": built.tables["arm"].height,
        "n_links": built.tables["link"].height,
        "n_movements": built.tables["movement"].height,
        "min_lon": int(np.min(lon)) * 1e-7,
        "min_lat": int(np.min(lat)) * 1e-7,
        "max_lon": int(np.max(lon)) * 1e-7,
        "max_lat": int(np.max(lat)) * 1e-7,
        "seen_side": built.seen_side,
        "config": config,
        "put_us": now_us(),
    }
    from stream.network import streets_to_blobs  # loads the OSM reader: not for those who only query

    blobs = streets_to_blobs(built.streets)
    body = pl.DataFrame({"name": list(blobs), "body": list(blobs.values())})
    with store.transaction():
        for table in (*_TABLES, "network_blob", "network"):
            store.run(f"network/clear_{table}")
        for table in _TABLES:
            store.run(f"network/put_{table}", incoming=built.tables[table])
        store.run("network/put_network_blob", incoming=body)
        store.run("network/put_network", row)
