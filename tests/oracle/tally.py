"""Plain twin of the tallies: lists, loops, fractions; written from METHODS.md sections 9, 10 and 13."""

import functools
import math
from collections import Counter
from datetime import UTC, datetime, timedelta
from fractions import Fraction
from typing import Any
from zoneinfo import ZoneInfo

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)


@functools.cache
def edges_ms() -> list[int]:
    """Give the edges: 0.25 s within 10 s, then the widest whole milliseconds within 2 %, up to 3600 s."""
    positive = [250 * i for i in range(41)]
    while positive[-1] != 3_600_000:
        edge = positive[-1]
        widest = max(step for step in range(edge // 45) if 100 * step <= 2 * edge)
        positive.append(min(edge + widest, 3_600_000))
    return [-e for e in positive[:0:-1]] + positive


def bin_of(edges: list[int], value_ms: int) -> int:
    """Count the edges that are not above a value."""
    return sum(1 for e in edges if e <= value_ms)


def order_statistic(values: list[int], q: Fraction) -> int:
    """Give the value of rank ceil(q n)."""
    return sorted(values)[math.ceil(q * len(values)) - 1]


def _at_most(n: int, q: Fraction, k: int) -> Fraction:
    """Give P(B <= k) for B ~ Bin(n, q), exactly."""
    terms = (math.comb(n, i) * q**i * (1 - q) ** (n - i) for i in range(k + 1))
    return sum(terms, Fraction(0))


def limit_ranks(n: int, q: Fraction, confidence: Fraction) -> tuple[int | None, int | None]:
    """Try every rank against its definition."""
    side = (1 - confidence) / 2
    lower = [x for x in range(1, n + 1) if _at_most(n, q, x - 1) <= side]
    upper = [x for x in range(1, n + 1) if 1 - _at_most(n, q, x - 1) <= side]
    return (max(lower) if lower else None), (min(upper) if upper else None)


def local(at_us: int, zone: str) -> datetime:
    """Give the local time of a moment by the standard library's reading of the IANA database."""
    return (EPOCH + timedelta(microseconds=at_us)).astimezone(ZoneInfo(zone))


def sector(turn_deg: float) -> str:
    """Find the sector by trying all 36."""
    for start in range(-180, 180, 10):
        if start <= turn_deg < start + 10 or (start == 170 and turn_deg == 180):
            return f"{start}..{start + 10}"
    raise ValueError(turn_deg)


def values_of(row: dict[str, Any], dimensions: tuple[str, ...]) -> tuple[tuple[str, str], ...]:
    """Give a row's stratum as sorted pairs of dimension and text."""
    out = {}
    for name in dimensions:
        if name == "turn_sector":
            out[name] = sector(row["turn_deg"])
        elif name.startswith("is_"):
            out[name] = "true" if row[name] else "false"
        else:
            out[name] = str(row[name])
    return tuple(sorted(out.items()))


def count(
    rows: list[dict[str, Any]], values_ms: list[int], dimensions: tuple[str, ...]
) -> tuple[Counter[Any], dict[Any, tuple[int, int, int]]]:
    """Count rows one by one: n by (stratum, bin), and (n, sum, sum of squares) by stratum."""
    edges = edges_ms()
    cells: Counter[Any] = Counter()
    moments: dict[Any, tuple[int, int, int]] = {}
    for row, value in zip(rows, values_ms, strict=True):
        stratum = values_of(row, dimensions)
        cells[stratum, bin_of(edges, value)] += 1
        n, total, squares = moments.get(stratum, (0, 0, 0))
        moments[stratum] = (n + 1, total + value, squares + value * value)
    return cells, moments
