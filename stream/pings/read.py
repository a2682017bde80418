"""A delivery of pings, file after file, as chunks of typed columns.

Guarantee: rows in = pings given + rows dropped by reason; the pings, their order and their vehicles' codes
are the same in every format and for every chunk size. A file that can't be used raises one InputError.
"""

import zoneinfo
from collections.abc import Iterator, Sequence
from pathlib import Path

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from stream.config import Settings
from stream.errors import ConfigError, InputError
from stream.pings.book import Encoder, VehicleBook
from stream.pings.chunks import PingChunk, rechunk
from stream.pings.columns import Account, plain, read_coordinate, read_vehicle
from stream.pings.files import format_of, size_of
from stream.pings.gpx import GpxReader
from stream.pings.order import GroupCheck, sort_pings
from stream.pings.parquet import ParquetReader
from stream.pings.rows import RawRows, Reader, wanted_names
from stream.pings.text import CsvReader, NdjsonReader
from stream.pings.times import TimeReader, WrongTypeError

Mask = NDArray[np.bool_]
# Rows read at once: few enough for the memory beside a sort, enough that a dictionary is looked up seldom.
_LEAST_ROWS, _SORT_ROWS, _MOST_ROWS = 1 << 16, 1 << 18, 1 << 20


class PingSource:
    """One delivery: files whose pings are read one after another.

    Attributes
    ----------
    paths : the files
    bytes_total : their size together
    """

    def __init__(self, paths: Sequence[Path], settings: Settings) -> None:
        """Look at every file's head; see `open_source`."""
        if not paths:
            raise ValueError("a source needs at least one file")
        self.paths = list(paths)
        self._settings = settings
        _check_zone(settings.source.time_zone)
        self._sizes = [size_of(path) for path in self.paths]
        self.bytes_total = sum(self._sizes)
        self._readers = [_reader(path, settings) for path in self.paths]

    def chunks(self, book: VehicleBook) -> Iterator[PingChunk]:
        """Read the delivery.

        Parameters
        ----------
        book
            Gets the vehicles that come up; may know some already.

        Yields
        ------
        Chunks of `run.chunk_rows` pings, the last one shorter. An archive that is sorted first gives chunks
        without pings while it is read: they bear what was dropped.

        Raises
        ------
        InputError
            A file is broken, can't be read at all, or breaks the order promised; or no file has any row.
        """
        run = self._settings.run
        if self._settings.source.order == "unsorted":
            local = VehicleBook()
            yield from sort_pings(self._parts(local), local, book, run)
        else:
            yield from rechunk(self._parts(book), run.chunk_rows)

    def _parts(self, book: VehicleBook) -> Iterator[PingChunk]:
        encoder = Encoder(book)
        before = 0
        n_rows = 0
        for reader, size in zip(self._readers, self._sizes, strict=True):
            columns = _FileColumns(reader, self._settings, encoder)
            for raw in reader.rows():
                done = before + min(raw.bytes_done, size)
                part = columns.read(raw, done, self.bytes_total)
                n_rows += part.n_rows_in
                del raw
                yield part
                del part
            columns.close()
            before += size
        if n_rows == 0:
            told = self.paths[0].name if len(self.paths) == 1 else f"{self.paths[0].name} and the others"
            raise InputError(f"{told}: no row of pings; deliver it again or leave it out")


def open_source(paths: Sequence[Path], settings: Settings) -> PingSource:
    """Open a delivery and check the head of each file.

    Raises
    ------
    InputError
        A file is missing, empty, of no known format, broken, or lacks a column.
    ConfigError
        `source.columns` names a column twice, or `source.time_zone` is no zone.
    """
    return PingSource(paths, settings)


def _check_zone(name: str) -> None:
    try:
        zoneinfo.ZoneInfo(name)
    except (zoneinfo.ZoneInfoNotFoundError, ValueError, OSError) as err:
        raise ConfigError(
            f"source.time_zone = {name!r}: is no IANA time zone; write one such as Europe/Helsinki"
        ) from err


def _reader(path: Path, settings: Settings) -> Reader:
    kind = format_of(path, settings.source.format)
    if kind == "gpx":
        return GpxReader(path)
    wanted = wanted_names(settings.source.columns)
    threads = settings.run.threads != 1
    if kind == "parquet":
        most = _SORT_ROWS if settings.source.order == "unsorted" else _MOST_ROWS
        return ParquetReader(path, wanted, min(max(settings.run.chunk_rows, _LEAST_ROWS), most), threads)
    if kind == "csv":
        return CsvReader(path, wanted, threads)
    return NdjsonReader(path, wanted)


