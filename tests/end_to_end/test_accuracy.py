"""Detection against drives whose passages are known, on the demo's town and along a real extract.

The limits are those the project set itself (README, accuracy); the truth is what the drivers did, from code
that shares nothing with detection. In full: `pytest -m slow tests/end_to_end/test_accuracy.py`, and the
table itself: `python -m tests.bench.accuracy`.
"""

from functools import cache

import pytest

from stream.config import load_settings
from stream.demo.track import Tracks
from stream.network import Built
from tests.bench.accuracy import INTERVALS_S, PLACES, Accuracy, measure

SEED = 1
REDUCED, FULL = 400, 3000  # trips

# s between pings: least recall and precision, largest bias and mean absolute error (s; None: no promise)
LIMITS: dict[float, tuple[float, float | None, float | None]] = {
    1.0: (0.99, 0.1, 0.5),
    3.0: (0.99, 0.1, 0.5),
    5.0: (0.99, 0.1, 0.5),
    10.0: (0.985, 0.3, None),
    15.0: (0.985, 0.3, None),
    30.0: (0.97, None, None),
}
RIGHT_ARMS = 0.99


@cache
def drives(place: str, n_trips: int) -> tuple[Built, Tracks]:
    """Give a place's network and its drives, built once."""
    return PLACES[place](n_trips, SEED, load_settings())


def hold(place: str, interval_s: float, n_trips: int) -> None:
    """Measure and hold the limits; noise of 4 m per axis, first order with 40 s."""
    got = measure(place, *drives(place, n_trips), interval_s, load_settings(), SEED + 1)
    assert not broken(got, interval_s), got


def broken(got: Accuracy, interval_s: float) -> list[str]:
    """List the figures beyond their limits."""
    least, bias_s, mae_s = LIMITS[interval_s]
    holds = {
        "recall": got.recall >= least,
        "precision": got.precision >= least,
        "right_arms": got.right_arms >= RIGHT_ARMS,
        "bias_s": bias_s is None or abs(got.bias_s) <= bias_s,
        "mae_s": mae_s is None or got.mae_s <= mae_s,
    }
    return [name for name, is_held in holds.items() if not is_held]


@pytest.mark.parametrize("interval_s", INTERVALS_S)
@pytest.mark.parametrize("place", PLACES)
def test_detection_keeps_its_limits_on_few_drives(place: str, interval_s: float) -> None:
    """Recall, precision, arms, bias and error hold for some thousand passages."""
    hold(place, interval_s, REDUCED)


@pytest.mark.slow
@pytest.mark.parametrize("interval_s", INTERVALS_S)
@pytest.mark.parametrize("place", PLACES)
def test_detection_keeps_its_limits_on_many_drives(place: str, interval_s: float) -> None:
    """The same figures hold for some thirty thousand passages."""
    hold(place, interval_s, FULL)


@pytest.mark.parametrize("name", ["recall", "precision", "right_arms", "bias_s", "mae_s"])
def test_each_limit_is_one_that_can_break(name: str) -> None:
    """A figure just past its limit is told, and no other."""
    good = {"recall": 1.0, "precision": 1.0, "right_arms": 1.0, "bias_s": 0.0, "mae_s": 0.0}
    bad = {"recall": 0.9899, "precision": 0.9899, "right_arms": 0.9899, "bias_s": -0.11, "mae_s": 0.51}
    figures = {**good, name: bad[name]}
    got = Accuracy("here", 1.0, 100, 100, **figures, p50_shift_s=0.0, p85_shift_s=0.0)
    assert broken(got, 1.0) == [name]
