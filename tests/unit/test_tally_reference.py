"""Unimpeded times, traversals and paces."""

import numpy as np
import pytest

from stream.tally import pace_ms, traversal_ms, unimpeded_ms


def test_unimpeded_time_of_equal_arms_is_length_over_speed() -> None:
    """60 + 20 + 40 m at 12 m/s take exactly 10 s."""
    got = unimpeded_ms(
        np.array([60.0]), np.array([20.0]), np.array([40.0]), np.array([12.0]), np.array([12.0])
    )
    assert got.tolist() == [10_000]
    assert got.dtype == np.int64


def test_unimpeded_time_inside_takes_the_mean_pace() -> None:
    """At 10 and 20 m/s the inside runs at 0.075 s/m: 6 + 30 * 0.075 + 40 / 20 = 10.25 s."""
    one = np.array([1.0])
    got = unimpeded_ms(60 * one, 30 * one, 40 * one, np.array([10.0]), np.array([20.0]))
    assert got.tolist() == [10_250]


def test_unimpeded_time_takes_single_precision_speeds() -> None:
    """Speeds of the street arrays are float32; 50 km/h over 100 m is 7.2 s."""
    speed = np.array([50 / 3.6], dtype=np.float32)
    got = unimpeded_ms(np.array([60.0]), np.array([0.0]), np.array([40.0]), speed, speed)
    assert got.tolist() == [7200]


@pytest.mark.parametrize(("us", "ms"), [(0, 0), (499, 0), (500, 1), (1_499, 1), (12_345_678, 12_346)])
def test_traversal_rounds_half_up(us: int, ms: int) -> None:
    """Microseconds become whole milliseconds, half a millisecond up."""
    start = 1_774_746_000_000_123
    assert traversal_ms(np.array([start]), np.array([start + us])).tolist() == [ms]


def test_pace_is_time_over_length() -> None:
    """250 m in 18 s are 72 s per km."""
    assert pace_ms(np.array([18_000], dtype=np.int32), np.array([250.0])).tolist() == [72_000]
