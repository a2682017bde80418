"""Whatever comes in, detection doesn't fall over: counts add up, time adds up, and passages make sense."""

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import settings as hypothesis_settings
from hypothesis import strategies as st

from stream.config import load_settings
from stream.detect.carry import held_rows, new_states
from stream.detect.run import Detector
from stream.network.model import Streets
from tests.grid import START_US, columns, drive, end_s, joined, lon_lat, row
from tests.oracle.audit import check_all, check_counts
from tests.oracle.ground import radii_m
from tests.oracle.streets import close_edges, grid_streets

SETTINGS = load_settings()
WIDE = 600.0
HOUR_US = 3_600_000_000
# Name: grid, its first node, spacing.
TOWNS: dict[str, tuple[Streets, float, float]] = {
    "blocks": (grid_streets(5, 150.0), 5.0, 52.0),
    "dense": (grid_streets(8, 30.0), 5.0, 52.0),
    "one-way": (close_edges(grid_streets(5, 150.0), [1, 4, 9, 12, 17, 30, 33, 41, 52, 61]), 5.0, 52.0),
    "across 180": (grid_streets(5, 150.0, lon=179.997, lat=65.0), 179.997, 65.0),
}


@pytest.fixture(scope="module")
def detectors() -> dict[str, Detector]:
    """Give a detector of each town, on one thread."""
    return {name: Detector(town[0], SETTINGS, threads=1) for name, town in TOWNS.items()}


def check(detector: Detector, streets: Streets, args: tuple[Any, ...], n_vehicles: int) -> int:
    """Feed, close, and check all that must hold; give the passages found."""
    states = new_states(n_vehicles)
    first = detector.feed(states, *args)
    check_counts(first, len(args[0]), held_rows(states))
    found = joined([first, detector.close(states)])
    assert held_rows(states) == 0
    check_counts(found, len(args[0]), 0)
    check_all(found, streets)
    return len(found.passages)


ANY = st.floats(allow_nan=True, allow_infinity=True)
NEAR = st.tuples(st.floats(-200.0, 800.0), st.floats(-200.0, 800.0)).map(lambda p: lon_lat(*p))
ON = st.tuples(st.floats(-30.0, 630.0), st.integers(0, 4), st.booleans()).map(
    lambda p: lon_lat(p[0], 150.0 * p[1]) if p[2] else lon_lat(150.0 * p[1], p[0])
)
FAR = st.tuples(st.floats(4.97, 5.05), st.floats(51.97, 52.05))
PLACE = st.one_of(ON, ON, NEAR, FAR, st.tuples(ANY, ANY), st.tuples(st.floats(-180, 180), st.floats(-90, 90)))
STEP_US = st.one_of(
    st.integers(0, 30_000_000), st.sampled_from([-5_000_000, 0, 1, 121_000_000, 400_000_000, 10 * HOUR_US])
)


@hypothesis_settings(deadline=None, max_examples=150)
@given(st.lists(st.tuples(st.integers(0, 2), STEP_US, PLACE), max_size=120))
def test_any_pings_are_counted_and_make_sense(
    detectors: dict[str, Detector], pings: list[tuple[int, int, tuple[float, float]]]
) -> None:
    """NaN, out of range, off road, teleports, equal and reversed times: all that must hold, holds."""
    t_us = START_US + np.cumsum([step for _, step, _ in pings], dtype=np.int64)
    lon = np.array([place[0] for _, _, place in pings], np.float64)
    lat = np.array([place[1] for _, _, place in pings], np.float64)
    args = (np.array([v for v, _, _ in pings], np.int32), t_us, lon, lat)
    check(detectors["blocks"], TOWNS["blocks"][0], args, 3)


