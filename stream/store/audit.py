"""The store proved against itself: each file of `sql/audit/` selects what is wrong, so empty means sound.

More audits count and work out again, with the code that did so first, what rests on the stored rows.
"""

from typing import Any

from stream.errors import StoreError
from stream.store.database import Store
from stream.store.files import names_in, statement
from stream.store.proofs import digest_faults, local_time_faults, open_trip_faults
from stream.store.recount import kept_settings, recount_faults

_SHOWN = 100


def run_audit(store: Store) -> list[dict[str, Any]]:
    """Run every audit.

    Returns
    -------
    list of dict
        One per audit: `audit` its name, `looks_for` what it selects, `n_faults`, and `faults`, the first
        hundred offending rows as dicts. All `n_faults` zero means the store is sound.
    """
    out = []
    for name in names_in("audit"):
        found = store.frame(name)
        purpose = statement(name).purpose
        out.append(_told(name.rpartition("/")[2], purpose, found.height, found.head(_SHOWN).to_dicts()))
    damaged: list[dict[str, Any]] = []
    settings = None
    try:
        settings = kept_settings(store)
    except StoreError as err:
        damaged = [{"what": "configuration", "held": "", "found": str(err)}]
    for audit, looks_for, faults in (
        (
            "counted_again",
            "find counts that differ from the passages and sections of the batch counted again",
            recount_faults(store, settings),
        ),
        (
            "digests_again",
            "find digests of bins, network and configuration that are not those of what is stored",
            damaged + digest_faults(store, settings),
        ),
        (
            "open_trips",
            "find passages and sections of no trip, and open trips whose time is not that of their rows",
            open_trip_faults(store),
        ),
        (
            "local_time",
            "find passages whose day type or time band is not that of their entry in local time",
            local_time_faults(store, settings),
        ),
    ):
        out.append(_told(audit, looks_for, len(faults), faults[:_SHOWN]))
    return out


def _told(audit: str, looks_for: str, n_faults: int, faults: list[dict[str, Any]]) -> dict[str, Any]:
    return {"audit": audit, "looks_for": looks_for, "n_faults": n_faults, "faults": faults}
