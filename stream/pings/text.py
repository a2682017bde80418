"""Pings as text: CSV with a header, and NDJSON with one object a line; packed or not.

Guarantee: memory is bounded by one block of lines. A line that does not have the header's fields, or is no
JSON object, is counted and passed over.
"""

import csv
import io
import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import polars as pl
import pyarrow as pa
import pyarrow.csv as pa_csv

from stream.errors import InputError
from stream.pings.columns import NO_NUMBER
from stream.pings.files import ByteSource
from stream.pings.rows import NEEDED, RawRows, find_columns

_SEPARATORS = (",", ";", "\t", "|")
_LOOK_BYTES = 64 << 10
_LOOK_LINES = 100
_MARK = b"\xef\xbb\xbf"


def _head(path: Path) -> list[bytes]:
    """Read the first lines that aren't blank, without the byte order mark."""
    for block in ByteSource(path).lines(_LOOK_BYTES):
        lines = [line for line in block.removeprefix(_MARK).splitlines() if line.strip()]
        if lines:
            return lines[:_LOOK_LINES]
    raise InputError(f"{path.name}: holds no line of text; deliver it again or leave it out")


def _header(path: Path) -> str:
    try:
        return _head(path)[0].decode("utf-8")
    except UnicodeDecodeError as err:
        raise InputError(
            f"{path.name}: its header is not UTF-8 text (byte {err.start}); is the file packed or of another "
            f"format? rename it or set source.format"
        ) from err


class CsvReader:
    """One CSV file; the separator is the one at which the header falls into the columns wanted."""

    times_are_utc = False

    def __init__(self, path: Path, wanted: dict[str, str], threads: bool) -> None:
        self.path = path
        self._threads = threads
        header = _header(path)
        heads = {s: [n.strip() for n in next(csv.reader([header], delimiter=s))] for s in _SEPARATORS}
        names = set(wanted.values())
        self._separator = max(_SEPARATORS, key=lambda s: (len(names & set(heads[s])), len(heads[s])))
        have = heads[self._separator]
        at = find_columns(path, have, wanted)
        self._fields = [f"c{i}" for i in range(len(have))]
        self._taken = [self._fields[at[key]] for key in NEEDED]
        self._is_typed = True

    def rows(self) -> Iterator[RawRows]:
        """Give the file's rows, block after block."""
        source = ByteSource(self.path)
        row = 1
        has_header = True
        for given in source.lines():
            block = given
            if has_header:
                block = _after_header(given)
                has_header = block is given
                if not block.strip():
                    continue
            table, n_broken = self._parse(block, row)
            vehicle, time, lon, lat = (table.column(name) for name in self._taken)
            yield RawRows(vehicle, time, lon, lat, row, n_broken, source.done)
            row += table.num_rows + n_broken

    def _parse(self, block: bytes, row: int) -> tuple[pa.Table, int]:
        """Cut a block into columns: degrees as numbers while all of them are, else as text."""
        if self._is_typed:
            try:
                return self._cut(block, pa.float64())
            except pa.ArrowInvalid:
                self._is_typed = False
        try:
            return self._cut(block, pa.string())
        except pa.ArrowInvalid as err:
            raise InputError(
                f"{self.path.name} row {row} or later: can't be read as CSV ({err}); write it as UTF-8 text"
            ) from err

    def _cut(self, block: bytes, degrees: pa.DataType) -> tuple[pa.Table, int]:
        broken: list[Any] = []

        def skip(_line: Any) -> str:
            broken.append(None)
            return "skip"

        vehicle, time, lon, lat = self._taken
        kinds = {
            vehicle: pa.dictionary(pa.int32(), pa.string()),
            time: pa.string(),
            lon: degrees,
            lat: degrees,
        }
        table = pa_csv.read_csv(
            pa.BufferReader(block),
            read_options=pa_csv.ReadOptions(
                column_names=self._fields, use_threads=self._threads, block_size=len(block) + 1
            ),
            parse_options=pa_csv.ParseOptions(delimiter=self._separator, invalid_row_handler=skip),
            convert_options=pa_csv.ConvertOptions(
                include_columns=self._taken,
                column_types=kinds,
                null_values=list(NO_NUMBER),
                strings_can_be_null=False,
            ),
        )
        return table, len(broken)


def _after_header(block: bytes) -> bytes:
    """Cut off the first line that isn't blank; the same block where all are blank."""
    at = 0
    while at < len(block):
        end = block.find(b"\n", at) + 1 or len(block)
        if block[at:end].strip(_MARK + b" \t\r\n"):
            return block[end:]
        at = end
    return block


class NdjsonReader:
    """One file of JSON objects, one a line."""

    times_are_utc = False

    def __init__(self, path: Path, wanted: dict[str, str]) -> None:
        self.path = path
        self._names = [wanted[key] for key in NEEDED]
        have: dict[str, None] = {}
        for i, line in enumerate(_head(path)):
            try:
                one = json.loads(line)
            except ValueError:
                one = None
            if isinstance(one, dict):
                have.update(dict.fromkeys(one))
            elif i == 0:
                start = line[:40].decode(errors="replace")
                raise InputError(f"{path.name} row 1: is no JSON object ({start!r}); write one object a line")
        find_columns(path, list(have), wanted)

    def rows(self) -> Iterator[RawRows]:
        """Give the file's rows, block after block."""
        source = ByteSource(self.path)
        row = 1
        for given in source.lines():
            block = given.removeprefix(_MARK) if row == 1 else given
            frame, n_broken = self._parse(block)
            table = frame.to_arrow(compat_level=pl.CompatLevel.oldest())
            vehicle, time, lon, lat = (table.column(name) for name in self._names)
            yield RawRows(vehicle, time, lon, lat, row, n_broken, source.done)
            row += frame.height + n_broken

    def _parse(self, block: bytes) -> tuple[pl.DataFrame, int]:
        """Read a block: fast while each value is of its type, as text if not, else line by line."""
        for degrees in (pl.Float64, pl.String):
            schema = dict.fromkeys(self._names[:2], pl.String) | dict.fromkeys(self._names[2:], degrees)
            try:
                return pl.read_ndjson(io.BytesIO(block), schema=schema), 0
            except pl.exceptions.PolarsError:
                continue
        return self._by_line(block)

    def _by_line(self, block: bytes) -> tuple[pl.DataFrame, int]:
        columns: dict[str, list[str | None]] = {name: [] for name in self._names}
        n_broken = 0
        for line in block.split(b"\n"):
            if not line.strip():
                continue
            try:
                one = json.loads(line, parse_float=str, parse_int=str)
            except ValueError:
                one = None
            if not isinstance(one, dict):
                n_broken += 1
                continue
            for name, column in columns.items():
                value = one.get(name)
                column.append(value if isinstance(value, str) or value is None else json.dumps(value))
        return pl.DataFrame(columns, schema=dict.fromkeys(self._names, pl.String)), n_broken
