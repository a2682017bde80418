"""Dimensions: values, local time, and what an unknown one gets."""

import random
from collections.abc import Callable
from datetime import UTC, datetime, timedelta
from zoneinfo import ZoneInfo, available_timezones

import polars as pl
import pytest

from stream.config import Settings
from stream.errors import ConfigError
from stream.tally import DIMENSIONS, check_tallies, dimension, with_local_time
from stream.tally.strata import SLOT_US, needed_columns, sector_of, value_of
from tests.oracle import tally as oracle


def us(text: str) -> int:
    """Give the UTC epoch microseconds of an ISO time."""
    return int(datetime.fromisoformat(text).replace(tzinfo=UTC).timestamp()) * 1_000_000


def rows_at(times: list[str], zone: str) -> pl.DataFrame:
    """Build rows at UTC times in one time zone."""
    return pl.DataFrame({"entry_us": [us(t) for t in times], "time_zone": [zone] * len(times)})


# METHODS.md section 13, computed there from the IANA database.
CLOCK_CHANGES = [
    ("2026-03-29T00:59:59", "Europe/Helsinki", 2),
    ("2026-03-29T01:00:00", "Europe/Helsinki", 4),
    ("2026-10-25T00:30:00", "Europe/Helsinki", 3),
    ("2026-10-25T01:30:00", "Europe/Helsinki", 3),
    ("2026-03-08T06:59:59", "America/New_York", 1),
    ("2026-03-08T07:00:00", "America/New_York", 3),
]


@pytest.mark.parametrize(("at", "zone", "hour"), CLOCK_CHANGES)
def test_hour_at_a_clock_change(at: str, zone: str, hour: int, settings: Settings) -> None:
    """The hour is the local one on both sides of a clock change."""
    got = with_local_time(rows_at([at], zone), settings.time, "entry_us")
    assert got["hour"].to_list() == [hour]


def test_each_row_has_its_own_zone(settings: Settings) -> None:
    """One moment is Monday morning in one zone and Sunday in another."""
    rows = pl.DataFrame(
        {
            "entry_us": [us("2026-06-01T04:30:00")] * 3,
            "time_zone": ["Europe/Helsinki", "America/Los_Angeles", "Asia/Kolkata"],
        }
    )
    got = with_local_time(rows, settings.time, "entry_us")
    assert got["hour"].to_list() == [7, 21, 10]
    assert got["weekday"].to_list() == [1, 7, 1]
    assert got["day_type"].to_list() == ["weekday", "sunday", "weekday"]
    assert got["time_band"].to_list() == ["am_peak", "evening", "midday"]
    assert got["month"].to_list() == [6, 5, 6]


def test_local_parts_match_the_standard_library(settings: Settings) -> None:
    """Hour, weekday and month agree with zoneinfo every 7 h 13 min through a year, in four zones."""
    zones = ["Europe/Helsinki", "America/New_York", "Australia/Lord_Howe", "Asia/Kathmandu"]
    start = us("2026-01-01T00:00:00")
    times = [start + i * 25_980_000_000 for i in range(1_200)]
    rows = pl.DataFrame({"at": times * 4, "time_zone": [z for z in zones for _ in times]})
    got = with_local_time(rows, settings.time, "at")
    wanted = [oracle.local(t, z) for t, z in rows.iter_rows()]
    assert [(w.hour, w.isoweekday(), w.month) for w in wanted] == list(
        got.select("hour", "weekday", "month").iter_rows()
    )


def test_bands_start_at_their_hour(settings: Settings) -> None:
    """The defaults change at 6, 9, 15 and 19 h (config/default.yaml)."""
    rows = rows_at([f"2026-01-07T{h:02d}:00:00" for h in range(24)], "UTC")
    got = with_local_time(rows, settings.time, "entry_us")["time_band"].to_list()
    wanted = ["night"] * 6 + ["am_peak"] * 3 + ["midday"] * 6 + ["pm_peak"] * 4 + ["evening"] * 5
    assert got == wanted


def test_own_bands_and_day_types(make_settings: Callable[..., Settings]) -> None:
    """A workspace names its own bands and day types."""
    own = make_settings(
        {"time.bands": {"early": 0, "late": 12}, "time.day_types": {"work": [1, 2, 3, 4], "rest": [5, 6, 7]}}
    )
    got = with_local_time(rows_at(["2026-01-02T13:00:00"], "UTC"), own.time, "entry_us")
    assert got.select("time_band", "day_type").row(0) == ("late", "rest")


