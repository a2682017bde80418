"""Roll the counts of old batches up by month.

Guarantee: sums, and so all quantiles, stay the same to the bit; the ledger keeps every batch with its
digest, so that a delivery that is in is still known. What goes is the way back: a batch rolled up can't be
retracted.
"""

from dataclasses import dataclass
from datetime import UTC, date, datetime
from typing import Any

import polars as pl

from stream.store.database import Store

_COUNTS = ("histogram", "moment")


@dataclass(frozen=True)
class Month:
    """Batches that are rolled up into one.

    Attributes
    ----------
    month : year and month of their first pings, UTC, such as 2026-03
    batch_ids, names : all of them, in the order they were taken in
    newly : names of those that were not rolled up before
    """

    month: str
    batch_ids: tuple[int, ...]
    names: tuple[str, ...]
    newly: tuple[str, ...]

    @property
    def holder_id(self) -> int:
        """The number under which the month's counts stand: the latest of its batches."""
        return max(self.batch_ids)


def plan(store: Store, before: date) -> list[Month]:
    """Find the months that hold batches to roll up: those whose last ping lies before a day, 0 h UTC."""
    day = datetime(before.year, before.month, before.day, tzinfo=UTC)
    rows = store.rows("compact/old_batches", {"before_us": round(day.timestamp()) * 1_000_000})
    months = []
    for month in sorted({row["month"] for row in rows}):
        mine = [row for row in rows if row["month"] == month]
        newly = tuple(row["batch_name"] for row in mine if row["rolled_into"] is None)
        if newly:
            ids = tuple(int(row["batch_id"]) for row in mine)
            months.append(Month(month, ids, tuple(row["batch_name"] for row in mine), newly))
    return months


def compact(store: Store, months: list[Month]) -> dict[str, Any]:
    """Roll up, in one transaction.

    Parameters
    ----------
    store
        Open for writing.
    months
        As `plan` gave them.

    Returns
    -------
    dict
        `months` (each with `month`, `n_batches`, `batch_id` that holds the counts), `n_batches` newly rolled
        up, and rows before and after: `histogram_rows`, `moment_rows`, `carry_rows`, `*_before`.
    """
    kinds = ("histogram_rows", "moment_rows", "carry_rows")
    before = dict(zip(kinds, store.run("compact/count_rows")[0], strict=True))
    with store.transaction():
        for month in months:
            _roll_up(store, month)
    after = dict(zip(kinds, store.run("compact/count_rows")[0], strict=True))
    return {
        "months": [
            {"month": m.month, "n_batches": len(m.batch_ids), "batch_id": m.holder_id} for m in months
        ],
        "n_batches": sum(len(m.newly) for m in months),
        **after,
        **{f"{kind}_before": n for kind, n in before.items()},
    }


def _roll_up(store: Store, month: Month) -> None:
    parts = pl.DataFrame({"batch_id": month.batch_ids}, schema={"batch_id": pl.Int64})
    held = {"holder_id": month.holder_id}
    for table in _COUNTS:
        store.run(f"compact/add_{table}", held, parts)
        store.run(f"compact/drop_{table}", incoming=parts)
        store.run(f"compact/name_{table}", held)
    store.run("compact/drop_carry", incoming=parts)
    store.run("compact/mark_batch", held, parts)
