"""What the store holds, in one look."""

from typing import Any

from stream.store.database import Store


def _by_batch(rows: list[tuple[Any, ...]]) -> dict[int, dict[str, Any]]:
    out: dict[int, dict[str, Any]] = {}
    for batch_id, kind, reason, n in rows:
        one = out.setdefault(batch_id, {"passage": 0, "section": 0, "trip": 0, "unfinished": {}})
        if kind == "unfinished":
            one["unfinished"][reason] = n
        else:
            one[kind] = n
    return out


def _added(parts: list[dict[str, int]]) -> dict[str, int]:
    out: dict[str, int] = {}
    for part in parts:
        for key, n in part.items():
            out[key] = out.get(key, 0) + n
    return dict(sorted(out.items()))


def _batches(store: Store) -> list[dict[str, Any]]:
    gave = _by_batch(store.run("ledger/batch_yield"))
    dropped: dict[int, dict[str, int]] = {}
    for batch_id, reason, n in store.run("ledger/all_batch_count"):
        dropped.setdefault(batch_id, {})[reason] = n
    nothing: dict[str, Any] = {"passage": 0, "section": 0, "trip": 0, "unfinished": {}}
    out = []
    for row in store.rows("ledger/all_batch"):
        one = gave.get(row["batch_id"], nothing)
        out.append(
            {
                "batch": row["batch_name"],
                "batch_id": row["batch_id"],
                "rows_in": row["rows_in"],
                "rows_used": row["rows_used"],
                "rows_dropped": row["rows_dropped"],
                "rows_held": row["rows_held"],
                "dropped": dropped.get(row["batch_id"], {}),
                "n_vehicles": row["n_vehicles"],
                "passages": one["passage"],
                "sections": one["section"],
                "trips": one["trip"],
                "unfinished": one["unfinished"],
                "first_ping_at": row["first_ping_at"],
                "last_ping_at": row["last_ping_at"],
                "ended_at": row["ended_at"],
                "is_closed": row["is_closed"],
                "is_backfill": row["is_backfill"],
                "trips_cut_start": row["trips_cut_start"],
                "trips_cut_end": row["trips_cut_end"],
                "rolled_into": row["rolled_into"],
            }
        )
    return out


def status(store: Store) -> dict[str, Any]:
    """Sum up the store: network, batches, rows, passages, what is still open.

    Returns
    -------
    dict
        `store`, `size_bytes`, `network` (None without one), `batches` (a list, oldest first), and over all
        batches `rows_in`, `rows_used`, `rows_dropped`, `rows_held`, `dropped` and `unfinished` by reason,
        `passages`, `sections`, `trips`, `n_vehicles`, `open_trips`.
    """
    network = store.rows("network/find_network")
    batches = _batches(store)
    wait = store.rows("carry/count_open")[0]
    numbers = ("rows_in", "rows_used", "rows_dropped", "rows_held", "passages", "sections", "trips")
    return {
        "store": str(store.path),
        "size_bytes": store.path.stat().st_size,
        "network": {k: v for k, v in network[0].items() if k != "config"} if network else None,
        "n_batches": len(batches),
        "batches": batches,
        **{name: sum(b[name] for b in batches) for name in numbers},
        "dropped": _added([b["dropped"] for b in batches]),
        "unfinished": _added([b["unfinished"] for b in batches]),
        "n_vehicles": wait["n_vehicles"],
        "open_trips": wait["n_open_trips"],
        "open_passages": wait["n_open_passages"],
    }
