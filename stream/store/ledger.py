"""The ledger: which deliveries are in, and whether another one may join them.

Guarantee: content that is in is never taken in again, and histograms of unlike origin (network,
configuration, vehicle names) are never added up.
"""

import json
import shlex
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from stream.config import Settings
from stream.errors import StoreError
from stream.store.database import Store

if TYPE_CHECKING:
    from stream.pings import Stamp

# Keys of the settings that change no result.
_FREE = {"source", "privacy", "run"}
# Parts that shape the network; the others shape what detection and tallies make of it.
_NETWORK_PARTS = ("network", "gates", "maneuver")
# Keys that only sort and count what was found; all others shape the roads or what is found in the pings.
COUNTED = ("tallies", "time", "sections", "maneuver", "network.time_zone", "network.driving_side")


@dataclass(frozen=True)
class Delivery:
    """One batch to take in.

    Attributes
    ----------
    name : what the ledger calls it
    files : read in this order as one stream
    digest : of their content; empty for a batch that only closes
    stamps : of the files, from before the digest
    """

    name: str
    files: tuple[Path, ...]
    digest: str
    stamps: tuple["Stamp", ...] = ()


def find_known(store: Store, delivery: Delivery) -> dict[str, Any] | None:
    """Look a delivery up by its content.

    Returns
    -------
    dict or None
        The ledger row of the batch that has this content, under whatever name.

    Raises
    ------
    StoreError
        The name is taken by other content.
    """
    wanted = {"content_digest": delivery.digest, "batch_name": delivery.name}
    rows = store.rows("ledger/find_batch", wanted)
    for row in rows:
        if row["content_digest"] == delivery.digest:
            return row
    if rows:
        mend = f"`turntally retract {shlex.quote(delivery.name)}` first, or"
        if rows[0]["rolled_into"] is not None:
            mend = "it was rolled up and can't be retracted:"
        raise StoreError(
            f"{store.path}: batch {delivery.name} is in with other content ({rows[0]['rows_in']} rows, "
            f"digest {rows[0]['content_digest'][:16]}, now {delivery.digest[:16]}); "
            f"{mend} give this delivery another name with --batch"
        )
    return None


def find_batch(store: Store, named: str) -> dict[str, Any]:
    """Look a batch up by its name, else by its number.

    Raises
    ------
    StoreError
        There is none.
    """
    rows = store.rows("ledger/all_batch")
    found = [r for r in rows if r["batch_name"] == named] or [r for r in rows if str(r["batch_id"]) == named]
    if not found:
        known = ", ".join(r["batch_name"] for r in rows[-5:])
        raise StoreError(
            f"{store.path}: no batch {named}; "
            + (f"the newest are {known}, `turntally status` shows all" if rows else "none is in")
        )
    return found[0]


def result_keys(settings: Settings) -> dict[str, Any]:
    """Give the keys that change a result."""
    return settings.model_dump(mode="json", exclude=_FREE)


def network_config(settings: Settings) -> str:
    """Give the keys that shape a network as JSON, for `put_network`."""
    kept = {name: value for name, value in result_keys(settings).items() if name in _NETWORK_PARTS}
    return json.dumps(kept)


def _flat(value: Any, at: str = "") -> dict[str, Any]:
    if not isinstance(value, dict) or not value:
        return {at.rstrip("."): value}
    out: dict[str, Any] = {}
    for key, inner in value.items():
        out |= _flat(inner, f"{at}{key}.")
    return out


def differences(old: dict[str, Any], new: dict[str, Any]) -> list[str]:
    """List the keys whose values differ, as `key: old -> new`; a key that one side lacks shows as `none`."""
    left, right = _flat(old), _flat(new)
    keys = sorted(left.keys() | right.keys())
    return [
        f"{key}: {left.get(key, 'none')} -> {right.get(key, 'none')}"
        for key in keys
        if left.get(key, "none") != right.get(key, "none")
    ]


def check_config(store: Store, settings: Settings) -> None:
    """Refuse a configuration that would mix unlike histograms.

    Raises
    ------
    StoreError
        A result-changing key differs from the one that the network or the earlier batches were made with,
        and every such key is named; or the histograms have other bins.
    """
    store.check_bins()
    changed = differences(*pinned(store, settings))
    if not changed:
        return
    told = "\n  ".join(changed)
    if "config" not in store.meta():
        raise StoreError(
            f"{store.path}: its network was built with another configuration:\n  {told}"
            "\nrun `turntally network EXTRACT` again, or put these keys back"
        )
    mend = "put these keys back, or ingest into another --store"
    if not uncounted(changed):
        mend = "put these keys back, or run `turntally retally` to count what is in anew"
    raise StoreError(f"{store.path}: its batches were made with another configuration:\n  {told}\n{mend}")


def pinned(store: Store, settings: Settings) -> tuple[dict[str, Any], dict[str, Any]]:
    """Give the result-changing keys that the store is held to, and those of the settings beside them.

    Before the first batch these are the keys of the network alone; none where it doesn't tell.
    """
    now = result_keys(settings)
    kept = store.meta().get("config")
    if kept is not None:
        return json.loads(kept), now
    built = store.rows("network/find_network")
    if built and built[0]["config"]:
        return json.loads(built[0]["config"]), {k: now[k] for k in _NETWORK_PARTS}
    return {}, {}


def is_under(difference: str, keys: Sequence[str]) -> bool:
    """Tell whether a line of `differences` is about one of some keys, or a key below it."""
    key = difference.partition(":")[0]
    return any(key == one or key.startswith(f"{one}.") for one in keys)


def uncounted(changed: Sequence[str]) -> list[str]:
    """Give those differences that counting the stored rows anew can't bring about."""
    return [one for one in changed if not is_under(one, COUNTED)]


def pin_config(store: Store, settings: Settings, key_id: str) -> None:
    """Write down, within the first batch, what all later ones are held to."""
    held = store.meta()
    if "config" not in held:
        store.put_meta("config", json.dumps(result_keys(settings)))
        store.put_meta("key_id", key_id)
