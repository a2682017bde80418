"""Cleaning: each reason to drop, held jumps over whole runs, and counts that add up; against plain lists."""

from typing import Any

import pytest
from hypothesis import given
from hypothesis import settings as hypothesis_settings
from hypothesis import strategies as st

from stream.config import load_settings
from stream.detect.carry import held_rows, new_states
from stream.detect.records import DROP_REASONS, END_REASONS, Found
from stream.detect.run import Detector
from tests.grid import LAT, LON, START_US, Row, columns, joined, lon_lat, row, trips_of
from tests.oracle.ground import Point, nearest, roads_of
from tests.oracle.runs import Cleaner, split_trips
from tests.oracle.streets import grid_streets

STREETS = grid_streets()
ROADS = roads_of(STREETS)
SETTINGS = load_settings()
HOME = (75.0, 150.0)  # mid-block: between gates, not inside
# A kilometre apart and more, within the area; the first on a street.
BASES = (HOME, (1100.0, 150.0), (75.0, -800.0))


def is_in_area(point: Point) -> bool:
    """Tell whether a place is in the area: surely within 1 km of a road, surely not beyond 3.3 km."""
    off = min(nearest(point, line)[1] for line in ROADS)
    assert off < 1000.0 or off > 3300.0, "a place that no rule decides"
    return off < 1000.0


@pytest.fixture(scope="module")
def detector() -> Detector:
    """Give a detector on one thread."""
    return Detector(STREETS, SETTINGS, threads=1)


def dropped(found: Found) -> dict[str, int]:
    """Give the drops that happened, by reason."""
    return {name: n for name, n in zip(DROP_REASONS, found.dropped.tolist(), strict=True) if n}


def run(detector: Detector, rows: list[Row]) -> tuple[dict[str, int], int, int]:
    """Give drops, used and held pings of one vehicle, before closing."""
    states = new_states(1)
    found = detector.feed(states, *columns(rows))
    return dropped(found), found.n_used, held_rows(states)


@pytest.mark.parametrize(
    ("lon", "lat", "reason"),
    [
        (float("nan"), 52.0, "bad_coordinate"),
        (5.0, float("inf"), "bad_coordinate"),
        (180.0000001, 52.0, "bad_coordinate"),
        (5.0, -90.0000001, "bad_coordinate"),
        (0.0, 0.0, "null_island"),
        (-9e-7, 9e-7, "null_island"),
        (2e-6, 0.0, "outside_area"),
        (5.0, 52.1, "outside_area"),
        (5.1, 52.0, "outside_area"),
        (-5.0, -52.0, "outside_area"),
        (180.0, 90.0, "outside_area"),
        (-180.0, -90.0, "outside_area"),
    ],
)
def test_coordinates_no_street_explains_are_dropped(
    detector: Detector, lon: float, lat: float, reason: str
) -> None:
    """A ping is dropped for its coordinates alone, wherever the vehicle is."""
    rows = [row(0, *HOME), (START_US + 1_000_000, lon, lat), row(2, *HOME)]
    assert run(detector, rows) == ({reason: 1}, 2, 0)


def test_duplicate_and_same_time_elsewhere_are_told_apart(detector: Detector) -> None:
    """The same row again is a duplicate; the same time at another place is its own reason."""
    rows = [row(0, *HOME), row(0, *HOME), row(0, 80, 150), row(1, 80, 150)]
    assert run(detector, rows) == ({"duplicate": 1, "same_time_elsewhere": 1}, 2, 0)


def test_places_that_round_to_the_same_unit_are_duplicates(detector: Detector) -> None:
    """Equality is that of 1e-7 degree, as OpenStreetMap keeps coordinates."""
    t_us, lon, lat = row(0, *HOME)
    lon = round(lon, 7)
    rows = [(t_us, lon, lat), (t_us, lon + 3e-8, lat)]
    assert run(detector, rows) == ({"duplicate": 1}, 1, 0)


def test_older_ping_is_late(detector: Detector) -> None:
    """A ping older than the vehicle's newest is late, however little, and the newest stays the newest."""
    rows = [row(5, *HOME), row(4.999999, *HOME), row(0, *HOME), row(6, *HOME)]
    assert run(detector, rows) == ({"late": 2}, 2, 0)


def test_there_and_back_drops_the_outlier_alone(detector: Detector) -> None:
    """A jump there and back costs one ping, not the rest of the trip."""
    rows = [row(0, *HOME), row(1, *BASES[1]), row(2, *HOME), row(3, *HOME)]
    states = new_states(1)
    found = joined([detector.feed(states, *columns(rows)), detector.close(states)])
    assert dropped(found) == {"impossible_speed": 1}
    assert found.n_used == 3
    assert found.trips["n_pings"].tolist() == [3]


def test_two_that_agree_elsewhere_begin_a_new_trip(detector: Detector) -> None:
    """Two pings that agree with each other and not with the past are where the vehicle is now."""
    rows = [row(0, *HOME), row(1, *HOME), row(2, *BASES[1]), row(3, *BASES[1]), row(4, *BASES[1])]
    states = new_states(1)
    found = joined([detector.feed(states, *columns(rows)), detector.close(states)])
    assert dropped(found) == {}
    assert [END_REASONS[k] for k in found.trips["end_reason"]] == ["jump", "close"]
    assert found.trips["n_pings"].tolist() == [2, 3]
    assert found.trips["end_us"].tolist() == [rows[1][0], rows[4][0]]
    assert found.trips["trip_start_us"].tolist() == [rows[0][0], rows[2][0]]


