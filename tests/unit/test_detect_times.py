"""Times within a step: the monotone cubic against scipy's, long steps in order, places along a step."""

import itertools
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import settings as hypothesis_settings
from hypothesis import strategies as st
from scipy.interpolate import CubicHermiteSpline

from stream.config import load_settings
from stream.detect.records import new_record
from stream.detect.step import STEP, Step, project_on_step
from stream.detect.times import cubic_share, drive_s, gate_error_s, long_share, standing
from stream.network.routes import build_index
from tests.grid import lon_lat
from tests.oracle.ground import e7
from tests.oracle.streets import grid_streets

SETTINGS = load_settings()
STREETS = grid_streets(4, 150.0)
INDEX = build_index(STREETS, 40.0, 1.0, 5.0, 3.0)
# The share is found by halving 30 times: 2^-31, which is 3 ns of the longest step that is timed so.
NEAR = 1e-9
SPEED = st.floats(0.0, 40.0)
SLOPE = st.floats(0.05, 40.0)
SHARE = st.floats(0.0, 1.0)


def limited(slope: float, v0: float, v1: float) -> tuple[float, float]:
    """Give the end slopes of a monotone cubic over the unit step: within the circle of radius 3.

    Source: Fritsch & Carlson 1980, region S2 of monotonicity (from memory).
    """
    a, b = min(v0 / slope, 3.0), min(v1 / slope, 3.0)
    far = math.hypot(a, b)
    return (a, b) if far <= 3.0 else (3.0 * a / far, 3.0 * b / far)


@hypothesis_settings(deadline=None, max_examples=300)
@given(share=SHARE, slope=SLOPE, v0=SPEED, v1=SPEED)
def test_cubic_share_inverts_the_hermite_cubic_of_scipy(
    share: float, slope: float, v0: float, v1: float
) -> None:
    """Where the cubic with these end speeds reaches a share of the way, by scipy's spline."""
    spline = CubicHermiteSpline([0.0, 1.0], [0.0, 1.0], limited(slope, v0, v1))
    u = cubic_share(share, slope, v0, v1)
    below, above = spline([max(u - NEAR, 0.0), min(u + NEAR, 1.0)])
    assert below - 1e-12 <= share <= above + 1e-12


@hypothesis_settings(deadline=None)
@given(slope=SLOPE, v0=SPEED, v1=SPEED, shares=st.lists(SHARE, min_size=2, max_size=9))
def test_cubic_share_grows_with_the_share(slope: float, v0: float, v1: float, shares: list[float]) -> None:
    """Farther on is never earlier; nothing is at the start, all at the end."""
    times = [cubic_share(share, slope, v0, v1) for share in sorted(shares)]
    assert times == sorted(times)
    assert cubic_share(0.0, slope, v0, v1) < NEAR
    # A cubic that ends flat, 1 - (1 - u)^3, is 1 to the last bit of a float from the cube root of 2^-53 on.
    assert cubic_share(1.0, slope, v0, v1) > 1.0 - 5e-6


@pytest.mark.parametrize("v", [0.3, 10.0, 30.0])
@pytest.mark.parametrize("share", [0.0, 0.1, 0.5, 0.93, 1.0])
def test_cubic_share_of_steady_motion_is_the_share(v: float, share: float) -> None:
    """With the step's own speed at both ends, time goes with the way."""
    assert abs(cubic_share(share, v, v, v) - share) < NEAR


@pytest.mark.parametrize(("v0", "v1"), [(0.0, 20.0), (20.0, 0.0)])
@pytest.mark.parametrize("share", [0.04, 0.25, 0.5, 0.81])
def test_cubic_share_of_even_acceleration_is_exact(v0: float, v1: float, share: float) -> None:
    """Even acceleration from a stand has half the way done at 0.707 of the time; braking mirrors it."""
    # s = a t^2 / 2: mean speed 10, end speed 20 m/s.
    exact = math.sqrt(share) if v0 == 0.0 else 1.0 - math.sqrt(1.0 - share)
    assert abs(cubic_share(share, 10.0, v0, v1) - exact) < 1e-7


def laid(edges: list[tuple[int, float, float]]) -> tuple[Step, int]:
    """Lay pieces of edges as a step."""
    step = new_record(STEP)
    start = 0.0
    for k, (edge, low, high) in enumerate(edges):
        step.edge[k], step.from_m[k], step.to_m[k], step.start_m[k] = edge, low, high, start
        start += high - low
    return step, len(edges)


# Edges 0, 2, 4 run east along the south side, nodes 0 to 3.
EAST = laid([(0, 30.0, 150.0), (2, 0.0, 150.0), (4, 0.0, 50.0)])
LONG_M = 320.0


