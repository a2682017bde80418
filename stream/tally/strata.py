"""Dimensions: what a passage or a section is sorted by, as text values.

Guarantee: a value depends on the row alone. Time bands and day types are those of the row's own time zone,
worked out from UTC to local time and never the other way, so that a clock change loses or doubles nothing.
"""

import difflib
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Literal

import polars as pl

from stream.config import Tally, Time
from stream.errors import ConfigError

Kind = Literal["delay", "pace"]
SECTOR_DEG = 10
# Since 1970 all clocks have stood off UTC by whole half minutes, and been changed at whole ones.
SLOT_US = 30_000_000
_SLOT = "slot_us"


@dataclass(frozen=True)
class Dimension:
    """One way to sort rows.

    Attributes
    ----------
    name : as written in YAML and on the command line
    column : column of the frame that its value comes from
    kinds : `delay` where passages have it, `pace` where sections have it
    about : what its values are, for tables and data dictionaries
    """

    name: str
    column: str
    kinds: tuple[Kind, ...]
    about: str


_PASSAGE: tuple[Kind, ...] = ("delay",)
_SECTION: tuple[Kind, ...] = ("pace",)
_BOTH: tuple[Kind, ...] = ("delay", "pace")

DIMENSIONS: dict[str, Dimension] = {
    d.name: d
    for d in (
        Dimension("zone", "zone", _BOTH, "zone of the junction or link; empty outside all zones"),
        Dimension("maneuver", "maneuver", _PASSAGE, "class of the turn angle"),
        Dimension("class_in", "class_in", _PASSAGE, "road class of the arm in"),
        Dimension("class_out", "class_out", _PASSAGE, "road class of the arm out"),
        Dimension("class", "class", _SECTION, "road class of the section"),
        Dimension("control", "control", _PASSAGE, "control of the junction"),
        Dimension("driving_side", "driving_side", _BOTH, "right or left"),
        Dimension("day_type", "day_type", _BOTH, "day type in local time, as configured"),
        Dimension("time_band", "time_band", _BOTH, "band of the day in local time, as configured"),
        Dimension("turn_sector", "turn_deg", _PASSAGE, "sector of 10 degrees of the turn angle, from..to"),
        Dimension("junction_id", "junction_id", _PASSAGE, "smallest OSM node id of the junction"),
        Dimension("arm_in", "arm_in", _PASSAGE, "number of the arm in"),
        Dimension("arm_out", "arm_out", _PASSAGE, "number of the arm out"),
        Dimension("is_banned", "is_banned", _PASSAGE, "true where a restriction forbids the movement"),
        Dimension("is_queued_at_gate", "is_queued_at_gate", _PASSAGE, "true where a queue reached the gate"),
        Dimension("hour", "hour", _BOTH, "hour of the day in local time, 0 to 23"),
        Dimension("weekday", "weekday", _BOTH, "day of the week in local time, 1 = Monday"),
        Dimension("month", "month", _BOTH, "month in local time, 1 to 12"),
    )
}


def dimension(name: str, kind: Kind, where: str) -> Dimension:
    """Look a dimension up.

    Parameters
    ----------
    name
        As the user wrote it.
    kind
        What the tally measures.
    where
        Where it was written, for the message.

    Raises
    ------
    ConfigError
        There is no such dimension, or not for this kind; the nearest one is named.
    """
    known = [d.name for d in DIMENSIONS.values() if kind in d.kinds]
    if name in known:
        return DIMENSIONS[name]
    near = difflib.get_close_matches(name, known, 1, 0.4)
    mend = f"did you mean {near[0]}?" if near else f"there are {', '.join(known)}"
    fault = "unknown dimension" if name not in DIMENSIONS else f"a tally of {kind} has no dimension"
    raise ConfigError(f"{where}: {fault} {name!r}; {mend}")


def check_tallies(tallies: Mapping[str, Tally]) -> None:
    """Refuse tallies that can't be counted.

    Raises
    ------
    ConfigError
        A dimension that is unknown, not for what the tally measures, or named twice.
    """
    for name, tally in tallies.items():
        where = f"tallies.{name}.dimensions"
        for one in tally.dimensions:
            dimension(one, tally.value, where)
        if len(set(tally.dimensions)) != len(tally.dimensions):
            raise ConfigError(f"{where}: {', '.join(tally.dimensions)} holds a dimension twice; name it once")


