"""Parquet as others write it."""

from collections.abc import Callable
from pathlib import Path
from typing import Any

import polars as pl
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from stream.config import Settings
from stream.errors import InputError
from tests.archives import T0_US, write_parquet
from tests.reading import Reading, read_all

Build = Callable[..., Settings]
TIME = pa.array([T0_US, T0_US + 1_000_000, T0_US + 2_000_000], pa.timestamp("us", "UTC"))
COLUMNS: dict[str, pa.Array] = {
    "vehicle_id": pa.array(["b", "a", "b"]),
    "ts": TIME,
    "lon": pa.array([24.25, 24.5, 24.75]),
    "lat": pa.array([60.25, 60.5, 60.75]),
}
PINGS = [
    (0, T0_US, 24.25, 60.25),
    (1, T0_US + 1_000_000, 24.5, 60.5),
    (0, T0_US + 2_000_000, 24.75, 60.75),
]


@pytest.fixture
def read(tmp_path: Path, settings: Settings) -> Callable[..., Reading]:
    """Give a reader of a file with some of the columns replaced."""

    def run(write: dict[str, Any] | None = None, **over: pa.Array) -> Reading:
        path = tmp_path / "a.parquet"
        pq.write_table(pa.table(COLUMNS | over), path, **(write or {}))
        return read_all([path], settings)

    return run


Read = Callable[..., Reading]


TEXTS = ["b", "a", "b"]


@pytest.mark.parametrize(
    ("vehicle", "names"),
    [
        (pa.array(TEXTS, pa.large_string()), ["b", "a"]),
        (pa.array(TEXTS, pa.string_view()), ["b", "a"]),
        (pa.array([t.encode() for t in TEXTS], pa.binary()), ["b", "a"]),
        (pa.array(TEXTS).dictionary_encode(), ["b", "a"]),
        (pa.array([7, 3, 7], pa.int64()), ["7", "3"]),
        (pa.array([7, 3, 7], pa.uint16()), ["7", "3"]),
        (pa.array([7, 3, 7], pa.int32()).dictionary_encode(), ["7", "3"]),
    ],
    ids=lambda a: str(a.type) if isinstance(a, pa.Array) else "",
)
def test_ids_of_any_type(vehicle: pa.Array, names: list[str], read: Read) -> None:
    """Texts in every form and whole numbers are ids, coded by first sight."""
    got = read(vehicle_id=vehicle)
    assert (got.pings, got.names) == (PINGS, names)


@pytest.mark.parametrize("codec", ["none", "snappy", "gzip", "zstd", "lz4"])
@pytest.mark.parametrize("dictionary", [True, False])
@pytest.mark.parametrize("group", [1, 2, 3])
def test_any_codec_encoding_and_row_group(codec: str, dictionary: bool, group: int, read: Read) -> None:
    """How the pages are packed, coded and grouped leaves no trace."""
    got = read({"compression": codec, "use_dictionary": dictionary, "row_group_size": group})
    assert (got.pings, got.names) == (PINGS, ["b", "a"])


def test_written_by_another_writer(tmp_path: Path, settings: Settings) -> None:
    """Polars' own writer, with a categorical id and nanoseconds."""
    frame = pl.DataFrame(
        {
            "vehicle_id": pl.Series(["b", "a", "b"], dtype=pl.Categorical),
            "ts": pl.Series([T0_US, T0_US + 1_000_000, T0_US + 2_000_000])
            .cast(pl.Datetime("us"))
            .dt.cast_time_unit("ns"),
            "lon": [24.25, 24.5, 24.75],
            "lat": pl.Series([60.25, 60.5, 60.75], dtype=pl.Float32),
        }
    )
    frame.write_parquet(tmp_path / "a.parquet")
    got = read_all([tmp_path / "a.parquet"], settings)
    assert (got.pings, got.names) == (PINGS, ["b", "a"])


def test_legacy_96_bit_times(read: Read) -> None:
    """The 96-bit timestamps of old writers are read to the microsecond."""
    assert read({"use_deprecated_int96_timestamps": True}).pings == PINGS


@pytest.mark.parametrize(
    ("kind", "values"),
    [
        (pa.float32(), [24.25, 24.5, 24.75]),
        (pa.decimal128(8, 4), None),
        (pa.string(), ["24.25", " 24.5", "2.475e1"]),
    ],
    ids=str,
)
def test_degrees_of_any_type(kind: pa.DataType, values: list[Any] | None, read: Read) -> None:
    """Degrees may be short floats, decimals or texts."""
    lon = COLUMNS["lon"].cast(kind) if values is None else pa.array(values, kind)
    assert read(lon=lon).pings == PINGS


