"""Chunks of pings: what a source hands on, and what it had to drop.

Guarantee: over all chunks of a source, rows in = pings given + rows dropped; chunks put together are the same
pings whatever their size.
"""

from collections.abc import Iterable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Times = NDArray[np.int64]
Codes = NDArray[np.int32]


@dataclass(frozen=True)
class PingChunk:
    """Pings in the order of the source.

    Attributes
    ----------
    vehicle_ix : int32[n], code in the vehicle book
    t_us : int64[n], UTC epoch
    lon, lat : float64[n], degrees, finite
    n_rows_in : rows read for this chunk, dropped ones included
    dropped : rows dropped by reason; reasons that did not occur are left out
    bytes_done, bytes_total : how far the source is read; a source that is sorted first counts its bytes twice
    """

    vehicle_ix: Codes
    t_us: Times
    lon: Floats
    lat: Floats
    n_rows_in: int
    dropped: dict[str, int]
    bytes_done: int
    bytes_total: int

    def __len__(self) -> int:
        """Count the pings given."""
        return len(self.t_us)

    def cut(self, start: int, stop: int, n_rows_in: int, dropped: dict[str, int]) -> "PingChunk":
        """Take the pings [start, stop) with the account given."""
        at = slice(start, stop)
        columns = (self.vehicle_ix[at], self.t_us[at], self.lon[at], self.lat[at])
        return PingChunk(*columns, n_rows_in, dropped, self.bytes_done, self.bytes_total)


def _owned(parts: list[NDArray[np.generic]]) -> NDArray[np.generic]:
    """Put arrays together into one that is contiguous and may be written to (kernels compile once for it)."""
    if len(parts) > 1:
        return np.concatenate(parts)
    only = parts[0]
    return only if only.flags.writeable and only.flags.c_contiguous else only.copy()


class _Gathered:
    """Parts that wait until they fill a chunk."""

    def __init__(self) -> None:
        self.parts: list[PingChunk] = []
        self.n = 0

    def add(self, part: PingChunk) -> None:
        self.parts.append(part)
        self.n += len(part)

    def give(self) -> PingChunk:
        """Join all that waits."""
        parts = self.parts
        dropped: dict[str, int] = {}
        for part in parts:
            for reason, n in part.dropped.items():
                dropped[reason] = dropped.get(reason, 0) + n
        columns = ([getattr(p, name) for p in parts] for name in ("vehicle_ix", "t_us", "lon", "lat"))
        vehicle_ix, t_us, lon, lat = (_owned(c) for c in columns)
        n_rows_in = sum(p.n_rows_in for p in parts)
        last = parts[-1]
        self.parts, self.n = [], 0
        return PingChunk(
            vehicle_ix.astype(np.int32, copy=False),
            t_us.astype(np.int64, copy=False),
            lon.astype(np.float64, copy=False),
            lat.astype(np.float64, copy=False),
            n_rows_in,
            dropped,
            last.bytes_done,
            last.bytes_total,
        )


def _cut(part: PingChunk, n: int) -> tuple[PingChunk, PingChunk]:
    """Cut after n pings; the rows dropped stay with the first piece."""
    n_dropped = sum(part.dropped.values())
    return part.cut(0, n, n + n_dropped, part.dropped), part.cut(n, len(part), len(part) - n, {})


def rechunk(parts: Iterable[PingChunk], chunk_rows: int) -> Iterator[PingChunk]:
    """Cut and join parts into chunks of `chunk_rows` pings (the last may be shorter).

    Drops of parts without pings are passed on with the next chunk, or alone at the end.
    """
    waiting = _Gathered()
    for given in parts:
        part = given
        while waiting.n + len(part) >= chunk_rows:
            first, part = _cut(part, chunk_rows - waiting.n)
            waiting.add(first)
            yield waiting.give()
        if len(part) or part.n_rows_in:
            waiting.add(part)
    if waiting.parts:
        yield waiting.give()
