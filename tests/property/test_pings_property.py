"""Reading against its plain twin: any format, any chunk size, any order of rows, any cutting."""

import datetime
import tempfile
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
from hypothesis import given, settings
from hypothesis import strategies as st

from stream.config import Settings, load_settings
from stream.pings import HoldBack
from stream.pings.times import TimeReader
from tests.archives import ENDINGS, EPOCH, T0_US, Row, write_parquet, write_pings
from tests.oracle import pings as oracle
from tests.reading import Reading, read_all

VEHICLES = st.sampled_from(["a", "7", "b b", "Ä", "007", "x-1"])
TIMES = st.integers(T0_US, T0_US + 30_000_000) | st.integers(0, 9 * 10**15)
DEGREES = st.floats(-200, 200) | st.sampled_from([0.0, -0.0, 24.9384, 60.1699])
ROW = st.tuples(VEHICLES, TIMES, DEGREES, DEGREES)
MAYBE = st.tuples(st.none() | VEHICLES, st.none() | TIMES, st.none() | DEGREES, st.none() | DEGREES)
# A first row that can be read, for a file of nothing else is refused.
ROWS = st.builds(lambda one, rest: [one, *rest], ROW, st.lists(ROW | MAYBE, max_size=40))


@cache
def keys(order: str = "time", chunk_rows: int = 1_000_000) -> Settings:
    """Give settings with an order and a chunk size."""
    over = {"source": {"order": order}, "run": {"chunk_rows": chunk_rows, "threads": 1}}
    return load_settings(over=over)


def assert_reading(
    wanted: list[Any], names: list[str], dropped: dict[str, int], n: int, got: Reading
) -> None:
    """Hold a reading to what the twin says."""
    assert wanted == got.pings
    assert names == got.names
    assert dropped == got.dropped
    assert n == got.n_rows_in


@settings(max_examples=40, deadline=None)
@given(ROWS, st.integers(1, 45))
def test_every_format_and_chunk_size_gives_the_same(rows: list[Row], chunk_rows: int) -> None:
    """The same rows in each format and in chunks of any size are the pings, codes and drops of the twin."""
    good, dropped = oracle.readable(rows)
    wanted, names = oracle.coded(good)
    with tempfile.TemporaryDirectory() as folder:
        for ending in ENDINGS:
            path = write_pings(Path(folder) / f"day.{ending}", rows)
            got = read_all([path], keys(chunk_rows=chunk_rows))
            assert_reading(wanted, names, dropped, len(rows), got)
            assert all(size == chunk_rows for size in got.sizes[:-1])


@settings(max_examples=25, deadline=None)
@given(ROWS, st.integers(1, 45), st.integers(1, 5))
def test_unsorted_equals_sorted(rows: list[Row], chunk_rows: int, group_rows: int) -> None:
    """Rows in any order, read as unsorted, are those of the file sorted by time, then by row."""
    good, dropped = oracle.readable(rows)
    wanted, names = oracle.coded(oracle.by_time(good))
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "day.parquet"
        write_parquet(path, rows, group_rows)
        got = read_all([path], keys("unsorted", chunk_rows))
    assert_reading(wanted, names, dropped, len(rows), got)


@settings(max_examples=25, deadline=None)
@given(st.lists(ROWS, min_size=1, max_size=4), st.sampled_from(["time", "unsorted"]))
def test_files_together_equal_one_file(pieces: list[list[Row]], order: str) -> None:
    """Rows spread over files that are read together are the rows of one file."""
    rows = [row for piece in pieces for row in piece]
    good, dropped = oracle.readable(rows)
    wanted, names = oracle.coded(oracle.by_time(good) if order == "unsorted" else good)
    with tempfile.TemporaryDirectory() as folder:
        named = zip(ENDINGS, pieces, strict=False)
        paths = [write_pings(Path(folder) / f"day.{e}", piece) for e, piece in named]
        got = read_all(paths, keys(order, 7))
    assert_reading(wanted, names, dropped, len(rows), got)


PINGS = st.lists(
    st.tuples(st.integers(0, 3), st.integers(0, 40), st.floats(0, 1), st.floats(0, 1)), max_size=60
)


def as_columns(pings: list[oracle.Ping]) -> tuple[Any, Any, Any, Any]:
    """Turn pings into columns."""
    vehicle, t_us, lon, lat = zip(*pings, strict=True) if pings else ((), (), (), ())
    return np.array(vehicle, np.int32), np.array(t_us, np.int64), np.array(lon, float), np.array(lat, float)


def as_pings(columns: tuple[Any, Any, Any, Any]) -> list[oracle.Ping]:
    """Turn columns into pings."""
    return list(zip(*(c.tolist() for c in columns), strict=True))


