"""Ranks of the order statistics that bound a quantile."""

from fractions import Fraction

import pytest
from scipy.stats import binom

from stream.tally import limit_ranks
from stream.tally.ranks import coverage
from tests.oracle import tally as oracle

CONFIDENCE = Fraction(95, 100)
LEVELS = [Fraction(p, 100) for p in (5, 15, 50, 85, 95, 99)]


@pytest.mark.parametrize("q", LEVELS, ids=str)
def test_ranks_match_their_definition_in_whole_numbers(q: Fraction) -> None:
    """For every n up to 60 the ranks are those found by trying all of them with exact fractions."""
    for n in range(1, 61):
        assert limit_ranks(n, q) == oracle.limit_ranks(n, q, CONFIDENCE), n


@pytest.mark.parametrize("q", LEVELS, ids=str)
@pytest.mark.parametrize("n", [61, 150, 999, 5_000, 100_003, 3_000_000])
def test_ranks_match_scipy(n: int, q: Fraction) -> None:
    """For large n the ranks are those of scipy's binomial distribution, read by definition."""
    low, high = limit_ranks(n, q)
    side = 0.025
    if low is None:
        assert binom.cdf(0, n, float(q)) > side
    else:
        assert binom.cdf(low - 1, n, float(q)) <= side < binom.cdf(low, n, float(q))
    if high is None:
        assert binom.sf(n - 1, n, float(q)) > side
    else:
        assert binom.sf(high - 1, n, float(q)) <= side < binom.sf(high - 2, n, float(q))


def test_coverage_matches_scipy() -> None:
    """The chance that the limits hold the quantile is the binomial one."""
    for n, q, low, high in ((35, Fraction(1, 2), 12, 24), (100, Fraction(95, 100), 90, 100)):
        wanted = binom.cdf(high - 1, n, float(q)) - binom.cdf(low - 1, n, float(q))
        assert coverage(n, q, low, high) == pytest.approx(wanted, abs=1e-12)


def test_higher_confidence_widens() -> None:
    """At 99 % the ranks lie no nearer than at 95 %."""
    narrow, wide = limit_ranks(200, Fraction(1, 2)), limit_ranks(200, Fraction(1, 2), Fraction(99, 100))
    assert narrow[0] is not None
    assert narrow[1] is not None
    assert wide[0] is not None
    assert wide[1] is not None
    assert wide[0] < narrow[0] < narrow[1] < wide[1]


@pytest.mark.parametrize(
    ("n", "q", "c"), [(0, "1/2", "0.95"), (5, "0", "0.95"), (5, "1", "0.95"), (5, "1/2", "1")]
)
def test_impossible_sample_is_refused(n: int, q: str, c: str) -> None:
    """No sample, or a level that is none, has no limits."""
    with pytest.raises(ValueError, match="no limits"):
        limit_ranks(n, Fraction(q), Fraction(c))