def test_unknown_time_zone_is_refused(settings: Settings) -> None:
    """A zone that is not in the IANA database is named, with the keys that set it."""
    with pytest.raises(ConfigError, match=r"'Mars/Base'.*network\.time_zone"):
        with_local_time(rows_at(["2026-01-02T13:00:00"], "Mars/Base"), settings.time, "entry_us")


def test_no_rows_stay_no_rows(settings: Settings) -> None:
    """An empty frame gets the columns too."""
    empty = pl.DataFrame(schema={"entry_us": pl.Int64, "time_zone": pl.String})
    got = with_local_time(empty, settings.time, "entry_us")
    assert got.height == 0
    assert set(got.columns) >= {"hour", "weekday", "month", "day_type", "time_band"}


@pytest.mark.parametrize(
    ("turn_deg", "label"),
    [
        (0.0, "0..10"),
        (-0.0, "0..10"),
        (9.999, "0..10"),
        (10.0, "10..20"),
        (-90.0, "-90..-80"),
        (-0.001, "-10..0"),
        (180.0, "170..180"),
        (179.9, "170..180"),
        (-179.9, "-180..-170"),
    ],
)
def test_sector_of_turn_angle(turn_deg: float, label: str) -> None:
    """Sectors of 10 degrees are half-open; only 180 itself stands in the last with its upper edge."""
    got = pl.DataFrame({"turn_deg": [turn_deg]}).select(sector_of(pl.col("turn_deg")))
    assert got.item() == label == oracle.sector(turn_deg)


def test_values_are_text() -> None:
    """Truth values and numbers become text that can be typed after --where."""
    row = pl.DataFrame({"is_banned": [1, 0], "junction_id": [12, -3], "hour": [7, 0]})
    got = row.select(value_of(DIMENSIONS[n]) for n in ("is_banned", "junction_id", "hour"))
    assert got.rows() == [("true", "12", "7"), ("false", "-3", "0")]


def test_unknown_dimension_names_the_nearest() -> None:
    """A slip of the pen gets the nearest known dimension."""
    with pytest.raises(ConfigError, match=r"tallies\.mine.*'manoeuvre'.*did you mean maneuver\?"):
        dimension("manoeuvre", "delay", "tallies.mine")


def test_strange_dimension_lists_all() -> None:
    """A name like no other gets the whole list."""
    with pytest.raises(ConfigError, match="there are zone, maneuver"):
        dimension("q", "delay", "--by")


def test_dimension_of_the_other_kind_is_refused(make_settings: Callable[..., Settings]) -> None:
    """A section has no maneuver."""
    own = make_settings({"tallies": {"mine": {"value": "pace", "dimensions": ["maneuver"]}}})
    with pytest.raises(ConfigError, match=r"tallies\.mine\.dimensions: a tally of pace has no dimension"):
        check_tallies(own.tallies)


def test_dimension_named_twice_is_refused(make_settings: Callable[..., Settings]) -> None:
    """A dimension counts once."""
    own = make_settings({"tallies": {"mine": {"value": "delay", "dimensions": ["zone", "zone"]}}})
    with pytest.raises(ConfigError, match="twice"):
        check_tallies(own.tallies)


def test_needed_columns_of_default_tallies(settings: Settings) -> None:
    """Default tallies read stored columns alone, the turn angle for its sector."""
    assert "turn_deg" in needed_columns(settings.tallies, "delay")
    assert needed_columns(settings.tallies, "pace") == ["zone", "class"]


def test_half_minute_has_one_offset_in_every_zone() -> None:
    """Clocks stand off UTC by whole half minutes since 1970 (source: IANA database, standard library)."""
    dice = random.Random(31)
    for name in sorted(available_timezones()):
        zone = ZoneInfo(name)
        for _ in range(40):
            start = datetime.fromtimestamp(dice.randrange(0, 2**31, SLOT_US // 1_000_000), UTC)
            ends = [start, start + timedelta(microseconds=SLOT_US - 1)]
            one, other = (at.astimezone(zone).utcoffset() for at in ends)
            assert one == other, (name, start)
            assert one is not None
            assert one % timedelta(microseconds=SLOT_US) == timedelta(0), (name, start)
