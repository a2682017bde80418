"""What every reader hands on, whatever the format: four columns as they stand in the file."""

import difflib
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol

import pyarrow as pa

from stream.config import Columns
from stream.errors import ConfigError, InputError

NEEDED = ("vehicle", "time", "lon", "lat")


@dataclass(frozen=True)
class RawRows:
    """Rows of one file, in its order.

    Attributes
    ----------
    vehicle, time, lon, lat : columns of one length, in the file's types
    first_row : number of the first row in the file, from 1, a header not counted
    n_broken : rows of this block that could not be cut into columns; they are in none of them
    bytes_done : how far the file is read, in its own bytes
    """

    vehicle: pa.Array | pa.ChunkedArray
    time: pa.Array | pa.ChunkedArray
    lon: pa.Array | pa.ChunkedArray
    lat: pa.Array | pa.ChunkedArray
    first_row: int
    n_broken: int
    bytes_done: int


class Reader(Protocol):
    """One open file of pings.

    Attributes
    ----------
    path : the file
    times_are_utc : the format itself says that times without offset are UTC, and text
    """

    path: Path
    times_are_utc: bool

    def rows(self) -> Iterator[RawRows]:
        """Give the file's rows, block after block."""
        ...


def wanted_names(columns: Columns) -> dict[str, str]:
    """Give the column's name for each key of `source.columns` that is set.

    Raises
    ------
    ConfigError
        Two of the needed keys name one column.
    """
    names = {key: name for key, name in columns.model_dump().items() if name is not None}
    for key in NEEDED:
        twin = next((k for k in NEEDED if k != key and names[k] == names[key]), None)
        if twin:
            raise ConfigError(
                f"source.columns.{key} and source.columns.{twin} both name the column '{names[key]}'"
            )
    return names


def find_columns(path: Path, have: Sequence[str], wanted: dict[str, str]) -> dict[str, int]:
    """Find the wanted columns among those there are.

    Returns
    -------
    Position by key of `source.columns`.

    Raises
    ------
    InputError
        A column is not there, or stands there twice; all faults in one message, with the nearest names.
    """
    faults = []
    mends = []
    for key, name in wanted.items():
        n = list(have).count(name)
        if n == 1:
            continue
        faults.append(f"{'no' if n == 0 else 'twice the'} column '{name}' (source.columns.{key})")
        near = _nearest(name, key, have)
        if n == 0 and key not in NEEDED:
            mends.append(f"set source.columns.{key}: null")
        elif near and n == 0:
            mends.append(f"set source.columns.{key}: {near}")
        else:
            mends.append(f"set source.columns.{key}" if n == 0 else f"rename one '{name}'")
    if faults:
        there = ", ".join(repr(h) for h in have[:40]) or "none"
        raise InputError(f"{path.name}: {' and '.join(faults)}; columns there: {there}; {', '.join(mends)}")
    return {key: list(have).index(name) for key, name in wanted.items()}


def _nearest(name: str, key: str, have: Sequence[str]) -> str | None:
    lowered = {h.lower(): h for h in reversed(have)}
    for word in (name, key):
        if word.lower() in lowered:
            return lowered[word.lower()]
    for word in (name, key):
        near = difflib.get_close_matches(word.lower(), list(lowered), 1, 0.4)
        if near:
            return lowered[near[0]]
    return None
