"""A column of times in any form to UTC microseconds.

Guarantee: one value has one reading, whatever stands around it. A local time that a clock change skips or
shows twice can't be told and is unreadable.
"""

from dataclasses import dataclass

import numpy as np
import polars as pl
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from stream.pings import iso

Mask = NDArray[np.bool_]
Times = NDArray[np.int64]
_FACTOR = {"s": 1_000_000, "ms": 1000, "us": 1}


class WrongTypeError(Exception):
    """A column's type can't hold what is wanted; the text says what it is and what would do."""


@dataclass(frozen=True)
class TimeReader:
    """How the times of an archive are written.

    Attributes
    ----------
    unit : auto, s, ms, us, ns or iso
    zone : IANA name of the clock of times without offset
    """

    unit: str
    zone: str

    def read(self, column: pa.Array) -> tuple[Times, Mask | None, Mask | None]:
        """Read a column.

        Returns
        -------
        t_us, good, missing
            int64[n]; bool[n] or None where all are good; bool[n] or None where none is missing.

        Raises
        ------
        WrongTypeError
            Neither timestamps, numbers nor text; or numbers where `unit` is iso.
        """
        kind = column.type
        if len(column) == 0:
            return np.zeros(0, dtype=np.int64), None, None
        if pa.types.is_timestamp(kind):
            return self._typed(column)
        if pa.types.is_string(kind) or pa.types.is_large_string(kind):
            return self._text(column)
        if pa.types.is_integer(kind) or pa.types.is_floating(kind) or pa.types.is_decimal(kind):
            if self.unit == "iso":
                raise WrongTypeError(
                    f"holds {kind}, but source.time_unit is iso; set it to auto, s, ms, us or ns"
                )
            return self._whole(column) if pa.types.is_integer(kind) else self._fractional(column)
        raise WrongTypeError(f"holds {kind}; wanted are timestamps, numbers since 1970 or ISO 8601 text")

    def _typed(self, column: pa.Array) -> tuple[Times, Mask | None, Mask | None]:
        missing = _missing(column)
        t_us, good = _from_unit(_integers(column), column.type.unit)
        if column.type.tz is None:
            t_us, good = self._to_utc(t_us, good, None)
        return _finish(t_us, good, missing)

    def _whole(self, column: pa.Array) -> tuple[Times, Mask | None, Mask | None]:
        missing = _missing(column)
        values = _integers(column)
        if self.unit != "auto":
            return _finish(*_from_unit(values, self.unit), missing)
        known = values if missing is None else values[~missing]
        units = {_unit_of(int(v)) for v in (known.min(), known.max())} if known.size else {"s"}
        if len(units) == 1:
            return _finish(*_from_unit(values, units.pop()), missing)
        t_us = np.full(len(values), -1, dtype=np.int64)
        for unit, low, high in _SIZES:
            inside = (values >= low) & (values < high)
            t_us[inside] = _from_unit(values[inside], unit)[0]
        return _finish(t_us, t_us >= 0, missing)

    def _fractional(self, column: pa.Array) -> tuple[Times, Mask | None, Mask | None]:
        missing = _missing(column)
        values = pc.fill_null(pc.cast(column, pa.float64(), safe=False), np.nan).to_numpy(
            zero_copy_only=False
        )
        t_us = np.full(len(values), -1, dtype=np.int64)
        for unit, low, high in _SIZES:
            if self.unit == "auto":
                inside = (values >= low) & (values < high)
            elif unit == self.unit:
                inside = values >= 0
            else:
                continue
            scaled = values[inside] * (_FACTOR[unit] if unit != "ns" else 1e-3)
            t_us[inside] = np.where(scaled <= iso.MAX_US, np.rint(np.minimum(scaled, iso.MAX_US)), -1)
        return _finish(t_us, t_us >= 0, missing)

    def _text(self, column: pa.Array) -> tuple[Times, Mask | None, Mask | None]:
        offsets, data = _text_buffers(column)
        t_us = np.empty(len(column), dtype=np.int64)
        kind = np.empty(len(column), dtype=np.uint8)
        n_instant = iso.text_times_kernel(offsets, data, iso.UNIT_CODES[self.unit], t_us, kind)
        missing = _missing(column)
        if n_instant == len(column) and missing is None:
            return _finish(t_us, None, None)
        if missing is not None:
            kind[missing] = iso.MISSING
        good: Mask | None = kind >= iso.INSTANT
        is_local = kind == iso.LOCAL
        if is_local.any():
            t_us, good = self._to_utc(t_us, good, is_local)
        return _finish(t_us, good, kind == iso.MISSING)

    def _to_utc(self, t_us: Times, good: Mask | None, is_local: Mask | None) -> tuple[Times, Mask | None]:
        """Take local clock times to UTC, those marked or all."""
        if self.zone == "UTC":
            return t_us, good
        chosen = t_us if is_local is None else t_us[is_local]
        clock = pl.Series(chosen).cast(pl.Datetime("us"))
        known = clock.dt.replace_time_zone(self.zone, ambiguous="null", non_existent="null")
        told = known.is_not_null().to_numpy()
        utc = known.dt.epoch("us").fill_null(-1).to_numpy()
        t_out = np.array(t_us)
        good_out = np.ones(len(t_us), dtype=np.bool_) if good is None else good.copy()
        if is_local is None:
            t_out, good_out = np.array(utc), good_out & told
        else:
            t_out[is_local] = utc
            good_out[is_local] &= told
        return t_out, good_out


_SIZES = (
    ("s", 0, iso.MILLIS_FROM),
    ("ms", iso.MILLIS_FROM, iso.MICROS_FROM),
    ("us", iso.MICROS_FROM, iso.NANOS_FROM),
    ("ns", iso.NANOS_FROM, 2**63 - 1),
)


def _unit_of(value: int) -> str:
    for unit, _, high in _SIZES[:-1]:
        if value < high:
            return unit
    return "ns"


def _missing(column: pa.Array) -> Mask | None:
    return None if column.null_count == 0 else column.is_null().to_numpy(zero_copy_only=False)


def _integers(column: pa.Array) -> Times:
    """Take the numbers behind a column; null is -1, which is no time."""
    plain = column.cast(pa.int64(), safe=False)
    if plain.null_count:
        plain = pc.fill_null(plain, -1)
    values: Times = plain.to_numpy(zero_copy_only=False)
    return values


def _from_unit(values: Times, unit: str) -> tuple[Times, Mask | None]:
    if unit == "ns":
        return values // 1000, None
    factor = _FACTOR[unit]
    if factor == 1:
        return values, None
    good = values <= iso.MAX_US // factor
    return values * factor, None if good.all() else good


def _finish(t_us: Times, good: Mask | None, missing: Mask | None) -> tuple[Times, Mask | None, Mask | None]:
    """Add to what is bad the times outside those taken."""
    if t_us.size and (t_us.min() < 0 or t_us.max() > iso.MAX_US):
        inside = (t_us >= 0) & (t_us <= iso.MAX_US)
        good = inside if good is None else good & inside
    if missing is not None:
        good = ~missing if good is None else good & ~missing
    if good is not None and good.all():
        good = None
    return t_us, good, missing


def _text_buffers(column: pa.Array) -> tuple[NDArray[np.int64], NDArray[np.uint8]]:
    wide = column.cast(pa.large_string())
    _, offsets, data = wide.buffers()
    start = np.frombuffer(offsets, dtype=np.int64)[wide.offset : wide.offset + len(wide) + 1]
    return start, np.frombuffer(data if data is not None else b"", dtype=np.uint8)
