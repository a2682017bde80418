"""What can hold a vehicle at a point of its path: a fixed wait, a fixed-time signal, a gap in a stream.

The state of a vehicle on its way is the record ``now`` (seconds, metres, m/s, piece, knots written).
Rules are rows of eight numbers; their columns are named below.
"""

import math

import numpy as np
from numpy.typing import NDArray

from stream.demo.draw import gap_wait_s, poisson, uniform
from stream.demo.motion import F64, free_mps, leg_kernel, piece_of
from stream.kernel import kernel

# Kinds of rule at the end of an edge, for one turn.
NO_RULE, FIXED, SIGNAL, SIGNAL_YIELD, STOP, GIVE_WAY = range(6)
# Columns of a rule. FIXED: share of vehicles in FLOW, longest wait in GAP_S, farthest stop in BACK_M.
BACK_M, FLOW, GAP_S, FOLLOW_S, CYCLE_S, GREEN_S, OFFSET_S, QUEUE = range(8)
# Columns of the state.
T, S, V, K, N, NEXT = range(6)  # from NEXT on the same five of the last try
# Columns of a driver.
SHARE, A, D, LATERAL, START_S, RANDOM, PARK_S = range(7)

HEADWAY_S = 2.0  # s between vehicles leaving a queue: saturation flow 1800 veh/h
SPACING_M = 7.0  # m a vehicle takes in a queue (METHODS.md section 6)
LOOK_MPS = 6.0  # m/s at a give-way line with nobody coming
HARD_MPS2 = 4.5  # m/s^2: braking harder than this for a signal, a driver goes on
FREE_MPS = 1e9  # no bound beside the caps
TRIES = 32  # halvings of the speed of a rolling pass
LOOK_S = 0.8  # s of looking after a full stop


@kernel
def lag_s(u_mps: float, v_mps: float, a: float) -> float:
    """Give how much later a start from rest is than passing at u_mps, seen far downstream at v_mps."""
    return u_mps / a * (1.0 - u_mps / (2.0 * max(v_mps, u_mps)))


@kernel
def go_kernel(
    x_m: float,
    u_mps: float,
    at_m: F64,
    cap: F64,
    brake: F64,
    car: F64,
    w: F64,
    t_out: F64,
    s_out: F64,
    now: F64,
) -> float:
    """Try to drive to x_m, passing it at most at u_mps; returns the time there.

    The knots are written behind those that count; `keep_kernel` makes them count.
    """
    k = int(now[K])
    kx = piece_of(at_m, k, x_m)
    u = min(u_mps, free_mps(at_m, cap, brake, kx, x_m, car[D]))
    t, v, n = leg_kernel(
        at_m, cap, k, now[S], now[V], now[T], x_m, u, car[A], car[D], w, t_out, s_out, int(now[N])
    )
    now[NEXT + T], now[NEXT + S], now[NEXT + V] = t, max(x_m, now[S]), v
    now[NEXT + K], now[NEXT + N] = max(kx, k), n
    return t


@kernel
def keep_kernel(now: F64) -> None:
    """Make the last try count: the vehicle is where it led."""
    for i in range(NEXT):
        now[i] = now[NEXT + i]


@kernel
def stand_kernel(until_s: float, t_out: F64, s_out: F64, now: F64) -> None:
    """Stand where the vehicle is until a time."""
    if until_s > now[T] + 1e-6:
        n = int(now[N])
        t_out[n] = until_s
        s_out[n] = now[S]
        now[T], now[V], now[N] = until_s, 0.0, n + 1


@kernel
def release_kernel(
    x_m: float, release_s: float, u_max: float, at_m: F64, cap: F64, brake: F64, car: F64, w: F64, t_out: F64,
    s_out: F64, now: F64,
) -> None:  # fmt: skip
    """Drive to x_m where the road opens at release_s: pass freely, roll through, or stop and wait.

    A vehicle that need not stop fully slows to the speed u that brings it, far downstream, exactly where
    a start from rest at the release would have brought it; so queues discharge at one headway.
    """
    if x_m <= now[S]:
        if now[V] < 0.1:
            stand_kernel(release_s, t_out, s_out, now)
        return
    kx = piece_of(at_m, int(now[K]), x_m)
    high = min(u_max, free_mps(at_m, cap, brake, kx, x_m, car[D]))
    low, u = 0.0, high
    for stage in range(TRIES):
        t = go_kernel(x_m, u, at_m, cap, brake, car, w, t_out, s_out, now)
        is_late = t >= release_s + lag_s(u, cap[kx], car[A])
        if stage == 0 and is_late:
            break
        if stage == 1 and t <= release_s:
            keep_kernel(now)
            stand_kernel(release_s, t_out, s_out, now)
            return
        if stage > 1 and is_late:
            low = u
        elif stage > 1:
            high = u
        u = 0.0 if stage == 0 else 0.5 * (low + high)
    keep_kernel(now)


@kernel
def queue_place_m(x_m: float, n_ahead: float, car: F64, now: F64) -> float:
    """Give where the vehicle would stand with n_ahead before it, not nearer than it can brake."""
    nearest = now[S] + now[V] * now[V] / (2.0 * car[D])
    return float(min(max(x_m - n_ahead * SPACING_M, nearest), x_m))


