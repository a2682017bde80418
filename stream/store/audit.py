"""The store proved against itself: each file of `sql/audit/` selects what is wrong, so empty means sound.

One more audit counts the stored passages and sections again, with the code that counted them first.
"""

from typing import Any

from stream.store.database import Store
from stream.store.files import names_in, statement
from stream.store.recount import recount_faults

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
    recounted = recount_faults(store)
    purpose = "find counts that differ from the passages and sections of the batch counted again"
    out.append(_told("counted_again", purpose, len(recounted), recounted[:_SHOWN]))
    return out


def _told(audit: str, looks_for: str, n_faults: int, faults: list[dict[str, Any]]) -> dict[str, Any]:
    return {"audit": audit, "looks_for": looks_for, "n_faults": n_faults, "faults": faults}
