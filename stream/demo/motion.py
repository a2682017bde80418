"""How a vehicle moves between two points of its path: exact uniform accelerations under speed caps.

A path is cut into pieces: piece k covers ``at_m[k] .. at_m[k + 1]`` with the cap ``cap_mps[k]``. What a
leg writes are knots (seconds, metres): while speed changes at most `STEP_S` apart, else one per phase.
"""

import math

import numpy as np
from numpy.typing import NDArray

from stream.kernel import kernel

F64 = NDArray[np.float64]
STEP_S = 0.5


@kernel
def piece_of(at_m: F64, k: int, x_m: float) -> int:
    """Find the piece that holds x_m, searching upwards from piece k (half-open from below)."""
    while at_m[k + 1] < x_m:
        k += 1
    return k


@kernel
def phase_kernel(
    t_s: float, s_m: float, v_mps: float, a_mps2: float, span_s: float, t_out: F64, s_out: F64, n: int
) -> int:
    """Write the knots of one phase of uniform acceleration; returns the new number of knots."""
    if span_s <= 1e-6:
        return n
    steps = 1 if a_mps2 == 0.0 else math.ceil(span_s / STEP_S)
    for i in range(1, steps + 1):
        tau = span_s * i / steps
        t_out[n] = t_s + tau
        s_out[n] = s_m + v_mps * tau + 0.5 * a_mps2 * tau * tau
        n += 1
    return n


@kernel
def speeds_kernel(
    at_m: F64,
    cap_mps: F64,
    k: int,
    s_m: float,
    v_mps: float,
    x_m: float,
    u_mps: float,
    a: float,
    d: float,
    w: F64,
) -> int:
    """Fill w with the speeds at s_m, at each piece's end and at x_m; returns the index of the last.

    Forward by the acceleration a and the caps, then backward by the braking rate d. Where v_mps is too
    fast to brake at d, the rate is raised until it is not (an emergency, as on the road).
    """
    for _ in range(12):
        w[0] = v_mps
        i, kk, s = 0, k, s_m
        while at_m[kk + 1] < x_m:
            v = math.sqrt(w[i] * w[i] + 2.0 * a * (at_m[kk + 1] - s))
            i += 1
            w[i] = min(v, cap_mps[kk], cap_mps[kk + 1])
            kk += 1
            s = at_m[kk]
        v = math.sqrt(w[i] * w[i] + 2.0 * a * (x_m - s))
        i += 1
        w[i] = min(v, cap_mps[kk], u_mps)
        end = x_m
        for j in range(i - 1, -1, -1):
            start = at_m[k + j] if j > 0 else s_m
            w[j] = min(w[j], math.sqrt(w[j + 1] * w[j + 1] + 2.0 * d * (end - start)))
            end = start
        if w[0] >= v_mps - 1e-9:
            break
        d *= 1.4
    w[0] = v_mps
    return i


@kernel
def leg_kernel(
    at_m: F64,
    cap_mps: F64,
    k: int,
    s_m: float,
    v_mps: float,
    t_s: float,
    x_m: float,
    u_mps: float,
    a: float,
    d: float,
    w: F64,
    t_out: F64,
    s_out: F64,
    n: int,
) -> tuple[float, float, int]:
    """Drive from s_m at speed v_mps to x_m, passing it at no more than u_mps, as fast as caps allow.

    Returns
    -------
    time at x_m (s), speed there (m/s), number of knots

    Source: METHODS.md section 6, uniform acceleration and braking.
    """
    if x_m <= s_m:
        return t_s, v_mps, n
    last = speeds_kernel(at_m, cap_mps, k, s_m, v_mps, x_m, u_mps, a, d, w)
    s, t = s_m, t_s
    for j in range(last):
        end = min(at_m[k + j + 1], x_m)
        length, v0, v1 = end - s, w[j], w[j + 1]
        top = math.sqrt((2.0 * a * d * length + d * v0 * v0 + a * v1 * v1) / (a + d))
        top = max(min(top, cap_mps[k + j]), v0, v1)
        up_m = (top * top - v0 * v0) / (2.0 * a)
        down_m = (top * top - v1 * v1) / (2.0 * d)
        rest_m = length - up_m - down_m
        if rest_m < -1e-6:  # too short for these rates: one uniform change over the whole piece
            span = 2.0 * length / (v0 + v1)
            n = phase_kernel(t, s, v0, (v1 - v0) / span, span, t_out, s_out, n)
        else:
            up_s, down_s = (top - v0) / a, (top - v1) / d
            flat_s = max(rest_m, 0.0) / top
            span = up_s + flat_s + down_s
            n = phase_kernel(t, s, v0, a, up_s, t_out, s_out, n)
            n = phase_kernel(t + up_s, s + up_m, top, 0.0, flat_s, t_out, s_out, n)
            n = phase_kernel(t + up_s + flat_s, end - down_m, top, -d, down_s, t_out, s_out, n)
        t += span
        s = end
        s_out[n - 1] = end
    return t, w[last], n


@kernel
def brakeable_kernel(at_m: F64, cap_mps: F64, n_pieces: int, d: float, brake_mps: F64) -> None:
    """Fill brake_mps[0 .. n_pieces]: the highest speed at each piece's start that all later caps allow."""
    brake_mps[n_pieces] = 0.0
    for k in range(n_pieces - 1, -1, -1):
        v = math.sqrt(brake_mps[k + 1] * brake_mps[k + 1] + 2.0 * d * (at_m[k + 1] - at_m[k]))
        v = min(v, cap_mps[k])
        brake_mps[k] = min(v, cap_mps[k - 1]) if k > 0 else v


@kernel
def free_mps(at_m: F64, cap_mps: F64, brake_mps: F64, k: int, x_m: float, d: float) -> float:
    """Give the highest speed at x_m (inside piece k) from which all later caps can be met."""
    v = math.sqrt(brake_mps[k + 1] * brake_mps[k + 1] + 2.0 * d * max(at_m[k + 1] - x_m, 0.0))
    return float(min(v, cap_mps[k]))
