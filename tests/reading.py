"""Read pings to the end, as tests want them."""

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from stream.config import Settings
from stream.pings import VehicleBook, open_source


@dataclass
class Reading:
    """All that a source gave."""

    pings: list[tuple[int, int, float, float]]
    names: list[str]
    dropped: dict[str, int]
    n_rows_in: int
    sizes: list[int]
    progress: list[tuple[int, int]]


def read_all(paths: Sequence[Path], settings: Settings, book: VehicleBook | None = None) -> Reading:
    """Read a source to its end and hold each chunk to its account."""
    book = VehicleBook() if book is None else book
    out = Reading([], [], {}, 0, [], [])
    for chunk in open_source(paths, settings).chunks(book):
        assert len(chunk) + sum(chunk.dropped.values()) == chunk.n_rows_in
        columns = (chunk.vehicle_ix, chunk.t_us, chunk.lon, chunk.lat)
        assert [c.dtype.name for c in columns] == ["int32", "int64", "float64", "float64"]
        assert all(c.flags.c_contiguous and c.flags.writeable for c in columns)
        out.pings += zip(*(c.tolist() for c in columns), strict=True)
        for reason, n in chunk.dropped.items():
            out.dropped[reason] = out.dropped.get(reason, 0) + n
        out.n_rows_in += chunk.n_rows_in
        out.sizes.append(len(chunk))
        out.progress.append((chunk.bytes_done, chunk.bytes_total))
    out.names = list(book.names)
    return out
