"""The order of an archive: checked where it is promised, made where it is not.

Guarantee: sorted pings stand in order of time, those of one time in the order of the source, whatever the
chunks, the memory allowed and the threads; memory is bounded, what doesn't fit goes to a temporary folder.
"""

import os
import queue
import tempfile
import threading
from collections.abc import Iterator
from pathlib import Path

import duckdb
import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from stream.config import Run, share_path
from stream.errors import InputError
from stream.kernel import kernel
from stream.pings.book import Encoder, VehicleBook
from stream.pings.chunks import PingChunk, rechunk

_SCHEMA = pa.schema(
    [
        ("vehicle_ix", pa.int32()),
        ("t_us", pa.int64()),
        ("lon", pa.float64()),
        ("lat", pa.float64()),
        ("row_ix", pa.int64()),
    ]
)
_BATCH_ROWS = 1 << 20
_LEAST_MB, _THREAD_MB = 64, 32
GROUPED, SPLIT, BACKWARD = 0, 1, 2


@kernel
def check_grouped_kernel(
    vehicle_ix: NDArray[np.int32],
    t_us: NDArray[np.int64],
    lateness_us: int,
    is_seen: NDArray[np.uint8],
    last: NDArray[np.int64],
) -> tuple[int, int]:
    """Find the first ping that breaks the order by vehicle, then time.

    Parameters
    ----------
    vehicle_ix : int32[n]   dense
    t_us : int64[n]
    lateness_us : int64     how far back a time may fall within a vehicle
    is_seen : uint8[k]      vehicles that had a ping; updated
    last : int64[2]         vehicle of the ping before (-1: none) and its newest time; updated

    Returns
    -------
    at, fault : int64       position of the ping, and SPLIT or BACKWARD; (-1, GROUPED) where all is in order
    """
    current, newest = last[0], last[1]
    for i in range(len(t_us)):
        if vehicle_ix[i] != current:
            current = np.int64(vehicle_ix[i])
            if is_seen[current]:
                return i, SPLIT
            is_seen[current] = 1
            newest = t_us[i]
        elif t_us[i] > newest:
            newest = t_us[i]
        elif t_us[i] < newest - lateness_us:
            return i, BACKWARD
    last[0], last[1] = current, newest
    return -1, GROUPED


class GroupCheck:
    """Holds one file to the order `vehicle`: each vehicle's pings together, in order of time."""

    def __init__(self, path: Path, lateness_us: int) -> None:
        self._path = path
        self._lateness_us = lateness_us
        self._is_seen = np.zeros(1024, dtype=np.uint8)
        self._last = np.array([-1, 0], dtype=np.int64)

    def check(
        self, vehicle_ix: NDArray[np.int32], t_us: NDArray[np.int64], row_of: NDArray[np.int64] | int
    ) -> None:
        """Check the next pings; `row_of` gives their row numbers, or that of the first of unbroken rows.

        Raises
        ------
        InputError
            A vehicle comes back after another one, or a time lies before the one above it.
        """
        top = int(vehicle_ix.max(initial=0)) + 1
        if top > len(self._is_seen):
            self._is_seen = np.concatenate(
                [self._is_seen, np.zeros(2 * top - len(self._is_seen), dtype=np.uint8)]
            )
        at, fault = check_grouped_kernel(vehicle_ix, t_us, self._lateness_us, self._is_seen, self._last)
        if fault == GROUPED:
            return
        row = row_of + at if isinstance(row_of, int) else row_of[at]
        told = (
            "the vehicle had pings further up, before those of another"
            if fault == SPLIT
            else "the time lies before one further up of the same vehicle"
        )
        raise InputError(
            f"{self._path.name} row {row}: {told}, but source.order is vehicle; "
            f"set source.order to unsorted, or to time if each vehicle's pings are in order of time"
        )


class _Feed:
    """What DuckDB draws from: pings with their row position; drops and progress go to a queue beside it."""

    def __init__(self, parts: Iterator[PingChunk]) -> None:
        self._parts = parts
        self.news: queue.SimpleQueue[PingChunk | None] = queue.SimpleQueue()
        self.fault: Exception | None = None
        self.is_stopped = False
        self.n_rows = 0
        self.bytes_total = 0

    def batches(self) -> Iterator[pa.RecordBatch]:
        """Give the pings; an error ends them and is kept, for it would come out of DuckDB in other words."""
        try:
            for part in self._parts:
                if self.is_stopped:
                    return
                n = len(part)
                self.bytes_total = 2 * part.bytes_total
                self.news.put(_bare(part, self.bytes_total))
                row_ix = np.arange(self.n_rows, self.n_rows + n)
                columns = [part.vehicle_ix, part.t_us, part.lon, part.lat, row_ix]
                self.n_rows += n
                yield pa.RecordBatch.from_arrays([pa.array(c) for c in columns], schema=_SCHEMA)
        except Exception as err:  # raised again by news(), in the thread that asked
            self.fault = err


