"""Columns of vehicles and coordinates in any type to plain arrays, and the account of what can't be read.

Guarantee: a value is read the same way in every format. A file of which nothing (or nothing in its first
10,000 rows) can be read is refused with the first such value; single values are counted.
"""

from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import polars as pl
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from stream.errors import InputError
from stream.pings.times import WrongTypeError

Mask = NDArray[np.bool_]
FIRST_ROWS = 10_000
# Texts that stand for "no number", as the usual writers of CSV leave them.
NO_NUMBER = ("", "null", "NULL", "nan", "NaN", "NA", "N/A", "None")


def plain(column: pa.Array | pa.ChunkedArray) -> pa.Array:
    """Join the pieces of a column and give texts one type; dictionaries of texts and numbers are resolved."""
    if isinstance(column, pa.ChunkedArray):
        column = column.combine_chunks()
    if pa.types.is_dictionary(column.type):
        column = column.dictionary_decode()
    if is_text(column.type) and not pa.types.is_string(column.type):
        column = column.cast(pa.large_string())
    return column


def is_text(kind: pa.DataType) -> bool:
    """Tell texts, also those whose bytes aren't marked as text."""
    types = pa.types
    return any(
        test(kind)
        for test in (
            types.is_string,
            types.is_large_string,
            types.is_string_view,
            types.is_binary,
            types.is_large_binary,
            types.is_binary_view,
        )
    )


def read_coordinate(column: pa.Array) -> tuple[NDArray[np.float64], Mask | None, Mask | None]:
    """Read degrees.

    Returns
    -------
    degrees, good, missing
        float64[n]; bool[n] or None where all are good; bool[n] or None where none is missing. Good is finite.

    Raises
    ------
    WrongTypeError
        Neither numbers nor text.
    """
    kind = column.type
    missing = None
    if is_text(kind):
        text = pc.utf8_trim_whitespace(column)
        missing = pc.or_kleene(
            pc.is_null(text), pc.is_in(text, value_set=pa.array(NO_NUMBER, type=text.type))
        ).to_numpy(zero_copy_only=False)
        series = pl.Series(pl.from_arrow(text))
        values = series.cast(pl.Float64, strict=False).fill_null(np.nan).to_numpy()
    elif pa.types.is_integer(kind) or pa.types.is_floating(kind) or pa.types.is_decimal(kind):
        if column.null_count:
            missing = column.is_null().to_numpy(zero_copy_only=False)
        if kind != pa.float64():
            column = pc.cast(column, pa.float64(), safe=False)
        if missing is not None:
            column = pc.fill_null(column, np.nan)
        values = column.to_numpy(zero_copy_only=False)
    elif pa.types.is_null(kind):
        missing = np.ones(len(column), dtype=np.bool_)
        values = np.full(len(column), np.nan)
    else:
        raise WrongTypeError(f"holds {kind}; wanted are numbers (degrees)")
    good = np.isfinite(values)
    return values, None if good.all() else good, missing


def read_vehicle(column: pa.Array | pa.ChunkedArray) -> tuple[NDArray[np.int32], pa.Array, Mask | None]:
    """Read vehicle ids.

    Returns
    -------
    value_ix, values, good
        int32[n], position in `values` (texts or integers); bool[n] or None where all are good. An id that is
        null or empty is not good.

    Raises
    ------
    WrongTypeError
        Neither text nor integers.
    """
    if not pa.types.is_dictionary(column.type):
        column = plain(column)
    elif isinstance(column, pa.ChunkedArray):
        column = column.unify_dictionaries().combine_chunks()
    kind = column.type.value_type if pa.types.is_dictionary(column.type) else column.type
    if pa.types.is_null(kind):
        return np.zeros(len(column), np.int32), pa.array([""]), np.zeros(len(column), np.bool_)
    if not (is_text(kind) or pa.types.is_integer(kind)):
        raise WrongTypeError(f"holds {kind}; wanted are texts or whole numbers")
    coded = column if pa.types.is_dictionary(column.type) else column.dictionary_encode()
    values = coded.dictionary
    if is_text(kind) and not pa.types.is_string(values.type):
        values = values.cast(pa.large_string())
    indices = coded.indices
    if indices.null_count:
        indices = pc.fill_null(indices, -1)
    value_ix = indices.to_numpy(zero_copy_only=False).astype(np.int32)
    good = None
    bad = _without_name(values)
    if indices.null_count or coded.indices.null_count or bad.size:
        is_named = np.ones(len(values) + 1, dtype=np.bool_)  # the last stands for -1
        is_named[-1] = False
        is_named[bad] = False
        good = is_named[value_ix]
    return value_ix, values, None if good is None or good.all() else good


def _without_name(values: pa.Array) -> NDArray[np.intp]:
    """Find the entries that name no vehicle."""
    none = pc.is_null(values)
    if is_text(values.type):
        none = pc.or_kleene(none, pc.equal(pc.binary_length(values), 0))
    return np.flatnonzero(pc.fill_null(none, True).to_numpy(zero_copy_only=False))


@dataclass
class Account:
    """What could and could not be read of one column of one file.

    Attributes
    ----------
    path : the file
    what : what the column holds, for messages
    column : its name
    mend : what to do when nothing can be read
    """

    path: Path
    what: str
    column: str
    mend: str
    n_rows: int = 0
    n_good: int = 0
    n_first_unreadable: int = 0
    first: str = field(default="")

    def add(self, column: pa.Array, first_row: int, good: Mask | None, missing: Mask | None) -> None:
        """Take in one batch.

        Raises
        ------
        InputError
            None of the first 10,000 rows can be read, and that not because they are empty.
        """
        n = len(column)
        before = self.n_rows
        self.n_rows += n
        self.n_good += n if good is None else int(np.count_nonzero(good))
        if good is None:
            return
        unreadable = ~good if missing is None else ~good & ~missing
        if not self.first and unreadable.any():
            at = int(np.argmax(unreadable))
            self.first = f"row {first_row + at}: {self.what} {_shown(column[at])}"
        if before < FIRST_ROWS:
            self.n_first_unreadable += int(np.count_nonzero(unreadable[: FIRST_ROWS - before]))
            if self.n_first_unreadable == FIRST_ROWS:
                self._refuse(f"nor can any of the first {FIRST_ROWS:,} rows")

    def close(self) -> None:
        """Check the file as a whole.

        Raises
        ------
        InputError
            It has rows, and none can be read.
        """
        if self.n_rows and not self.n_good:
            self._refuse(f"nor can any other of the {self.n_rows:,} rows")

    def _refuse(self, others: str) -> None:
        if self.first:
            told = f"{self.path.name} {self.first} can't be read, {others}"
        else:
            told = f"{self.path.name}: column '{self.column}' is empty in all of its {self.n_rows:,} rows"
        raise InputError(f"{told}; {self.mend}")


def _shown(value: pa.Scalar) -> str:
    text = str(value.as_py())
    return repr(text if len(text) <= 60 else text[:57] + "...")