@settings(max_examples=200, deadline=None)
@given(PINGS, st.integers(1, 25), st.lists(st.integers(0, 60), max_size=5), st.booleans())
def test_hold_back_does_not_see_the_cuts(
    pings: list[oracle.Ping], lateness_us: int, cuts: list[int], is_resumed: bool
) -> None:
    """Pings put in at any cutting, or resumed from what is held, come out as one by one."""
    wanted, held = oracle.held_back(pings, lateness_us)
    hold = HoldBack(lateness_us)
    got: list[oracle.Ping] = []
    for start, stop in zip([0, *sorted(cuts)], [*sorted(cuts), len(pings)], strict=True):
        got += as_pings(hold.push(*as_columns(pings[start:stop])))
        if is_resumed:
            hold = HoldBack(lateness_us, hold.held())
    assert wanted == got
    assert held == as_pings(hold.held())
    assert sorted(held, key=lambda p: p[1]) == as_pings(hold.flush())
    assert len(hold) == 0


@settings(max_examples=200, deadline=None)
@given(PINGS, st.integers(1, 25))
def test_hold_back_puts_in_order_what_is_not_late(pings: list[oracle.Ping], lateness_us: int) -> None:
    """Where no ping comes later than the lateness, each vehicle's pings come out in order of time."""
    newest: dict[int, int] = {}
    prompt = []
    for ping in pings:
        if ping[1] >= newest.get(ping[0], 0) - lateness_us:
            newest[ping[0]] = max(newest.get(ping[0], 0), ping[1])
            prompt.append(ping)
    hold = HoldBack(lateness_us)
    out = as_pings(hold.push(*as_columns(prompt))) + as_pings(hold.flush())
    for vehicle in range(4):
        wanted = sorted((p for p in prompt if p[0] == vehicle), key=lambda p: p[1])
        assert wanted == [p for p in out if p[0] == vehicle]


CLOCKS = st.datetimes(datetime.datetime(2000, 1, 1), datetime.datetime(2035, 1, 1))
ZONES = st.sampled_from(
    ["Europe/Helsinki", "America/New_York", "Australia/Lord_Howe", "Asia/Kathmandu", "UTC"]
)
# Within an hour of a change of clocks in one of the zones (time zone database: last Sundays of March and
# October in Europe, first Sundays of April and October on Lord Howe, second of March in New York).
CHANGES = st.builds(
    lambda day, minutes: datetime.datetime.fromisoformat(day) + datetime.timedelta(minutes=minutes),
    st.sampled_from(["2024-03-31T03:30", "2024-10-27T03:30", "2024-03-10T02:30", "2024-04-07T01:45"]),
    st.integers(-90, 90),
)


@settings(max_examples=200, deadline=None)
@given(st.lists(CLOCKS | CHANGES, min_size=1, max_size=20), ZONES, st.booleans())
def test_local_times_agree_with_the_zone_database(
    clocks: list[datetime.datetime], zone: str, is_text: bool
) -> None:
    """Clock times become UTC as the standard library's time zones say; skipped and double ones are bad."""
    texts = pa.array([c.isoformat(sep=" ") for c in clocks])
    column = texts if is_text else pa.array(clocks, pa.timestamp("us"))
    t_us, good, missing = TimeReader("auto", zone).read(column)
    wanted = [oracle.utc_of_clock(c, zone) for c in clocks]
    is_good = [True] * len(clocks) if good is None else good.tolist()
    assert wanted == [t if ok else None for t, ok in zip(t_us.tolist(), is_good, strict=True)]
    assert missing is None or not missing.any()


@settings(max_examples=200, deadline=None)
@given(
    st.datetimes(datetime.datetime(1970, 1, 2), datetime.datetime(2262, 1, 1)),
    st.integers(-23 * 60, 23 * 60),
    st.sampled_from(["T", "t", " "]),
    st.sampled_from(["auto", "seconds", "milliseconds", "microseconds", "minutes"]),
    st.booleans(),
)
def test_iso_times_agree_with_the_standard_library(
    clock: datetime.datetime, offset: int, between: str, digits: str, is_basic: bool
) -> None:
    """A time written by the standard library in either ISO 8601 form is read as that time."""
    zone = datetime.timezone(datetime.timedelta(minutes=offset))
    text = clock.replace(tzinfo=zone).isoformat(sep=between, timespec=digits)
    wanted = datetime.datetime.fromisoformat(text.upper())
    if is_basic:
        text = text[:10].replace("-", "") + text[10:].replace(":", "")
    t_us, good, _ = TimeReader("auto", "UTC").read(pa.array([text]))
    since = (wanted - EPOCH) // datetime.timedelta(microseconds=1)
    assert [since] == t_us.tolist()
    assert (since >= 0) == (good is None)
