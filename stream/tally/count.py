"""Counting passages and sections into strata: integers only.

Guarantee: addition is exact, commutative and associative and leaves both sides as they were; the same rows
give equal counts however they were cut into parts.
"""

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Self

import numpy as np
import polars as pl

from stream.config import Settings, Tally
from stream.tally.bins import bin_of
from stream.tally.reference import pace_ms
from stream.tally.strata import DIMENSIONS, Kind, check_tallies, needed_columns, value_of

_STRATUM = {"tally": pl.String, "stratum_id": pl.Int64, "dimension": pl.String, "value": pl.String}
_HISTOGRAM = {"tally": pl.String, "stratum_id": pl.Int64, "bin_ix": pl.Int32, "n": pl.Int64}
_MOMENT = {"tally": pl.String, "stratum_id": pl.Int64, "n": pl.Int64, "sum": pl.Int128, "sum_sq": pl.Int128}
_KEY = ["tally", "stratum_id"]
_FRAMES = ("stratum", "histogram", "moment")


@dataclass(frozen=True)
class Counts:
    """Histograms and moments of any number of tallies.

    Attributes
    ----------
    stratum : tally, stratum_id (int64, >= 0), dimension, value (text); what each stratum stands for
    histogram : tally, stratum_id, bin_ix (int32), n (int64, > 0)
    moment : tally, stratum_id, n (int64), sum, sum_sq (Int128) of the values in ms (or ms per km)

    Rows stand in the order of their keys, so that equal counts are equal frames.
    """

    stratum: pl.DataFrame
    histogram: pl.DataFrame
    moment: pl.DataFrame

    @classmethod
    def empty(cls) -> Self:
        """Give counts of nothing."""
        return cls(
            pl.DataFrame(schema=_STRATUM), pl.DataFrame(schema=_HISTOGRAM), pl.DataFrame(schema=_MOMENT)
        )

    def __add__(self, other: "Counts") -> "Counts":
        """Add counts of other rows.

        Raises
        ------
        RuntimeError
            Two strata of one tally fall on one number (odds below 1 in 10^9 for a hundred thousand).
        """
        return add_counts([self, other])

    def equals(self, other: "Counts") -> bool:
        """Tell whether both hold the same strata with the same integers."""
        return (
            self.stratum.equals(other.stratum)
            and self.histogram.equals(other.histogram)
            and self.moment.equals(other.moment)
        )


def add_counts(parts: Sequence[Counts]) -> Counts:
    """Add any number of counts at once, as a chain of additions would."""
    total = _added(parts)
    return Counts(
        total.stratum.sort([*_KEY, "dimension", "value"]),
        total.histogram.sort(*_KEY, "bin_ix"),
        total.moment.sort(_KEY),
    )


def _added(parts: Sequence[Counts]) -> Counts:
    """Add up, and leave the rows in any order."""
    if not parts:
        return Counts.empty()
    stratum = pl.concat([p.stratum for p in parts]).unique()
    twice = stratum.filter(stratum.select(*_KEY, "dimension").is_duplicated())
    if twice.height:
        raise RuntimeError(
            f"two strata fall on one number: {twice.head(2).to_dicts()}; nothing was added; "
            "please report this, and rename the tally to go on"
        )
    histogram = pl.concat([p.histogram for p in parts]).group_by(*_KEY, "bin_ix").agg(pl.col("n").sum())
    moment = pl.concat([p.moment for p in parts]).group_by(_KEY).agg(pl.col("n", "sum", "sum_sq").sum())
    return Counts(stratum, histogram, moment)


class Adder:
    """Counts many slices of rows, in parts of about doubling size: the whole is not copied for each slice.

    Parameters
    ----------
    settings
        As for `count_passages` and `count_sections`, which count a single slice.
    """

    def __init__(self, settings: Settings) -> None:
        check_tallies(settings.tallies)
        self._settings = settings
        self._parts: list[Counts] = []

    def add_passages(self, passages: pl.DataFrame) -> None:
        """Count passages in."""
        self._add(_passages(passages, self._settings))

    def add_sections(self, sections: pl.DataFrame) -> None:
        """Count sections in."""
        self._add(_sections(sections, self._settings))

    def _add(self, counts: Counts) -> None:
        parts = self._parts
        parts.append(counts)
        while len(parts) > 1 and parts[-2].histogram.height < 2 * parts[-1].histogram.height:
            parts[-2:] = [_added(parts[-2:])]

    def sum(self) -> Counts:
        """Give the sum of all that was taken in."""
        return add_counts(self._parts)


def _number(text: str) -> int:
    return int.from_bytes(hashlib.blake2b(text.encode(), digest_size=8).digest(), "big") >> 1