def needed_columns(tallies: Mapping[str, Tally], kind: Kind) -> list[str]:
    """List the columns that the tallies of one kind read, besides the value itself."""
    named = [d for t in tallies.values() if t.value == kind for d in t.dimensions]
    return list(dict.fromkeys(DIMENSIONS[n].column for n in named))


def value_of(one: Dimension) -> pl.Expr:
    """Give the text value of a dimension as an expression over a frame of rows."""
    column = pl.col(one.column)
    if one.name == "turn_sector":
        return sector_of(column).alias(one.name)
    if one.name.startswith("is_"):
        return (
            pl.when(column.cast(pl.Boolean)).then(pl.lit("true")).otherwise(pl.lit("false")).alias(one.name)
        )
    return column.cast(pl.String).alias(one.name)


def sector_of(turn_deg: pl.Expr) -> pl.Expr:
    """Give the sector of 10 degrees, `from..to`, half-open; exactly 180 belongs to the last, 170..180."""
    last = 180 // SECTOR_DEG - 1
    start = (turn_deg / SECTOR_DEG).floor().cast(pl.Int32).clip(upper_bound=last) * SECTOR_DEG
    return start.cast(pl.String) + ".." + (start + SECTOR_DEG).cast(pl.String)


def _label_hours(hour: pl.Expr, bands: Mapping[str, int]) -> pl.Expr:
    starts = list(bands.items())
    by_hour = {h: next(name for name, first in reversed(starts) if first <= h) for h in range(24)}
    return hour.replace_strict(by_hour, return_dtype=pl.String)


def _label_days(weekday: pl.Expr, day_types: Mapping[str, Iterable[int]]) -> pl.Expr:
    by_day = {day: name for name, days in day_types.items() for day in days}
    return weekday.replace_strict(by_day, return_dtype=pl.String)


def _local(at_us: str, zone: str) -> pl.Expr:
    moment = pl.from_epoch(pl.col(at_us), time_unit="us").dt.replace_time_zone("UTC")
    try:
        return moment.dt.convert_time_zone(zone)
    except pl.exceptions.ComputeError as err:
        raise ConfigError(
            f"time zone {zone!r} is not in the IANA database; mend the zone's time_zone or network.time_zone"
        ) from err


def with_local_time(rows: pl.DataFrame, time: Time, at_us: str) -> pl.DataFrame:
    """Add `hour`, `weekday`, `month` (integers), `day_type` and `time_band` in each row's local time.

    Each is worked out once for each half minute and zone that occurs; rows keep their order.

    Parameters
    ----------
    rows
        Holds `at_us` and `time_zone` (IANA name).
    time
        Bands and day types.
    at_us
        Column of UTC epoch microseconds.

    Raises
    ------
    ConfigError
        A time zone that is not in the IANA database.
    """
    slotted = rows.with_columns((pl.col(at_us) // SLOT_US * SLOT_US).alias(_SLOT))
    slots = slotted.select(_SLOT, "time_zone").unique()
    local = _local_parts(slots, time)
    return slotted.join(local, on=[_SLOT, "time_zone"], how="left", maintain_order="left").drop(_SLOT)


def _local_parts(slots: pl.DataFrame, time: Time) -> pl.DataFrame:
    out = slots.with_columns(pl.lit(None, dtype=pl.Int8).alias(part) for part in ("hour", "weekday", "month"))
    for zone in slots["time_zone"].unique().sort():
        local = _local(_SLOT, zone)
        here = pl.col("time_zone") == zone
        values = {"hour": local.dt.hour(), "weekday": local.dt.weekday(), "month": local.dt.month()}
        out = out.with_columns(
            pl.when(here).then(value.cast(pl.Int8)).otherwise(pl.col(part)).alias(part)
            for part, value in values.items()
        )
    return out.with_columns(
        _label_days(pl.col("weekday"), time.day_types).alias("day_type"),
        _label_hours(pl.col("hour"), time.bands).alias("time_band"),
    )