@kernel
def signal_kernel(
    x_m: float, flow: float, cycle_s: float, green_s: float, offset_s: float, at_m: F64, cap: F64, brake: F64,
    car: F64, w: F64, t_out: F64, s_out: F64, now: F64, seed: NDArray[np.int64], trip: int,
) -> float:  # fmt: skip
    """Pass a fixed-time signal behind a queue of the others; returns when the green used ends.

    Others arrive since the start of red: Poisson with RANDOM drivers, else at a uniform rate (then the
    delay is the uniform delay d1 of the Highway Capacity Manual, METHODS.md section 7).
    """
    n_ahead, opened_s, end_s = -1.0, -1e18, 0.0
    for _ in range(8):
        t_free = go_kernel(x_m, FREE_MPS, at_m, cap, brake, car, w, t_out, s_out, now)
        turn = math.floor((car[START_S] + t_free - offset_s) / cycle_s)
        green_at = turn * cycle_s + offset_s - car[START_S]
        is_green = t_free < green_at + green_s
        red_at = green_at + green_s - (cycle_s if is_green else 0.0)
        green_at += 0.0 if is_green else cycle_s
        end_s = green_at + green_s
        if n_ahead < 0.0:
            n_ahead = flow * (t_free - red_at)
            if car[RANDOM] > 0.0:
                n_ahead = float(poisson(seed, trip, n_ahead))
        elif is_green and abs(green_at - opened_s) < 1e-3:
            break
        else:
            n_ahead = max(0.0, n_ahead - math.floor(green_s / HEADWAY_S))
        if now[V] * now[V] > 2.0 * HARD_MPS2 * max(x_m - now[S], 0.1):
            break  # too near to stop: goes on
        opened_s = green_at
        place = queue_place_m(x_m, n_ahead, car, now)
        shift = max(0.3, HEADWAY_S - SPACING_M / cap[piece_of(at_m, int(now[K]), x_m)])
        release_kernel(
            place, green_at + n_ahead * shift, FREE_MPS, at_m, cap, brake, car, w, t_out, s_out, now
        )
    go_kernel(x_m, FREE_MPS, at_m, cap, brake, car, w, t_out, s_out, now)
    keep_kernel(now)
    return end_s


@kernel
def yield_kernel(
    x_m: float, flow: float, gap_s: float, follow_s: float, queue: float, u_mps: float, latest_s: float,
    at_m: F64, cap: F64, brake: F64, car: F64, w: F64, t_out: F64, s_out: F64, now: F64,
    seed: NDArray[np.int64], trip: int,
) -> None:  # fmt: skip
    """Wait at a line for a gap in a Poisson stream, behind those who wait already; not past latest_s.

    u_mps is the speed at the line with nobody coming; 0 means a full stop.
    """
    n_ahead, others_s = 0, 0.0
    while n_ahead < 4 and uniform(seed, trip) < queue:
        n_ahead += 1
        others_s += min(gap_wait_s(seed, trip, flow, gap_s), 60.0) + follow_s
    if n_ahead > 0:
        place = queue_place_m(x_m, float(n_ahead), car, now)
        t_free = go_kernel(place, LOOK_MPS, at_m, cap, brake, car, w, t_out, s_out, now)
        release_kernel(place, t_free + others_s, LOOK_MPS, at_m, cap, brake, car, w, t_out, s_out, now)
    t_line = go_kernel(x_m, u_mps, at_m, cap, brake, car, w, t_out, s_out, now)
    wait_s = gap_wait_s(seed, trip, flow, gap_s) + (LOOK_S if u_mps == 0.0 else 0.0)
    wait_s = min(wait_s, max(latest_s - t_line, 0.0))
    if wait_s > 0.0:
        release_kernel(x_m, t_line + wait_s, u_mps, at_m, cap, brake, car, w, t_out, s_out, now)
    else:
        keep_kernel(now)


@kernel
def hold_kernel(
    kind: int, x_m: float, rule: F64, r: int, level: float, at_m: F64, cap: F64, brake: F64, car: F64, w: F64,
    t_out: F64, s_out: F64, now: F64, seed: NDArray[np.int64], trip: int,
) -> None:  # fmt: skip
    """Bring the vehicle past the end of an edge at x_m under row r of the rules; `level` scales flows."""
    line = max(x_m - rule[r, BACK_M], now[S])
    flow = rule[r, FLOW] * level
    u, latest, gate = LOOK_MPS, 1e18, line
    if kind == FIXED:
        place = x_m - 1.0 - uniform(seed, trip) * rule[r, BACK_M]
        place = max(place, now[S] + now[V] * now[V] / (2.0 * car[D]))
        wait_s = uniform(seed, trip) * rule[r, GAP_S]
        if uniform(seed, trip) < rule[r, FLOW] and place < x_m:  # else too near to brake: no stop
            release_kernel(place, 0.0, 0.0, at_m, cap, brake, car, w, t_out, s_out, now)
            stand_kernel(now[T] + wait_s, t_out, s_out, now)
        release_kernel(x_m, 0.0, FREE_MPS, at_m, cap, brake, car, w, t_out, s_out, now)
        return
    if kind in (SIGNAL, SIGNAL_YIELD):
        latest = 2.0 + signal_kernel(
            line, rule[r, QUEUE] * level, rule[r, CYCLE_S], rule[r, GREEN_S], rule[r, OFFSET_S],
            at_m, cap, brake, car, w, t_out, s_out, now, seed, trip,
        )  # fmt: skip
        if kind == SIGNAL:
            return
        gate = x_m
    if kind == STOP:
        u = 0.0
    queue = 0.0 if kind == SIGNAL_YIELD else rule[r, QUEUE]
    yield_kernel(
        gate, flow, rule[r, GAP_S], rule[r, FOLLOW_S], queue, u, latest,
        at_m, cap, brake, car, w, t_out, s_out, now, seed, trip,
    )  # fmt: skip
