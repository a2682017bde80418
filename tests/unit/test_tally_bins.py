"""The fixed bins and the quantiles read from them."""

from fractions import Fraction

import numpy as np
import pytest

from stream.tally import EDGES_MS, N_BINS, bin_of, ladder_ms, lower_ms, mid_ms, quantile_ms, upper_ms
from stream.tally.bins import rank_of
from tests.oracle import tally as oracle

HALF = Fraction(1, 2)


def counts_of(values_ms: list[int]) -> tuple[list[int], list[int]]:
    """Count values into the bins: those that are not empty, and what they hold."""
    bins, n = np.unique(bin_of(np.array(values_ms)), return_counts=True)
    return bins.tolist(), n.tolist()


def limits_of(bins: list[int], counts: list[int], q: Fraction) -> tuple[int | None, int | None]:
    """Give the limits alone."""
    return ladder_ms(bins, counts, (q,))[0][1:]


def test_number_of_bins() -> None:
    """80 linear, 298 growing a side and 2 open ones make 678 (METHODS.md section 9, computed there)."""
    assert N_BINS == 678
    assert int(np.sum(EDGES_MS > 10_000)) == 298
    assert int(np.sum(np.abs(EDGES_MS) <= 10_000)) == 81


def test_edges_follow_the_rule() -> None:
    """The table is the one that the rule of DESIGN.md section 7 gives when followed by hand."""
    assert EDGES_MS.dtype == np.int64
    assert EDGES_MS.tolist() == oracle.edges_ms()
    assert not EDGES_MS.flags.writeable


def test_edges_are_mirrored_and_end_at_an_hour() -> None:
    """Negative delays have the same resolution as positive ones; the last edges are 3600 s."""
    assert EDGES_MS.tolist() == [-e for e in EDGES_MS[::-1].tolist()]
    assert EDGES_MS[-1] == 3_600_000


def test_middle_keeps_the_promise_for_every_whole_millisecond_at_the_edges() -> None:
    """No value lies further from its bin's middle than max(0.125 s, 1 %) (DESIGN.md section 12)."""
    for bin_ix in range(1, N_BINS - 1):
        low, high, middle = lower_ms(bin_ix), upper_ms(bin_ix), mid_ms(bin_ix)
        assert low is not None
        assert high is not None
        assert middle is not None
        for value in (low, high - 1):
            assert bin_of(np.array([value]))[0] == bin_ix
            assert abs(middle - value) <= max(125, abs(value) / 100)


@pytest.mark.parametrize(
    ("value_ms", "bin_ix"),
    [(-3_600_001, 0), (-3_600_000, 1), (0, 339), (-1, 338), (249, 339), (250, 340), (3_600_000, 677)],
)
def test_bin_of_value_at_an_edge(value_ms: int, bin_ix: int) -> None:
    """A bin holds its lower edge and not its upper one; half of the 678 bins lie below zero."""
    assert bin_of(np.array([value_ms])).tolist() == [bin_ix]


def test_open_bins_have_no_middle() -> None:
    """Underflow and overflow are counted and shown as open, never as a number."""
    assert mid_ms(0) is None
    assert mid_ms(N_BINS - 1) is None
    assert lower_ms(0) is None
    assert upper_ms(N_BINS - 1) is None
    assert quantile_ms(*counts_of([1, 5_000_000]), Fraction(3, 4)) is None
    assert quantile_ms(*counts_of([-5_000_000, 1]), Fraction(1, 4)) is None


def test_quantile_is_by_rank_and_not_interpolated() -> None:
    """P85 of 0, 0, 1, 2, 4 .. 128 s is 64 s by rank (METHODS.md section 9), not the interpolated 52.8."""
    values_ms = [0, 0, *(1000 * 2**i for i in range(8))]
    got = quantile_ms(*counts_of(values_ms), Fraction(85, 100))
    assert got is not None
    assert abs(got - 64_000) <= 640


@pytest.mark.parametrize(
    ("n", "q", "rank"), [(10, "0.5", 5), (11, "0.5", 6), (20, "0.05", 1), (1, "0.95", 1)]
)
def test_rank_is_the_ceiling(n: int, q: str, rank: int) -> None:
    """The rank is ceil(q n) in whole numbers: 0.05 of 20 is exactly the first."""
    assert rank_of(n, Fraction(q)) == rank


def test_rank_of_nothing_is_refused() -> None:
    """No quantile of no values, and none at 0 or 1."""
    for n, q in ((0, HALF), (5, Fraction(0)), (5, Fraction(1))):
        with pytest.raises(ValueError, match="must lie inside"):
            rank_of(n, q)


def test_limits_are_bin_edges_round_the_order_statistics() -> None:
    """Of 10 values the 2nd and the 9th hold the median (METHODS.md section 10): the edges of their bins."""
    values_ms = [1000 * i for i in range(1, 11)]
    assert limits_of(*counts_of(values_ms), HALF) == (2000, 9250)


def test_limits_of_a_small_sample_are_open() -> None:
    """Five values bound the median on no side, and 20 bound P85 only from below (METHODS.md section 10)."""
    assert limits_of(*counts_of([1, 2, 3, 4, 5]), HALF) == (None, None)
    values_ms = [1000 * i for i in range(1, 21)]
    low, high = limits_of(*counts_of(values_ms), Fraction(85, 100))
    assert high is None
    assert low is not None
    assert low <= 14_000 < low * 1.02 + 250


def test_limits_in_an_open_bin_are_open() -> None:
    """Where the order statistic overflowed, its limit is open."""
    assert limits_of(*counts_of([-9_000_000] * 5 + [9_000_000] * 5), HALF) == (None, None)
