"""Pings in Parquet, read a batch at a time.

Guarantee: memory is bounded by the batch, however large the row groups are.
"""

from collections.abc import Iterator
from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq

from stream.errors import InputError
from stream.pings.columns import is_text
from stream.pings.files import unreadable
from stream.pings.rows import NEEDED, RawRows, find_columns

# Without a buffer, a column of a whole row group is read at once.
_BUFFER_BYTES = 1 << 20


class ParquetReader:
    """One Parquet file."""

    times_are_utc = False

    def __init__(self, path: Path, wanted: dict[str, str], batch_rows: int, threads: bool) -> None:
        self.path = path
        self._batch_rows = batch_rows
        self._threads = threads
        self._size = path.stat().st_size
        self._names = [wanted[key] for key in NEEDED]
        with self._open([]) as file:
            schema = file.schema_arrow
            find_columns(path, schema.names, wanted)
            vehicle = schema.field(wanted["vehicle"]).type
        # Texts come as their dictionary: half of the time of a file goes into unfolding them otherwise.
        self._dictionary = [wanted["vehicle"]] if is_text(vehicle) else []

    def _open(self, dictionary: list[str]) -> pq.ParquetFile:
        try:
            return pq.ParquetFile(
                self.path,
                read_dictionary=dictionary,
                buffer_size=_BUFFER_BYTES,
                pre_buffer=False,
                coerce_int96_timestamp_unit="us",
                page_checksum_verification=True,
            )
        except (pa.ArrowInvalid, pa.ArrowNotImplementedError) as err:
            raise InputError(
                f"{self.path.name}: is no Parquet file, or is cut off ({_short(err)}); fetch the file again"
            ) from err
        except OSError as err:
            if err.errno is not None:
                raise unreadable(self.path, err) from err
            raise self._broken(0, err) from err

    def _broken(self, row: int, err: Exception) -> InputError:
        return InputError(
            f"{self.path.name}: broken as Parquet after row {row:,} ({_short(err)}); fetch the file again"
        )

    def rows(self) -> Iterator[RawRows]:
        """Give the file's rows, batch after batch."""
        row = 0
        with self._open(self._dictionary) as file:
            n_rows = max(file.metadata.num_rows, 1)
            batches = file.iter_batches(self._batch_rows, columns=self._names, use_threads=self._threads)
            while True:
                try:
                    table = self._gather(batches)
                except (OSError, pa.ArrowException) as err:
                    raise self._broken(row, err) from err
                if table is None:
                    break
                vehicle, time, lon, lat = (table.column(name) for name in self._names)
                first_row = row + 1
                row += table.num_rows
                yield RawRows(vehicle, time, lon, lat, first_row, 0, self._size * row // n_rows)

    def _gather(self, batches: Iterator[pa.RecordBatch]) -> pa.Table | None:
        """Put small row groups together: looking up a dictionary for each took half of the time."""
        parts: list[pa.RecordBatch] = []
        n = 0
        while n < self._batch_rows:
            batch = next(batches, None)
            if batch is None:
                break
            parts.append(batch)
            n += batch.num_rows
        return pa.Table.from_batches(parts) if parts else None


def _short(err: Exception) -> str:
    text = " ".join(str(err).split())
    return text if len(text) <= 120 else text[:117] + "..."
