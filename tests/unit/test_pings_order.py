"""The order of an archive, promised or made."""

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from stream.config import Settings
from stream.errors import InputError
from stream.pings import VehicleBook, open_source
from tests.archives import T0_US, Row, write_parquet, write_pings
from tests.reading import read_all

Build = Callable[..., Settings]
S = 1_000_000


def rows_of(*given: tuple[str | None, int]) -> list[Row]:
    """Make rows of (vehicle, second)."""
    return [(v, T0_US + t * S, float(i), 60.0) for i, (v, t) in enumerate(given)]


GROUPED = rows_of(("b", 5), ("b", 5), ("b", 9), ("a", 1), ("a", 2))


@pytest.mark.parametrize("chunk_rows", [1, 2, 100])
def test_order_vehicle_is_given_as_it_stands(chunk_rows: int, tmp_path: Path, make_settings: Build) -> None:
    """An archive by vehicle, then time, passes unchanged."""
    path = write_pings(tmp_path / "a.csv", GROUPED)
    got = read_all([path], make_settings({"source.order": "vehicle", "run.chunk_rows": chunk_rows}))
    assert [p[2] for p in got.pings] == [0.0, 1.0, 2.0, 3.0, 4.0]


@pytest.mark.parametrize("chunk_rows", [1, 3, 100])
@pytest.mark.parametrize(
    ("rows", "match"),
    [
        (rows_of(("b", 1), ("a", 1), (None, 3), ("b", 2)), r"a\.csv row 4: the vehicle had pings further up"),
        (
            rows_of(("b", 1), (None, 1), ("b", 3), ("b", 2)),
            r"a\.csv row 4: the time lies before one further up",
        ),
    ],
)
def test_order_vehicle_broken_is_refused_with_the_row(
    rows: list[Row], match: str, chunk_rows: int, tmp_path: Path, make_settings: Build
) -> None:
    """The row that breaks the promise is named as it is counted in the file, with the mend."""
    path = write_pings(tmp_path / "a.csv", rows)
    over = {"source.order": "vehicle", "run.chunk_rows": chunk_rows}
    with pytest.raises(InputError, match=match + r".*set source\.order to unsorted"):
        read_all([path], make_settings(over))


def test_order_vehicle_allows_the_lateness(tmp_path: Path, make_settings: Build) -> None:
    """A step back within clean.lateness_s is no fault, one beyond it is."""
    path = write_pings(tmp_path / "a.csv", rows_of(("a", 10), ("a", 8), ("a", 8)))
    assert len(read_all([path], make_settings({"source.order": "vehicle", "clean.lateness_s": 2})).pings) == 3
    with pytest.raises(InputError, match=r"row 2: the time lies before"):
        read_all([path], make_settings({"source.order": "vehicle", "clean.lateness_s": 1.999999}))


def test_order_vehicle_starts_anew_with_each_file(tmp_path: Path, make_settings: Build) -> None:
    """Two days, each by vehicle, go together."""
    paths = [write_pings(tmp_path / f"{i}.csv", GROUPED) for i in range(2)]
    assert len(read_all(paths, make_settings({"source.order": "vehicle"})).pings) == 10


def test_order_vehicle_holds_many_vehicles(tmp_path: Path, make_settings: Build) -> None:
    """More vehicles than room was made for at first."""
    path = tmp_path / "a.parquet"
    write_parquet(path, rows_of(*((f"v{i}", 0) for i in range(5000)), ("v0", 1)))
    with pytest.raises(InputError, match=r"row 5001: the vehicle had pings further up"):
        read_all([path], make_settings({"source.order": "vehicle"}))


def test_order_time_gives_rows_out_of_order_as_they_stand(tmp_path: Path, settings: Settings) -> None:
    """Steps back in time are for cleaning to count."""
    path = write_pings(tmp_path / "a.csv", rows_of(("a", 3), ("a", 1), ("a", 2)))
    assert [p[2] for p in read_all([path], settings).pings] == [0.0, 1.0, 2.0]


def test_unsorted_keeps_the_order_of_rows_of_one_time(tmp_path: Path, make_settings: Build) -> None:
    """Pings of one instant stand as in the source, over files too; codes go by the order made."""
    one = write_pings(tmp_path / "1.csv", rows_of(("b", 2), ("a", 1), ("c", 2)))
    two = write_pings(tmp_path / "2.ndjson", rows_of(("c", 1), ("b", 2)))
    got = read_all([one, two], make_settings({"source.order": "unsorted"}))
    assert [(got.names[p[0]], (p[1] - T0_US) // S, p[2]) for p in got.pings] == [
        ("a", 1, 1.0),
        ("c", 1, 0.0),
        ("b", 2, 0.0),
        ("c", 2, 2.0),
        ("b", 2, 1.0),
    ]
    assert got.names == ["a", "c", "b"]


def test_unsorted_larger_than_its_memory_is_sorted(tmp_path: Path, make_settings: Build) -> None:
    """Four million pings (144 MB) pass through 64 MB, in the order that a stable sort of numpy gives."""
    n = 4_000_000
    times = T0_US + np.random.default_rng(7).integers(0, 10**6, n)
    columns = {
        "vehicle_id": np.zeros(n, np.int64),
        "ts": times,
        "lon": np.arange(float(n)),
        "lat": np.ones(n),
    }
    path = tmp_path / "a.parquet"
    pq.write_table(pa.table(columns), path)
    over = {"source.order": "unsorted", "run.memory_mb": 64, "run.threads": 1}
    chunks = open_source([path], make_settings(over)).chunks(VehicleBook())
    row_ix = np.concatenate([chunk.lon for chunk in chunks])
    assert np.array_equal(row_ix, np.argsort(times, kind="stable"))