@hypothesis_settings(deadline=None, max_examples=200)
@given(
    places=st.lists(st.floats(0.0, LONG_M), min_size=4, max_size=12),
    dt_s=st.floats(0.5, 600.0),
    stood=st.floats(0.0, 6.0),
    stands=st.floats(0.0, 6.0),
)
def test_long_share_grows_with_the_gate(
    places: list[float], dt_s: float, stood: float, stands: float
) -> None:
    """A gate farther on is never earlier, and every gate lies within the step's time."""
    low, *gates, high = sorted(places)
    if high - low < 0.5:
        return
    step, n = EAST
    shares = [
        long_share(INDEX, step, n, low, high, gate, dt_s, stood, stands, 0.95) for gate in [low, *gates, high]
    ]
    assert all(0.0 <= share <= 1.0 + NEAR for share in shares)
    assert all(a <= b + NEAR for a, b in itertools.pairwise(shares))


@pytest.mark.parametrize(
    ("stood", "stands", "gate_m", "before", "every"),
    [
        (0.0, 0.0, 100.0, 0.0, 2.0),  # before both mouths, at 120 and 270 m of the step
        (0.0, 0.0, 200.0, 1.0, 2.0),
        (0.0, 0.0, 300.0, 2.0, 2.0),
        (6.0, 0.0, 100.0, 6.0, 8.0),
        (0.0, 6.0, 300.0, 2.0, 8.0),
        (1.5, 1.5, 200.0, 2.5, 5.0),
    ],
)
def test_slack_lies_where_vehicles_stand(
    stood: float, stands: float, gate_m: float, before: float, every: float
) -> None:
    """What a long step has more than driving takes is shared among its ends, the mouths, and the way."""
    step, n = EAST
    drive, whole = (metres / (float(np.float32(13.9)) * 0.8) for metres in (gate_m, LONG_M))
    on_the_way = 0.5
    share_before = (before + on_the_way * drive / whole) / (every + on_the_way)
    share = long_share(INDEX, step, n, 0.0, LONG_M, gate_m, 60.0, stood, stands, 0.8)
    assert abs(share * 60.0 - (drive + (60.0 - whole) * share_before)) < 1e-6


def test_standing_is_told_by_the_stay_before_the_speed() -> None:
    """A stay says more than a slow way; a fast or an unknown one says nothing."""
    assert standing(1_000_000, 9.0) > standing(0, 1.0) > 0.0
    assert standing(0, 9.0) == standing(0, -1.0) == 0.0


def test_drive_time_is_way_over_speed() -> None:
    """The drive time of a stretch is its metres over a share of the cruise speed, piece by piece."""
    step, n = EAST
    assert abs(drive_s(INDEX, step, n, 10.0, 300.0, 0.8) - 290.0 / (np.float32(13.9) * 0.8)) < 1e-6
    assert drive_s(INDEX, step, n, 50.0, 50.0, 0.8) == 0.0
    # Beyond the step there is nothing to drive.
    assert abs(drive_s(INDEX, step, n, 0.0, 900.0, 1.0) - LONG_M / np.float32(13.9)) < 1e-6


@hypothesis_settings(deadline=None)
@given(dt=st.floats(0.0, 3600.0), speed=SPEED, drive=st.floats(0.0, 3600.0), more=st.floats(0.0, 600.0))
def test_gate_error_is_positive_and_grows_with_the_slack(
    dt: float, speed: float, drive: float, more: float
) -> None:
    """The estimate is above zero, finite, and never falls when the same drive takes longer."""
    error = gate_error_s(dt, speed, drive)
    assert 0.0 < error < 1e5
    assert gate_error_s(dt + more, speed, drive) >= error - 1e-12
    assert gate_error_s(dt, speed + 1.0, drive) <= error


@hypothesis_settings(deadline=None, max_examples=200)
@given(east=st.floats(-20.0, 380.0), aside=st.floats(-30.0, 30.0), floor=st.floats(0.0, LONG_M))
def test_place_on_a_straight_step_is_the_foot_or_the_floor(east: float, aside: float, floor: float) -> None:
    """A point is placed at its foot on the step; never before the floor, never behind the end."""
    step, n = EAST
    place = project_on_step(INDEX, *e7(*lon_lat(east, aside)), floor, step, n)
    assert floor <= place <= LONG_M + 1e-6
    # 2 cm: units of 1e-7 degree, and edges that keep their ends in them.
    assert abs(place - min(max(east - 30.0, floor), LONG_M)) < 0.02


def test_place_round_a_corner_and_back_goes_by_the_floor() -> None:
    """Where a step comes back along the same road, the floor decides which time it is."""
    step, n = laid([(0, 30.0, 120.0), (1, 30.0, 150.0)])  # east to 120 m, back west to the first node
    point = e7(*lon_lat(80.0, 2.0))
    out, back = 80.0 - 30.0, (120.0 - 30.0) + (120.0 - 80.0)
    for floor, place in [(0.0, out), (45.0, out), (60.0, back), (95.0, back), (135.0, 135.0)]:
        assert abs(project_on_step(INDEX, *point, floor, step, n) - place) < 0.02
