"""Times in every form.

Expected instants are those of the command `date -u`, or of the source that a comment names.
"""

import datetime
import decimal
from typing import Any

import pyarrow as pa
import pytest

from stream.pings.times import TimeReader, WrongTypeError

NOON = datetime.datetime(2026, 3, 1, 12, 0, 0, 250_000, tzinfo=datetime.UTC)
NOON_US = 1_772_366_400_250_000  # `date -u -d 2026-03-01T12:00:00 +%s` gives 1772366400


def read(column: pa.Array, unit: str = "auto", zone: str = "UTC") -> list[int | str]:
    """Read a column to instants, `missing` and `bad`."""
    t_us, good, missing = TimeReader(unit, zone).read(column)
    out: list[int | str] = []
    for i, t in enumerate(t_us.tolist()):
        is_missing = missing is not None and bool(missing[i])
        is_good = good is None or bool(good[i])
        assert not (is_missing and is_good)
        out.append("missing" if is_missing else t if is_good else "bad")
    return out


def texts(*values: str | None) -> pa.Array:
    """Make a column of texts."""
    return pa.array(values, pa.string())


@pytest.mark.parametrize(
    "text",
    [
        "2026-03-01T12:00:00.25Z",
        "2026-03-01t12:00:00.25z",
        "2026-03-01 12:00:00.250000+00:00",
        "2026-03-01T12:00:00,250Z",
        "2026-03-01T14:00:00.25+02:00",
        "2026-03-01T06:30:00.25-0530",
        "2026-03-01T13:00:00.25+01",
        "20260301T120000.25Z",
        "  2026-03-01T12:00:00.25Z ",
        "2026-03-01T12:00:00.250000999Z",
        "2026-03-01T12:00:00.25",
        "1772366400.25",
        "1772366400250",
        "1772366400250000",
        "1772366400250000999",
    ],
)
def test_text_is_read_as_iso_or_number(text: str) -> None:
    """ISO 8601-1:2019 and RFC 3339 forms, and bare numbers by size, are one instant; digits past µs go."""
    assert read(texts(text)) == [NOON_US]


@pytest.mark.parametrize(
    ("text", "second"),
    [
        ("2026-03-01T12:00Z", 1_772_366_400),
        ("20260301T12:00Z", 1_772_366_400),
        ("2026-02-28T24:00:00Z", 1_772_323_200),  # midnight at the end of a day, ISO 8601-1:2019 5.3.2
        ("2016-12-31T23:59:60Z", 1_483_228_800),  # the leap second of 2016 (IERS Bulletin C 52), as POSIX
        ("2024-02-29T00:00:00Z", 1_709_164_800),
        ("2000-02-29T00:00:00Z", 951_782_400),
        ("1970-01-01T00:00:00Z", 0),
    ],
)
def test_text_at_the_edges_of_the_calendar(text: str, second: int) -> None:
    """Leap days, leap seconds, midnight at the end of a day; seconds by `date -u -d ... +%s`."""
    assert [second * 1_000_000] == read(texts(text))


@pytest.mark.parametrize(
    "text",
    [
        "yesterday", "2026-03-01", "2026-13-01T00:00Z", "2026-02-29T00:00Z", "2100-02-29T00:00Z",
        "2026-04-31T00:00Z", "2026-03-00T00:00Z", "2026-03-01T24:00:01Z", "2026-03-01T25:00Z",
        "2026-03-01T12:60Z", "2026-03-01T12:00:61Z",
        "2026-03-01T12:00:00.Z", "2026-03-01T12:00:00Z+", "2026-03-01T12:00:00+1",
        "2026-03-01T12:00:00+24:00", "2026-03-01T12:00:00+01:",
        "2026-03-01T12:00:00 UTC", "2026-03-01T12", "2026-0301T12:00Z",
        "03/01/2026 12:00",
        "2026-03-01T12:0", "1772366400.", "1772366400.2x", "-5", "1e9", "nan", "99999999999999999999",
        "9223372036854775808", "1969-12-31T23:59:59Z",
        "2262-04-12T00:00:00Z", "２０２６-03-01T12:00Z",
    ],
)  # fmt: skip
def test_text_that_is_no_time_is_bad(text: str) -> None:
    """What is not wholly understood, or lies outside 1970 to 2262, is bad and never guessed."""
    assert read(texts(text, "1772366400250")) == ["bad", NOON_US]


def test_text_empty_or_null_is_missing() -> None:
    """Nothing there is told apart from what can't be read."""
    assert read(texts("", None, "  ")) == ["missing", "missing", "missing"]
    assert read(texts()) == []


