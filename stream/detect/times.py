"""When a gate was passed: time within the step between two known places.

Short steps: a cubic in the neighbouring speeds that never runs backward. Long steps: drive time at the
likely speed, the slack where the vehicle most likely stood (DESIGN.md section 5, Gates).

Source of the monotone limits: Fritsch & Carlson 1980, Monotone piecewise cubic interpolation (from memory).
"""

import math

from stream.detect.step import Step
from stream.kernel import kernel
from stream.network.routes import StreetIndex

LONG_S = 6.5  # longer steps are not smooth motion
STAND_MPS = 2.0  # slower at a step's end: it may have stood there
# How likely the slack of a long step lies at a place: where the vehicle was seen to stand, where it came or
# went slowly, at each mouth on the way, at an end of the step between gates, and spread along the way.
AT_STAY = 6.0
AT_SLOW = 1.5
AT_MOUTH = 1.0
AT_GATES = 0.5
ON_THE_WAY = 0.5
NOISE_M = 2.5  # m, of one place against the next, for the error estimate


@kernel
def cubic_share(share_m: float, slope: float, v0: float, v1: float) -> float:
    """Give the share of a step's time at which a share of its metres is reached.

    Parameters
    ----------
    share_m : float      in [0, 1]
    slope : float        mean speed of the step, > 0
    v0, v1 : float       speeds at its ends, >= 0
    """
    a = min(v0 / slope, 3.0)
    b = min(v1 / slope, 3.0)
    square = a * a + b * b
    if square > 9.0:
        shrink = 3.0 / math.sqrt(square)
        a *= shrink
        b *= shrink
    low = 0.0
    high = 1.0
    for _ in range(30):
        u = 0.5 * (low + high)
        p = u * (a + u * (3.0 - 2.0 * a - b + u * (a + b - 2.0)))
        if p < share_m:
            low = u
        else:
            high = u
    return 0.5 * (low + high)


@kernel
def drive_s(index: StreetIndex, step: Step, n: int, from_m: float, to_m: float, share: float) -> float:
    """Give the time to drive a stretch of a step at a share of the cruise speeds, s."""
    out = 0.0
    for i in range(n):
        low = max(step.start_m[i], from_m)
        high = min(step.start_m[i] + step.to_m[i] - step.from_m[i], to_m)
        if high > low:
            out += (high - low) / (index.edge[step.edge[i]].speed * share)
    return out


@kernel
def mouth_before(index: StreetIndex, step: Step, i: int) -> bool:
    """Tell whether a piece of a step ends at a mouth: where a vehicle waits to enter a junction."""
    e = index.edge[step.edge[i]]
    return not e.is_inside and e.to_mouth == 0.0 and step.to_m[i] >= e.length


@kernel
def long_share(
    index: StreetIndex,
    step: Step,
    n: int,
    from_m: float,
    to_m: float,
    gate_m: float,
    dt_s: float,
    stood: float,
    stands: float,
    share: float,
) -> float:
    """Give the share of a long step's time at which a gate is reached.

    Parameters
    ----------
    from_m, to_m, gate_m : float    metres along the step
    dt_s : float                    its duration
    stood, stands : float           how likely the vehicle stood at the step's start, at its end
    share : float                   of the cruise speed that is driven
    """
    whole = drive_s(index, step, n, from_m, to_m, share)
    part = drive_s(index, step, n, from_m, gate_m, share)
    slack = dt_s - whole
    if slack <= 0.0 or whole <= 0.0:
        return part / whole if whole > 0.0 else 0.5
    before = stood + ON_THE_WAY * part / whole
    every = stood + stands + ON_THE_WAY
    for i in range(n - 1):
        end = step.start_m[i] + step.to_m[i] - step.from_m[i]
        if from_m <= end <= to_m and mouth_before(index, step, i):
            every += AT_MOUTH
            if end < gate_m:
                before += AT_MOUTH
    return (part + slack * before / every) / dt_s


@kernel
def between_gates(index: StreetIndex, step: Step, n: int, at_m: float) -> bool:
    """Tell whether a place of a step lies between gates, where vehicles slow down and speed up."""
    for i in range(n):
        end = step.start_m[i] + step.to_m[i] - step.from_m[i]
        if at_m <= end or i == n - 1:
            e = index.edge[step.edge[i]]
            chainage = step.from_m[i] + at_m - step.start_m[i]
            return chainage >= e.inside_from or chainage < e.inside_to
    return False


@kernel
def standing(stay_us: int, speed_mps: float) -> float:
    """Give how likely a vehicle stood at a ping, as `AT_MOUTH` is: by its stay there, or its mean speed."""
    if stay_us > 0:
        return AT_STAY
    return AT_SLOW if 0.0 <= speed_mps < STAND_MPS else 0.0


@kernel
def gate_error_s(dt_s: float, speed_mps: float, drive_time_s: float) -> float:
    """Estimate the standard error of a gate's time: noise over speed, and slack that may lie elsewhere, s."""
    noise = NOISE_M / max(speed_mps, 0.5)
    slack = 0.0
    if dt_s > 1.5:
        slack = 0.04 * dt_s + 0.29 * max(0.0, dt_s - drive_time_s) * (1.0 if dt_s > LONG_S else 0.3)
    return math.sqrt(noise * noise + slack * slack)
