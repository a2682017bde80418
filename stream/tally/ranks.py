"""Confidence limits of a quantile as ranks of the ordered sample.

Guarantee: the ranks are those of the binomial distribution itself, no normal approximation; they follow
from additions, multiplications and divisions alone and so are the same on every machine.

Source: order-statistic limits, METHODS.md section 10.
"""

from fractions import Fraction
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

CONFIDENCE = Fraction(95, 100)
_REACH = 14.0  # standard deviations; what lies beyond holds less than 1e-40


def _window(n: int, q: Fraction) -> tuple[int, NDArray[np.float64]]:
    """Give P(B = k) for B ~ Bin(n, q) over all k that matter: the first k, and the probabilities.

    Built outward from the mode by the ratio of neighbours and then divided by its own sum: all terms are
    positive, so that errors don't cancel but stay at some n times 1e-16.
    """
    odds = float(q / (1 - q))
    mode = int((n + 1) * q)
    reach = int(_REACH * float(n * q * (1 - q)) ** 0.5) + 40
    first, last = max(0, mode - reach), min(n, mode + reach)
    up = np.arange(mode, last, dtype=np.float64)
    down = np.arange(mode, first, -1, dtype=np.float64)
    right = np.cumprod((n - up) / (up + 1.0) * odds)
    left = np.cumprod(down / (n - down + 1.0) / odds)
    weight = np.concatenate([left[::-1], [1.0], right])
    return first, weight / np.cumsum(weight)[-1]


@lru_cache(maxsize=16_384)
def limit_ranks(n: int, q: Fraction, confidence: Fraction = CONFIDENCE) -> tuple[int | None, int | None]:
    """Give the ranks whose order statistics hold the quantile q between them.

    Parameters
    ----------
    n
        Size of the sample, 1 or more.
    q
        In (0, 1).
    confidence
        In (0, 1); the rest is split evenly between the two sides.

    Returns
    -------
    lower, upper : int or None
        Largest rank l with P(B <= l - 1) <= rest / 2, smallest rank u with P(B >= u) <= rest / 2, for
        B ~ Bin(n, q); None where there is no such rank within 1 .. n: the limit is open.
    """
    if n < 1 or not 0 < q < 1 or not 0 < confidence < 1:
        raise ValueError(f"no limits for n {n}, q {q}, confidence {confidence}")
    side = float((1 - confidence) / 2)
    first, chance = _window(n, q)
    # below[i] = P(B <= first + i); above[i] = P(B >= first + i)
    below = np.cumsum(chance)
    above = np.cumsum(chance[::-1])[::-1]
    lower = first + int(np.searchsorted(below, side, side="right"))
    upper = first + int(np.count_nonzero(above > side))
    return (lower if lower >= 1 else None), (upper if upper <= n else None)


def coverage(n: int, q: Fraction, lower: int, upper: int) -> float:
    """Give P(lower <= B <= upper - 1), the chance that the two order statistics hold the quantile.

    `lower` 0 and `upper` n + 1 stand for open sides.
    """
    first, chance = _window(n, q)
    k = np.arange(first, first + len(chance))
    return float(np.sum(chance[(k >= lower) & (k <= upper - 1)]))