@pytest.mark.parametrize(
    ("unit", "text", "wanted"),
    [
        ("s", "1.5", 1_500_000),
        ("ms", "1.5", 1500),
        ("us", "15", 15),
        ("ns", "15999", 15),
        ("s", "9223372037", "bad"),
        ("s", "2026-03-01T12:00:00.25Z", "bad"),
        ("iso", "1772366400", "bad"),
        ("iso", "2026-03-01T12:00:00.25Z", NOON_US),
    ],
)
def test_text_under_a_named_unit(unit: str, text: str, wanted: int | str) -> None:
    """A named unit takes that form alone."""
    assert [wanted] == read(texts(text), unit)


@pytest.mark.parametrize("unit", ["s", "ms", "us", "ns"])
@pytest.mark.parametrize("zone", ["UTC", "Europe/Helsinki", None])
def test_timestamps_are_read_as_typed(unit: str, zone: str | None) -> None:
    """A timestamp with a zone is its instant; one without is on the clock of source.time_zone."""
    clock = NOON.replace(microsecond=0)
    whole = pa.array([clock if zone else clock.replace(tzinfo=None), None], pa.timestamp(unit, zone))
    shift = 0 if zone else 2 * 3_600_000_000  # Helsinki is at +02:00 on 1 March
    assert [NOON_US - 250_000 - shift, "missing"] == read(whole, "ms", "Europe/Helsinki")


def test_timestamp_beyond_the_range_is_bad() -> None:
    """A date far off or before 1970 is bad, and does not wrap around."""
    far = pa.array([10**18, -1, 5], pa.int64()).cast(pa.timestamp("s"))
    assert read(far) == ["bad", "bad", 5_000_000]


@pytest.mark.parametrize(
    ("values", "kind", "wanted"),
    [
        ([1_772_366_400, None], pa.int64(), [1_772_366_400_000_000, "missing"]),
        ([1_772_366_400], pa.uint32(), [1_772_366_400_000_000]),
        ([1_772_366_400_250], pa.int64(), [NOON_US]),
        ([1_772_366_400_250_000], pa.int64(), [NOON_US]),
        ([1_772_366_400_250_000_999], pa.int64(), [NOON_US]),
        ([1_772_366_400, 1_772_366_400_250, -1], pa.int64(), [1_772_366_400_000_000, NOON_US, "bad"]),
        ([2**64 - 1, 1], pa.uint64(), ["bad", 1_000_000]),
        ([1_772_366_400.25, float("nan"), None], pa.float64(), [NOON_US, "bad", "missing"]),
        ([1_772_366_400_250.0, -1.0, 1e300], pa.float64(), [NOON_US, "bad", "bad"]),
        ([decimal.Decimal("1772366400.250000")], pa.decimal128(20, 6), [NOON_US]),
        ([None, None], pa.int64(), ["missing", "missing"]),
    ],
)
def test_numbers_are_read_by_size(values: list[Any], kind: pa.DataType, wanted: list[int | str]) -> None:
    """Below 1e11 seconds, below 1e14 ms, below 1e17 µs, else ns: each value for itself."""
    assert wanted == read(pa.array(values, kind))


@pytest.mark.parametrize(("unit", "wanted"), [("s", "bad"), ("ms", 10**14), ("us", 10**11), ("ns", 10**8)])
@pytest.mark.parametrize("kind", [pa.int64(), pa.float64()])
def test_numbers_under_a_named_unit(unit: str, wanted: int | str, kind: pa.DataType) -> None:
    """A named unit holds, whatever the size; what leaves the range is bad (1e11 s is the year 5138)."""
    assert read(pa.array([10**11], kind), unit) == [wanted]


@pytest.mark.parametrize(("unit", "wanted"), [("s", "bad"), ("us", "bad"), ("ns", (2**63 - 1) // 1000)])
def test_largest_number_does_not_wrap(unit: str, wanted: int | str) -> None:
    """The largest 64-bit number is bad where its unit would pass the range."""
    assert read(pa.array([2**63 - 1]), unit) == [wanted]


@pytest.mark.parametrize("kind", [pa.date32(), pa.bool_(), pa.time64("us"), pa.list_(pa.int64())])
def test_other_types_are_refused(kind: pa.DataType) -> None:
    """A column of another type is refused with its type and what would do."""
    with pytest.raises(WrongTypeError, match=r"holds .*; wanted are timestamps"):
        read(pa.array([None], kind))


def test_numbers_are_refused_where_iso_is_named() -> None:
    """Numbers under `iso` are refused with the key to set."""
    with pytest.raises(WrongTypeError, match=r"source\.time_unit is iso"):
        read(pa.array([5]), "iso")


def test_clock_change_hides_no_guess() -> None:
    """In Berlin 2024-03-31 02:30 did not exist and 2024-10-27 02:30 came twice (time zone database)."""
    got = read(
        texts("2024-03-31 02:30", "2024-10-27 02:30", "2024-10-27 02:30+02:00", "2024-10-27 02:30+01:00"),
        zone="Europe/Berlin",
    )
    first = 1_729_989_000_000_000  # `date -u -d 2024-10-27T00:30 +%s`
    assert ["bad", "bad", first, first + 3_600_000_000] == got