def rambles(name: str, seed: int, n: int) -> tuple[Any, ...]:
    """Give many pings of a few vehicles that drive, stand, jitter, jump and leave the streets at random."""
    rng = np.random.default_rng(seed)
    _, lon0, lat0 = TOWNS[name]
    across, along = radii_m(lat0)
    step = 30.0 if name == "dense" else 150.0
    last = 7 if name == "dense" else 4
    noise_m = float(rng.choice([0.0, 3.0, 6.0, 12.0, 40.0]))
    rows = []
    for vehicle in range(4):
        t_us, at, to = START_US + int(rng.integers(HOUR_US)), np.zeros(2), np.zeros(2)
        every = float(rng.choice([0.2, 1.0, 5.0, 15.0, 45.0]))
        for _ in range(n // 4):
            t_us += int(every * 1e6 * rng.choice([0.0, 0.5, 1.0, 1.0, 1.0, 1.7]))
            if rng.random() < 0.004:
                t_us += int(rng.integers(-60, 700) * 1_000_000)
            if np.allclose(at, to) or rng.random() < 0.01:
                at = np.round(at / step) * step if rng.random() < 0.8 else at
                to = np.clip(at + step * rng.permutation([rng.choice([-1, 1]), 0]), 0, last * step)
            speed = rng.choice([0.0, 0.0, 2.0, 9.0, 14.0])
            left = to - at
            far = math.hypot(*left)
            at = at + left * min(1.0, speed * every / far) if far > 0 else at
            seen = at + rng.normal(0.0, noise_m, 2) if noise_m else at
            if rng.random() < 0.01:
                seen = rng.uniform(-1500.0, 2500.0, 2)
            east = math.degrees(seen[0] / across / math.cos(math.radians(lat0)))
            lon = (lon0 + east + 180.0) % 360.0 - 180.0
            rows.append((vehicle, t_us, lon, lat0 + math.degrees(seen[1] / along)))
    rows.sort(key=lambda row: row[1] + int(rng.integers(0, 3_000_000)))
    v, t, x, y = zip(*rows, strict=True)
    return np.array(v, np.int32), np.array(t, np.int64), np.array(x), np.array(y)


@pytest.mark.parametrize("name", TOWNS)
def test_rambles_are_counted_and_make_sense(detectors: dict[str, Detector], name: str) -> None:
    """Thousands of pings from tidy to wild, on each town: all that must hold, holds."""
    n = sum(check(detectors[name], TOWNS[name][0], rambles(name, seed, 2000), 4) for seed in range(12))
    assert n > 100


@pytest.mark.parametrize("seed", range(3))
def test_white_noise_is_counted_and_makes_sense(detectors: dict[str, Detector], seed: int) -> None:
    """Pings anywhere in the area, a second apart, in no order of place at all."""
    rng = np.random.default_rng(seed)
    n = 4000
    t_us = START_US + np.cumsum(rng.integers(0, 40_000_000, n))
    lon, lat = np.array([lon_lat(*p) for p in rng.uniform(-300.0, 900.0, (n, 2)).tolist()]).T
    args = (rng.integers(0, 3, n).astype(np.int32), t_us, lon.copy(), lat.copy())
    check(detectors["blocks"], TOWNS["blocks"][0], args, 3)


@pytest.mark.parametrize("spread_m", [2.5, 6.0, 9.0])
def test_milling_about_off_the_streets_breaks_the_path(
    detectors: dict[str, Detector], spread_m: float
) -> None:
    """From a street into a yard, hundreds of pings there with no street near, and on: room never runs out."""
    rng = np.random.default_rng(1)
    rows = drive([(10.0, 150.0), (75.0, 150.0), (75.0, 225.0)], 5.0)
    for _ in range(400):
        rows.append(
            row(end_s(rows) + 0.5, *(np.array([75.0, 225.0]) + rng.normal(0.0, spread_m, 2)).tolist())
        )
    rows += drive([(75.0, 225.0), (75.0, 150.0), (400.0, 150.0)], 8.0, start_s=end_s(rows) + 1.0)
    states = new_states(1)
    found = joined([detectors["blocks"].feed(states, *columns(rows)), detectors["blocks"].close(states)])
    check_all(found, TOWNS["blocks"][0])
    assert found.trips["n_breaks"].tolist() == [1]
    assert len(found.passages) == 2


@pytest.mark.parametrize("t_us", [0, 1, 2**62])
def test_times_at_the_ends_of_their_range_make_sense(detectors: dict[str, Detector], t_us: int) -> None:
    """The first microsecond of 1970, and times far beyond any calendar."""
    rows = [(t_us + k * 1_000_000, *lon_lat(10.0 * k, 150.0)) for k in range(60)]
    n = check(detectors["blocks"], TOWNS["blocks"][0], columns(rows), 1)
    assert n == 3


def test_no_pings_and_no_vehicles(detectors: dict[str, Detector]) -> None:
    """Nothing in, nothing out."""
    assert check(detectors["blocks"], TOWNS["blocks"][0], columns([]), 0) == 0
    assert check(detectors["blocks"], TOWNS["blocks"][0], columns([]), 5) == 0