def test_nulls_are_counted(read: Read) -> None:
    """A null or empty id, a null time, a null or non-finite degree: each row once, by its first fault."""
    n = 7
    got = read(
        vehicle_id=pa.array(["a", None, "", "a", "a", None, "a"]),
        ts=pa.array([T0_US, T0_US, T0_US, None, T0_US, None, T0_US], pa.timestamp("us", "UTC")),
        lon=pa.array([1.0] * 6 + [float("inf")]),
        lat=pa.array([1.0, 1.0, 1.0, 1.0, float("nan"), None, None]),
    )
    assert got.pings == [(0, T0_US, 1.0, 1.0)]
    assert got.dropped == {"bad_vehicle": 2, "bad_time": 2, "bad_coordinate": 2}
    assert got.n_rows_in == n


def test_dropped_rows_give_no_vehicle(read: Read) -> None:
    """A vehicle of which no row can be used gets no code."""
    got = read(vehicle_id=pa.array(["x", "a", "b"]), lon=pa.array([None, 2.0, 3.0]))
    assert got.names == ["a", "b"]


@pytest.mark.parametrize(
    ("column", "value", "match"),
    [
        ("vehicle_id", pa.array([1.0, 2.0, 3.0]), r"'vehicle_id' \(source\.columns\.vehicle\) holds double"),
        ("ts", pa.array([True, False, None]), r"'ts' \(source\.columns\.time\) holds bool"),
        ("lon", pa.array([True, False, None]), r"'lon' \(source\.columns\.lon\) holds bool"),
        ("lat", pa.array([[1.0], [2.0], []]), r"'lat' \(source\.columns\.lat\) holds list"),
        ("vehicle_id", pa.array([b"\xff", b"\xfe", b"a"]), r"vehicle holds bytes that are no UTF-8"),
        ("vehicle_id", pa.nulls(3), r"column 'vehicle_id' is empty in all of its 3 rows"),
        ("lat", pa.array([None] * 3, pa.float64()), r"column 'lat' is empty in all of its 3 rows"),
        (
            "lat",
            pa.array([float("nan")] * 3),
            r"row 1: lat 'nan' can't be read, nor can any other of the 3 rows",
        ),
    ],
)
def test_column_that_can_not_be_used_is_refused(column: str, value: pa.Array, match: str, read: Read) -> None:
    """A wrong type, or nothing in the whole file, is one error with the column and its key."""
    with pytest.raises(InputError, match=rf"a\.parquet.*{match}"):
        read(**{column: value})


@pytest.mark.parametrize("keep", [1, 4, 100, -1, -100])
def test_cut_file_is_refused(keep: int, tmp_path: Path, settings: Settings) -> None:
    """A file cut anywhere is one error with its name."""
    path = tmp_path / "a.parquet"
    pq.write_table(pa.table(COLUMNS), path)
    path.write_bytes(path.read_bytes()[:keep])
    with pytest.raises(
        InputError, match=r"a\.parquet: is no Parquet file, or is cut off .*fetch the file again"
    ):
        read_all([path], settings)


def test_damaged_page_is_refused(tmp_path: Path, settings: Settings) -> None:
    """A flipped byte in a page with a checksum is found, and told with how far the file was good."""
    path = tmp_path / "a.parquet"
    pq.write_table(pa.table(COLUMNS), path, write_page_checksum=True, compression="none")
    data = bytearray(path.read_bytes())
    at = data.index(b"\x00\x00\x00\x00\x00@8@")  # 24.25 as a 64-bit float, IEEE 754
    data[at] ^= 1
    path.write_bytes(bytes(data))
    with pytest.raises(InputError, match=r"a\.parquet: broken as Parquet after row 0 .*fetch the file again"):
        read_all([path], settings)


def test_file_without_rows_is_refused_alone_only(tmp_path: Path, settings: Settings) -> None:
    """One empty part among others is no fault; a delivery without any row is."""
    empty, full = tmp_path / "0.parquet", tmp_path / "1.parquet"
    write_parquet(empty, [])
    write_parquet(full, [("a", T0_US, 1.0, 2.0)])
    with pytest.raises(InputError, match=r"0\.parquet: no row of pings"):
        read_all([empty], settings)
    assert len(read_all([empty, full], settings).pings) == 1