def _bare(part: PingChunk, bytes_total: int) -> PingChunk:
    """Keep of a part its drops and its progress."""
    none = (np.zeros(0, np.int32), np.zeros(0, np.int64), np.zeros(0), np.zeros(0))
    return PingChunk(*none, part.n_rows_in - len(part), part.dropped, part.bytes_done, bytes_total)


def sort_pings(
    parts: Iterator[PingChunk], local: VehicleBook, book: VehicleBook, run: Run
) -> Iterator[PingChunk]:
    """Sort pings by time, then by their order in the source.

    Parameters
    ----------
    parts
        Pings with codes of `local`, as they stand in the source.
    local
        Book of the reading; codes of `book` are given by first sight in the order made here.
    run
        memory_mb (a quarter of it) and threads bound DuckDB.

    Yields
    ------
    While reading: chunks without pings that bear the drops and the progress; then the pings, in chunks of
    run.chunk_rows. Bytes count twice: once read, once given.
    """
    with (
        tempfile.TemporaryDirectory(prefix="turntally-") as folder,
        duckdb.connect(":memory:", config=_limits(run, folder)) as connection,
    ):
        feed = _Feed(parts)
        work = _Sorting(connection, feed)
        yield from work.news()
        yield from rechunk(_give(work.reader, feed, local, book), run.chunk_rows)


def _limits(run: Run, folder: str) -> dict[str, str | bool | int | float | list[str]]:
    """Bound the sort to a quarter of the memory: more made it no faster, and the store has its own."""
    memory_mb = max(run.memory_mb // 4, _LEAST_MB)
    threads = min(run.threads or os.cpu_count() or 1, max(1, memory_mb // _THREAD_MB))
    return {"memory_limit": f"{memory_mb}MB", "temp_directory": folder, "threads": threads}


class _Sorting:
    """The sort, running beside the thread that reports on the reading."""

    def __init__(self, connection: duckdb.DuckDBPyConnection, feed: _Feed) -> None:
        self._feed = feed
        self._fault: Exception | None = None
        self._connection = connection
        self._text = (share_path("sql") / "pings" / "sort_ping.sql").read_text(encoding="utf-8")
        self.reader: pa.RecordBatchReader | None = None
        connection.register("incoming", pa.RecordBatchReader.from_batches(_SCHEMA, feed.batches()))

    def _run(self) -> None:
        try:
            self.reader = self._connection.sql(self._text).to_arrow_reader(_BATCH_ROWS)
        except Exception as err:  # raised again by news(), in the thread that asked
            self._fault = err
        finally:
            self._feed.news.put(None)

    def news(self) -> Iterator[PingChunk]:
        """Sort, and meanwhile give drops and progress.

        Raises
        ------
        InputError
            A file can't be used, or the disk is full.
        """
        worker = threading.Thread(target=self._run, name="sort-pings")
        worker.start()
        try:
            while (one := self._feed.news.get()) is not None:
                yield one
        finally:
            self._feed.is_stopped = True
            worker.join()
        if self._feed.fault is not None:
            raise self._feed.fault
        if self._fault is not None:
            raise _unsortable(self._fault) from self._fault


def _batches(reader: pa.RecordBatchReader | None) -> Iterator[pa.RecordBatch]:
    try:
        yield from reader or ()
    except (OSError, pa.ArrowException, duckdb.Error) as err:
        raise _unsortable(err) from err


def _unsortable(err: Exception) -> InputError:
    return InputError(
        f"the pings could not be sorted ({err}); free disk space for temporary files, or raise run.memory_mb"
    )


def _give(
    reader: pa.RecordBatchReader | None, feed: _Feed, local: VehicleBook, book: VehicleBook
) -> Iterator[PingChunk]:
    """Give the sorted pings, with codes of `book` by first sight."""
    encoder = Encoder(book)
    names = pa.array(local.names, pa.string())
    given = 0
    for batch in _batches(reader):
        vehicle_ix, t_us, lon, lat = (column.to_numpy() for column in batch.columns)
        codes = encoder.encode(np.array(vehicle_ix), names)
        given += len(codes)
        done = feed.bytes_total * (feed.n_rows + given) // max(2 * feed.n_rows, 1)
        yield PingChunk(codes, t_us, lon, lat, len(codes), {}, done, feed.bytes_total)
