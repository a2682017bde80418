"""Pings in GPX: the points of the tracks of one vehicle, which bears the file's name.

Guarantee: memory is bounded by one block; no entity is ever resolved.
Source: GPX 1.1 schema documentation (trkpt with lat and lon, time in UTC); 1.0 has the same three.
"""

from collections.abc import Iterator
from pathlib import Path
from typing import Any
from xml.parsers import expat

import numpy as np
import pyarrow as pa

from stream.errors import InputError
from stream.pings.files import PACKED, ByteSource
from stream.pings.rows import RawRows

_BLOCK_BYTES = 1 << 20


def vehicle_of(path: Path) -> str:
    """Give the vehicle's id: the file's name without its endings."""
    bare = path.with_suffix("") if path.suffix.lower() in PACKED else path
    return bare.stem


class _Points:
    """Collects track points while the parser walks through the file."""

    def __init__(self, path: Path) -> None:
        self._path = path
        self._depth = 0
        self._point_depth = -1
        self._in_time = False
        self.lon: list[str | None] = []
        self.lat: list[str | None] = []
        self.time: list[str | None] = []
        self._text: list[str] = []
        parser = expat.ParserCreate(namespace_separator=" ")
        parser.buffer_text = True
        parser.StartElementHandler = self._start
        parser.EndElementHandler = self._end
        parser.CharacterDataHandler = self._characters
        parser.EntityDeclHandler = self._entity
        self.parser = parser

    def _entity(self, *_: Any) -> None:
        raise InputError(
            f"{self._path.name}: declares XML entities, which no GPX file needs; write it without"
        )

    def _start(self, name: str, attributes: dict[str, str]) -> None:
        self._depth += 1
        tag = name.rpartition(" ")[2]
        if self._depth == 1 and tag != "gpx":
            raise InputError(
                f"{self._path.name}: its root is <{tag}>, not <gpx>; rename the file or set source.format"
            )
        if tag == "trkpt" and self._point_depth < 0:
            self._point_depth = self._depth
            self.lon.append(attributes.get("lon"))
            self.lat.append(attributes.get("lat"))
            self._text = []
        elif tag == "time" and self._depth == self._point_depth + 1:
            self._in_time = True

    def _characters(self, text: str) -> None:
        if self._in_time:
            self._text.append(text)

    def _end(self, _name: str) -> None:
        if self._in_time and self._depth == self._point_depth + 1:
            self._in_time = False
        elif self._depth == self._point_depth:
            self._point_depth = -1
            self.time.append("".join(self._text).strip() or None)
        self._depth -= 1

    def take(self) -> tuple[list[str | None], list[str | None], list[str | None]]:
        """Hand over the points that are whole."""
        n = len(self.time)
        taken = self.time, self.lon[:n], self.lat[:n]
        self.time, self.lon, self.lat = [], self.lon[n:], self.lat[n:]
        return taken


class GpxReader:
    """One GPX file."""

    times_are_utc = True

    def __init__(self, path: Path) -> None:
        self.path = path
        self._vehicle = vehicle_of(path)

    def rows(self) -> Iterator[RawRows]:
        """Give the file's track points, block after block."""
        source = ByteSource(self.path)
        points = _Points(self.path)
        row = 1
        for block, is_last in _with_end(source.blocks(_BLOCK_BYTES)):
            try:
                points.parser.Parse(block, is_last)
            except expat.ExpatError as err:
                raise InputError(
                    f"{self.path.name} line {err.lineno}: broken or cut off as XML "
                    f"({expat.errors.messages[err.code]}); fetch the file again"
                ) from err
            time, lon, lat = points.take()
            if time:
                yield self._block(time, lon, lat, row, source.done)
                row += len(time)

    def _block(
        self, time: list[str | None], lon: list[str | None], lat: list[str | None], row: int, done: int
    ) -> RawRows:
        same = pa.array(np.zeros(len(time), dtype=np.int32))
        vehicle = pa.DictionaryArray.from_arrays(same, pa.array([self._vehicle]))
        text = pa.string()
        return RawRows(vehicle, pa.array(time, text), pa.array(lon, text), pa.array(lat, text), row, 0, done)


def _with_end(blocks: Iterator[bytes]) -> Iterator[tuple[bytes, bool]]:
    for block in blocks:
        yield block, False
    yield b"", True