def test_held_ping_at_close_is_an_outlier(detector: Detector) -> None:
    """A ping that waits when all is closed is dropped and counted; none is held afterwards."""
    states = new_states(1)
    found = detector.feed(states, *columns([row(0, *HOME), row(1, *BASES[1])]))
    assert (found.n_used, held_rows(states)) == (1, 1)
    closed = detector.close(states)
    assert dropped(closed) == {"impossible_speed": 1}
    assert (closed.n_used, held_rows(states)) == (0, 0)


def test_scattered_pings_hold_one_at_a_time(detector: Detector) -> None:
    """Each of a row of pings that agree with nothing replaces the held one."""
    rows = [row(k, *BASES[k % 3]) for k in range(3)] + [row(3, 1100.0, 900.0)]
    assert run(detector, rows) == ({"impossible_speed": 2}, 1, 1)


def test_speed_limit_and_slack_come_from_the_settings(make_settings: Any) -> None:
    """A step is possible up to jump_slack_m plus max_speed_kmh times its time."""
    over = {"clean.max_speed_kmh": 108, "clean.jump_slack_m": 10}  # 30 m/s
    detector = Detector(STREETS, make_settings(over), threads=1)
    just, beyond = [row(0, 0, 150), row(5, 159.9, 150)], [row(0, 0, 150), row(5, 160.1, 150)]
    assert run(detector, just) == ({}, 2, 0)
    assert run(detector, beyond) == ({}, 1, 1)


def test_area_ends_within_three_tiles_of_the_roads(detector: Detector) -> None:
    """One kilometre off the streets is in the area; over 3.3 km is outside (a tile is about 1 km)."""
    for east, north in [(-990.0, 225.0), (1440.0, 225.0), (225.0, -990.0), (225.0, 1440.0)]:
        assert run(detector, [row(0, east, north)]) == ({}, 1, 0)
    for east, north in [(-3400.0, 225.0), (3800.0, 225.0), (225.0, -3400.0), (225.0, 3800.0)]:
        assert run(detector, [row(0, east, north)]) == ({"outside_area": 1}, 0, 0)


BAD = [(float("nan"), LAT), (LON, 91.0), (0.0, 0.0), (LON + 1.0, LAT), (LON, LAT - 1.0)]
ACTION = st.one_of(
    st.tuples(st.just("go"), st.sampled_from([1, 2, 5, 20, 130]), st.integers(0, 2), st.integers(-5, 5)),
    st.tuples(st.just("go"), st.sampled_from([1, 2]), st.just(0), st.integers(-5, 5)),
    st.tuples(st.just("again"), st.just(0), st.just(0), st.just(0)),
    st.tuples(st.just("elsewhere"), st.just(0), st.integers(0, 2), st.integers(-5, 5)),
    st.tuples(st.just("back"), st.integers(1, 9), st.integers(0, 2), st.integers(-5, 5)),
    st.tuples(st.just("bad"), st.just(1), st.integers(0, len(BAD) - 1), st.just(0)),
)


def script(actions: list[tuple[str, int, int, int]]) -> list[Row]:
    """Turn a list of actions into pings."""
    rows: list[Row] = []
    now = START_US
    for what, seconds, base, aside in actions:
        east, north = BASES[base] if what != "bad" else HOME
        place = lon_lat(east + aside, north)
        if what == "again" and rows:
            rows.append(rows[-1])
        elif what == "elsewhere":
            rows.append((now, *place))
        elif what == "back":
            rows.append((now - seconds * 1_000_000, *place))
        elif what == "bad":
            rows.append((now, *BAD[base]))
        else:
            now += seconds * 1_000_000
            rows.append((now, *place))
    return rows


@hypothesis_settings(deadline=None, max_examples=150)
@given(st.lists(ACTION, max_size=80))
def test_whole_run_is_cleaned_as_by_plain_rules(
    detector: Detector, actions: list[tuple[str, int, int, int]]
) -> None:
    """Drops by reason, used and held pings, and the trips they make are those of plain lists."""
    rows = script(actions)
    plain = Cleaner(SETTINGS, is_in_area)
    states = new_states(1)
    parts = []
    for ping in rows:
        plain.offer(*ping)
        parts.append(detector.feed(states, *columns([ping])))
        so_far = joined(parts)
        assert dropped(so_far) == dict(plain.dropped)
        assert (so_far.n_used, held_rows(states)) == (plain.n_used, int(plain.held is not None))
    plain.drop_held()
    found = joined([*parts, detector.close(states)])
    assert dropped(found) == dict(plain.dropped)
    assert found.n_used + sum(plain.dropped.values()) == len(rows)
    assert split_trips(plain.runs, SETTINGS, lambda _: False) == trips_of(found)


def test_every_reason_the_pass_decides_has_a_row_here() -> None:
    """The reasons of this file and those of the reader are all there are."""
    by_reader = {"bad_time", "bad_vehicle"}
    here = {"bad_coordinate", "null_island", "outside_area", "duplicate", "same_time_elsewhere", "late"}
    assert set(DROP_REASONS) == here | {"impossible_speed"} | by_reader