class _FileColumns:
    """Turns one file's rows into pings and accounts for those that aren't."""

    def __init__(self, reader: Reader, settings: Settings, encoder: Encoder) -> None:
        source = settings.source
        path = reader.path
        self._path = path
        self._encoder = encoder
        self._times = (
            TimeReader("iso", "UTC")
            if reader.times_are_utc
            else TimeReader(source.time_unit, source.time_zone)
        )
        names = source.columns.model_dump()
        unit = f"source.time_unit is {self._times.unit}"
        zone = f", source.time_zone {self._times.zone}"
        mends = {
            "vehicle": "set source.columns.vehicle to a column with ids",
            "time": f"{unit}{zone}: set what fits, or write ISO 8601 or numbers since 1970",
            "lon": "write degrees as plain decimal numbers, or set source.columns.lon",
            "lat": "write degrees as plain decimal numbers, or set source.columns.lat",
        }
        self._accounts = {key: Account(path, key, names[key], mend) for key, mend in mends.items()}
        late_us = round(settings.clean.lateness_s * 1e6)
        self._group = GroupCheck(path, late_us) if source.order == "vehicle" else None
        self._n_broken = 0

    def read(self, raw: RawRows, bytes_done: int, bytes_total: int) -> PingChunk:
        """Read a block of rows.

        Raises
        ------
        InputError
            A column's type can't be used, nothing in it can be read, or the order promised is broken.
        """
        key = "vehicle"
        try:
            value_ix, values, named = read_vehicle(raw.vehicle)
            key = "time"
            time = plain(raw.time)
            t_us, timed, no_time = self._times.read(time)
            key = "lon"
            lon_column, lat_column = plain(raw.lon), plain(raw.lat)
            lon, lon_good, no_lon = read_coordinate(lon_column)
            key = "lat"
            lat, lat_good, no_lat = read_coordinate(lat_column)
        except WrongTypeError as err:
            column = self._accounts[key].column
            raise InputError(
                f"{self._path.name}: column '{column}' (source.columns.{key}) {err}; "
                f"write it so or set another column"
            ) from err
        except (pa.ArrowInvalid, UnicodeDecodeError) as err:
            raise InputError(
                f"{self._path.name}: {key} holds bytes that are no UTF-8 text; write it as UTF-8"
            ) from err
        self._accounts["vehicle"].add(raw.vehicle, raw.first_row, named, None if named is None else ~named)
        self._accounts["time"].add(time, raw.first_row, timed, no_time)
        self._accounts["lon"].add(lon_column, raw.first_row, lon_good, no_lon)
        self._accounts["lat"].add(lat_column, raw.first_row, lat_good, no_lat)
        dropped, good = _drops(timed, named, lon_good, lat_good)
        self._n_broken += raw.n_broken
        if raw.n_broken:
            dropped["bad_row"] = raw.n_broken
        rows: NDArray[np.int64] | int = raw.first_row
        if good is not None:
            rows = np.flatnonzero(good) + raw.first_row
            value_ix, t_us, lon, lat = value_ix[good], t_us[good], lon[good], lat[good]
        codes = self._encoder.encode(value_ix, values)
        if self._group is not None:
            self._group.check(codes, t_us, rows)
        n_rows_in = len(time) + raw.n_broken
        return PingChunk(codes, t_us, lon, lat, n_rows_in, dropped, bytes_done, bytes_total)

    def close(self) -> None:
        """Check the file as a whole.

        Raises
        ------
        InputError
            It has rows, and of one column none can be read.
        """
        if self._n_broken and not self._accounts["time"].n_rows:
            raise InputError(
                f"{self._path.name}: none of its {self._n_broken:,} rows can be cut into columns; "
                f"write as many fields in each row as the header has"
            )
        for account in self._accounts.values():
            account.close()


def _drops(
    timed: Mask | None, named: Mask | None, lon_good: Mask | None, lat_good: Mask | None
) -> tuple[dict[str, int], Mask | None]:
    """Count each row that can't be given once: by its time first, then its vehicle, then its place."""
    dropped: dict[str, int] = {}
    good: Mask | None = None
    for reason, mask in (
        ("bad_time", timed),
        ("bad_vehicle", named),
        ("bad_coordinate", lon_good),
        ("bad_coordinate", lat_good),
    ):
        if mask is None:
            continue
        n = int(np.count_nonzero(~mask if good is None else good & ~mask))
        good = mask if good is None else good & mask
        if n:
            dropped[reason] = dropped.get(reason, 0) + n
    return dropped, good
