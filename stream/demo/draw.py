"""Random draws inside kernels: a pure function of each trip's seed, whatever the order of trips.

Generator: the combined multiplicative generator of P. L'Ecuyer, "Efficient and portable combined random
number generators", Communications of the ACM 31(6), 1988; products stay below 2**47, so nothing wraps.
"""

import math

import numpy as np
from numpy.typing import NDArray

from stream.kernel import kernel

M1 = 2_147_483_563
M2 = 2_147_483_399
A1 = 40_014
A2 = 40_692


def seeds(n: int, generator: np.random.Generator) -> NDArray[np.int64]:
    """Draw n pairs of generator states, int64[n, 2], each inside the range the generator needs."""
    return generator.integers(1, M2 - 1, size=(n, 2), dtype=np.int64)


@kernel
def uniform(state: NDArray[np.int64], i: int) -> float:
    """Draw from (0, 1) and move state row i on."""
    state[i, 0] = state[i, 0] * A1 % M1
    state[i, 1] = state[i, 1] * A2 % M2
    z = state[i, 0] - state[i, 1]
    if z < 1:
        z += M1 - 1
    return float(z / M1)


@kernel
def poisson(state: NDArray[np.int64], i: int, mean: float) -> int:
    """Draw a Poisson count by multiplying uniforms (Knuth); the mean stays below some hundreds."""
    n = -1
    log_sum = 0.0
    while log_sum > -mean or n < 0:
        log_sum += math.log(uniform(state, i))
        n += 1
    return n


@kernel
def gap_wait_s(state: NDArray[np.int64], i: int, flow_per_s: float, gap_s: float) -> float:
    """Draw the wait until a gap of at least gap_s opens in a Poisson stream, seconds.

    Mean (exp(q g) - 1) / q - g, share of zero exp(-q g). Source: Adams 1936, METHODS.md section 7.
    """
    wait_s = 0.0
    if flow_per_s <= 0.0:
        return wait_s
    while True:
        headway_s = -math.log(uniform(state, i)) / flow_per_s
        if headway_s >= gap_s:
            return wait_s
        wait_s += headway_s
