"""The store proved against itself: each file of `sql/audit/` selects what is wrong, so empty means sound."""

from typing import Any

from stream.store.database import Store
from stream.store.files import names_in, statement


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
        out.append(
            {
                "audit": name.rpartition("/")[2],
                "looks_for": statement(name).purpose,
                "n_faults": found.height,
                "faults": found.head(100).to_dicts(),
            }
        )
    return out
