"""The fixed bins, and quantiles shown by them.

Guarantee: a quantile is one order statistic, that of rank ceil(q n), and lies within max(0.125 s, 1 %) of
it wherever its bin is closed. The edges come from integer steps alone, so every machine has the same ones.

Source: DESIGN.md section 7, METHODS.md section 9.
"""

import hashlib
from bisect import bisect_left
from collections.abc import Sequence
from fractions import Fraction
from itertools import accumulate
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stream.tally.ranks import CONFIDENCE, limit_ranks

I64 = NDArray[np.int64]

CORE_MS = 10_000
CORE_STEP_MS = 250
LAST_MS = 3_600_000
_GROWTH = 50  # a bin beyond the core is at most a 50th, 2 %, of its inner edge


def _build_edges_ms() -> I64:
    outer = [CORE_MS]
    while outer[-1] < LAST_MS:
        outer.append(min(outer[-1] + outer[-1] // _GROWTH, LAST_MS))
    core = list(range(-CORE_MS, CORE_MS, CORE_STEP_MS))
    edges = np.array([-e for e in reversed(outer[1:])] + core + outer, dtype=np.int64)
    edges.flags.writeable = False
    return edges


# int64[677]: bin i holds EDGES_MS[i - 1] <= value < EDGES_MS[i]; bin 0 lies below all, the last above all.
EDGES_MS: I64 = _build_edges_ms()
N_BINS = len(EDGES_MS) + 1
# Histograms are added up only where this is the same.
BINS_DIGEST = hashlib.sha256(EDGES_MS.astype("<i8").tobytes()).hexdigest()[:16]
_EDGES: tuple[int, ...] = tuple(EDGES_MS.tolist())


def bin_of(value_ms: NDArray[Any]) -> I64:
    """Find the bins of values.

    Parameters
    ----------
    value_ms
        int[n], delays in ms or paces in ms per km.

    Returns
    -------
    int64[n], in [0, N_BINS)
    """
    return np.searchsorted(EDGES_MS, value_ms, side="right").astype(np.int64)


def lower_ms(bin_ix: int) -> int | None:
    """Give the smallest value of a bin; None for the one that is open below."""
    return None if bin_ix == 0 else _EDGES[bin_ix - 1]


def upper_ms(bin_ix: int) -> int | None:
    """Give the upper edge of a bin, not part of it; None for the one that is open above."""
    return None if bin_ix == N_BINS - 1 else _EDGES[bin_ix]


def mid_ms(bin_ix: int) -> float | None:
    """Give the middle of a bin, exact to half a millisecond; None for the two open ones."""
    low, high = lower_ms(bin_ix), upper_ms(bin_ix)
    return None if low is None or high is None else (low + high) / 2


def rank_of(n: int, q: Fraction) -> int:
    """Give the rank ceil(q n), from 1 to n, of the order statistic that stands for a quantile.

    Raises
    ------
    ValueError
        Nothing was counted, or q lies outside (0, 1).
    """
    if n < 1 or not 0 < q < 1:
        raise ValueError(f"no quantile {q} of {n} values; q must lie inside (0, 1) and n be 1 or more")
    return -(-q.numerator * n // q.denominator)


def ladder_ms(
    bin_ix: Sequence[int],
    counts: Sequence[int],
    levels: Sequence[Fraction],
    confidence: Fraction = CONFIDENCE,
) -> list[tuple[float | None, int | None, int | None]]:
    """Give quantiles of a histogram with distribution-free confidence limits.

    Parameters
    ----------
    bin_ix, counts
        Bins that are not empty, ascending, and what they hold, n > 0 in all.
    levels
        Each in (0, 1).
    confidence
        In (0, 1).

    Returns
    -------
    list of (quantile, lower, upper), one per level
        Middle of the bin that holds the value of rank ceil(q n), None where that bin is open; lower edge of
        the bin of the lower order statistic and upper edge of that of the upper one, None where the sample
        is too small for a limit on that side, or its bin is open.

    Source: METHODS.md sections 9 and 10.
    """
    cumulative = list(accumulate(counts))

    def bin_at(rank: int) -> int:
        return int(bin_ix[bisect_left(cumulative, rank)])

    out = []
    for q in levels:
        low, high = limit_ranks(cumulative[-1], q, confidence)
        out.append(
            (
                mid_ms(bin_at(rank_of(cumulative[-1], q))),
                None if low is None else lower_ms(bin_at(low)),
                None if high is None else upper_ms(bin_at(high)),
            )
        )
    return out


def quantile_ms(bin_ix: Sequence[int], counts: Sequence[int], q: Fraction) -> float | None:
    """Give one quantile of a histogram, as `ladder_ms` does."""
    return ladder_ms(bin_ix, counts, (q,))[0][0]
