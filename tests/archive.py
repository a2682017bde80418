"""Small archives for the stand-in detector, and a store read as plain rows to compare."""

from collections.abc import Iterable
from pathlib import Path
from typing import Any

import duckdb

T0 = 1_700_000_000  # 2023-11-14T22:13:20Z, a Tuesday; 00:13:20 on Wednesday in Helsinki (UTC+2)
Row = tuple[str, int, float, float]


def drive(vehicle: str, n: int, start: int = T0, step_s: int = 10) -> list[Row]:
    """Give n pings of one vehicle."""
    return [(vehicle, start + i * step_s, 0.5, 0.5) for i in range(n)]


def write(path: Path, rows: Iterable[Row], *, is_sorted: bool = True) -> Path:
    """Write pings as CSV, in the order of time."""
    ordered = sorted(rows, key=lambda r: r[1]) if is_sorted else list(rows)
    lines = [f"{v},{t},{lon},{lat}" for v, t, lon, lat in ordered]
    path.write_text("\n".join(["vehicle_id,ts,lon,lat", *lines]) + "\n", encoding="utf-8")
    return path


def dump(path: Path, *, by_batch: bool = True) -> dict[str, list[tuple[Any, ...]]]:
    """Read every table as sorted rows; without the clock, and without batch numbers where not wanted."""
    out = {}
    left_out = {"started_at", "ended_at", "made_at", "put_at", "created_us"} | (
        set() if by_batch else {"batch_id"}
    )
    with duckdb.connect(str(path), read_only=True) as con:
        tables = [r[0] for r in con.execute("select table_name from duckdb_tables()").fetchall()]
        for table in tables:
            names = [r[0] for r in con.execute(f"describe {table}").fetchall() if r[0] not in left_out]
            rows = con.execute(f"select {', '.join(names)} from {table}").fetchall()
            out[table] = sorted((r for r in rows if r[0] not in left_out), key=repr)
    return out


def sums(path: Path) -> dict[str, Any]:
    """Read what must not depend on how an archive was cut into batches."""
    all_of = dump(path, by_batch=False)
    kept = {t: all_of[t] for t in ("passage", "section", "unfinished", "trip", "stratum", "tally")}
    with duckdb.connect(str(path), read_only=True) as con:
        for table, keys, values in (
            ("histogram", "tally, stratum_id, bin_ix", "sum(n)"),
            ("moment", "tally, stratum_id", "sum(n), sum(sum), sum(sum_sq)"),
            ("batch_count", "reason", "sum(n)"),
        ):
            query = f"select {keys}, {values} from {table} group by {keys} order by all"
            kept[table] = con.execute(query).fetchall()
    return kept


def archive() -> list[Row]:
    """Give three vehicles over 300 s, one with a silence of 130 s, with a duplicate and pings outside."""
    rows = drive("a", 31) + drive("b", 8, T0 + 3) + drive("b", 9, T0 + 203) + drive("c", 75, T0 + 1, 4)
    return [*rows, rows[40], ("c", T0 + 50, -1.0, 0.5), ("d", T0 + 70, -1.0, 0.5)]