def stratum_number(tally: str, values: Mapping[str, str]) -> int:
    """Number a stratum from what it is: 63 bits of the BLAKE2b digest of tally, dimensions and values.

    The order of the dimensions does not count. Parts are set apart by the ASCII record separator,
    dimension and value by the unit separator.
    """
    return _number("\x1e".join([tally, *(f"{d}\x1f{v}" for d, v in sorted(values.items()))]))


def _count_tally(rows: pl.DataFrame, name: str, dimensions: Sequence[str]) -> Counts:
    """Count rows with columns `value_ms`, `bin_ix` and what the dimensions read; keys may come twice."""
    named = sorted(dimensions)
    raw = list(dict.fromkeys(DIMENSIONS[d].column for d in named))
    cells = (
        rows.lazy()
        .group_by(*raw, "bin_ix")
        .agg(
            pl.len().cast(pl.Int64).alias("n"),
            pl.col("value_ms").cast(pl.Int128).sum().alias("sum"),
            pl.col("value_ms").cast(pl.Int128).pow(2).sum().alias("sum_sq"),
        )
        .collect()
    )
    keys = [f"={d}" for d in named]
    strata = cells.select(raw).unique().with_columns(value_of(DIMENSIONS[d]).alias(f"={d}") for d in named)
    texts = strata.select(keys).iter_rows()
    numbers = [stratum_number(name, dict(zip(named, row, strict=True))) for row in texts]
    strata = strata.with_columns(
        pl.Series("stratum_id", numbers, dtype=pl.Int64), pl.lit(name).alias("tally")
    )
    cells = cells.join(strata.select(*raw, *_KEY), on=raw, how="left")
    stratum = (
        strata.select(*_KEY, *(pl.col(f"={d}").alias(d) for d in named))
        .unique()
        .unpivot(named, index=_KEY, variable_name="dimension", value_name="value")
    )
    return Counts(
        stratum.select(pl.col(c).cast(t) for c, t in _STRATUM.items()),
        cells.select(pl.col(c).cast(t) for c, t in _HISTOGRAM.items()),
        cells.select(pl.col(c).cast(t) for c, t in _MOMENT.items()),
    )


def _count(rows: pl.DataFrame, value_ms: pl.Series, tallies: Mapping[str, Tally], kind: Kind) -> Counts:
    wanted = {name: t for name, t in tallies.items() if t.value == kind}
    if not wanted or rows.is_empty():
        return Counts.empty()
    values = value_ms.to_numpy()
    read = rows.select(needed_columns(wanted, kind)).with_columns(
        pl.Series("value_ms", values, dtype=pl.Int64),
        pl.Series("bin_ix", bin_of(values).astype(np.int32)),
    )
    parts = [_count_tally(read, name, t.dimensions) for name, t in wanted.items()]
    return Counts(*(pl.concat([getattr(p, kind) for p in parts]) for kind in _FRAMES))


def _passages(passages: pl.DataFrame, settings: Settings) -> Counts:
    return _count(passages, passages["delay_ms"], settings.tallies, "delay")


def _sections(sections: pl.DataFrame, settings: Settings) -> Counts:
    long = sections.filter((pl.col("path_m") >= settings.sections.min_m) & (pl.col("path_m") > 0))
    pace = pl.Series(pace_ms(long["duration_ms"].to_numpy(), long["path_m"].to_numpy()))
    return _count(long, pace, settings.tallies, "pace")


def count_passages(passages: pl.DataFrame, settings: Settings) -> Counts:
    """Count the delays of passages into every tally of delays.

    Parameters
    ----------
    passages
        Columns `delay_ms` and those that the dimensions in use read: `zone`, `maneuver`, `class_in`,
        `class_out`, `control`, `driving_side`, `turn_deg`, `junction_id`, `arm_in`, `arm_out`,
        `is_banned`, `is_queued_at_gate`, and from `with_local_time` `day_type`, `time_band`, `hour`,
        `weekday`, `month`. Not changed.
    settings
        The tallies.

    Raises
    ------
    ConfigError
        A tally names a dimension that there is none of.
    """
    check_tallies(settings.tallies)
    return add_counts([_passages(passages, settings)])


def count_sections(sections: pl.DataFrame, settings: Settings) -> Counts:
    """Count the paces of sections, in ms per km, into every tally of paces.

    Parameters
    ----------
    sections
        Columns `duration_ms`, `path_m` and those that the dimensions in use read: `zone`, `class`,
        `driving_side`, and from `with_local_time` `day_type`, `time_band`, `hour`, `weekday`, `month`.
        Sections shorter than `sections.min_m` are left out. Not changed.
    settings
        The tallies and `sections.min_m`.

    Raises
    ------
    ConfigError
        A tally names a dimension that there is none of.
    """
    check_tallies(settings.tallies)
    return add_counts([_sections(sections, settings)])
