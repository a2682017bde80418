"""Quantiles, limits and moments against a library, published tables and a model with a known answer."""

from collections.abc import Callable
from fractions import Fraction

import numpy as np
import polars as pl
import pytest

from stream.config import Settings
from stream.tally import bin_of, count_passages, limit_ranks, quantile_ms
from stream.tally.ranks import coverage

LEVELS = [Fraction(p, 100) for p in (1, 5, 15, 25, 50, 75, 85, 95, 99)]
N = 20_000


def _signal(random: np.random.Generator) -> np.ndarray:
    """Two thirds wait evenly up to 30 s, a third not at all: delays at a fixed-time signal."""
    return np.where(random.random(N) < 2 / 3, random.uniform(0, 30_000, N), 0)


# Named by what they are like; each in ms.
DISTRIBUTIONS: dict[str, Callable[[np.random.Generator], np.ndarray]] = {
    "uniform_red": _signal,
    "normal_around_zero": lambda r: r.normal(0, 4_000, N),
    "lognormal_tail": lambda r: r.lognormal(9.0, 1.2, N).clip(max=3_599_999),
    "exponential_gap": lambda r: r.exponential(8_646, N),
    "two_humps": lambda r: np.where(r.random(N) < 0.5, r.normal(-2_000, 800, N), r.gamma(9.0, 9_000, N)),
}


@pytest.mark.parametrize("name", DISTRIBUTIONS)
def test_quantiles_lie_within_the_bound_of_numpy(name: str) -> None:
    """Against numpy's `inverted_cdf`, the same order statistic: at most max(0.125 s, 1 %) away."""
    seed = 20261201
    values_ms = np.rint(DISTRIBUTIONS[name](np.random.default_rng(seed))).astype(np.int64)
    bins, n = np.unique(bin_of(values_ms), return_counts=True)
    for q in LEVELS:
        wanted = float(np.quantile(values_ms, float(q), method="inverted_cdf"))
        got = quantile_ms(bins.tolist(), n.tolist(), q)
        assert got is not None
        assert abs(got - wanted) <= max(125, abs(wanted) / 100), (name, seed, q)


# METHODS.md section 10: two rows are read there (Real Statistics; lecture notes), the others computed
# there from the definition.
RANKS = [
    (10, "0.50", 2, 9, 0.9785),
    (20, "0.50", 6, 15, 0.959),
    (25, "0.50", 8, 18, 0.9567),
    (35, "0.50", 12, 24, 0.9590),
    (50, "0.85", 37, 48, 0.9726),
    (100, "0.50", 40, 61, 0.9648),
    (100, "0.85", 78, 93, 0.9657),
    (100, "0.95", 90, 100, 0.9826),
    (200, "0.95", 184, 197, 0.9672),
    (1000, "0.50", 469, 532, 0.9537),
    (20, "0.85", 14, None, 0.9781),
]


@pytest.mark.parametrize(("n", "q", "low", "high", "chance"), RANKS)
def test_ranks_of_the_table(n: int, q: str, low: int, high: int | None, chance: float) -> None:
    """Ranks and coverage are those of the table, an open side included."""
    assert limit_ranks(n, Fraction(q)) == (low, high)
    digits = 3 if chance == 0.959 and n == 20 else 4
    assert round(coverage(n, Fraction(q), low, high or n + 1), digits) == chance


def test_coverage_of_given_ranks() -> None:
    """Of 35 values the 17th to the 19th hold the median with 0.264121 (METHODS.md section 10, read)."""
    assert coverage(35, Fraction(1, 2), 17, 19) == pytest.approx(0.264121, abs=5e-7)


@pytest.mark.parametrize(
    ("q", "n"), [("0.50", 6), ("0.75", 13), ("0.85", 23), ("0.90", 36), ("0.95", 72), ("0.99", 368)]
)
def test_smallest_sample_with_both_limits(q: str, n: int) -> None:
    """Below these sizes a side is open at 95 % (METHODS.md section 10, computed there)."""
    assert None not in limit_ranks(n, Fraction(q))
    assert None in limit_ranks(n - 1, Fraction(q))


def test_whole_distribution_at_a_fixed_signal(settings: Settings) -> None:
    """Uniform arrivals, C 60 s, red 30 s, y 0.25: mean 10.00, P50 7.50, P85 23.25, P95 27.75 s.

    Source: P(d > x) = (R - x) / (C (1 - y)), METHODS.md section 7 (kinematics of a fluid queue).
    """
    cycle_ms, red_ms, y = 60_000, 30_000, 0.25
    arrival_ms = (np.arange(60_000) + 0.5) * (cycle_ms / 60_000)
    # Who comes at t leaves with the queue at red + y t, or at once when it is gone.
    delay_ms = np.rint(np.maximum(red_ms + y * arrival_ms - arrival_ms, 0)).astype(np.int64)
    passages = pl.DataFrame({"delay_ms": delay_ms, "junction_id": 1, "arm_in": 0, "arm_out": 2})
    only = settings.model_copy(update={"tallies": {"movement": settings.tallies["movement"]}})
    counts = count_passages(passages, only)
    moment = counts.moment.to_dicts()
    assert len(moment) == 1
    assert moment[0]["sum"] / moment[0]["n"] == pytest.approx(10_000, abs=1)  # arrivals are not continuous
    bins, n = counts.histogram["bin_ix"].to_numpy(), counts.histogram["n"].to_numpy()
    for q, wanted_ms in (("0.50", 7_500), ("0.85", 23_250), ("0.95", 27_750)):
        got = quantile_ms(bins.tolist(), n.tolist(), Fraction(q))
        assert got is not None
        assert abs(got - wanted_ms) <= max(125, wanted_ms / 100)
    undelayed = n[bins == bin_of(np.array([0]))].item() / 60_000
    assert undelayed == pytest.approx(1 / 3, abs=250 / (cycle_ms * (1 - y)) + 1e-4)  # the bin is 0.25 s wide
