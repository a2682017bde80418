"""The demo's drivers against formulas: gap acceptance, uniform delay at a signal, kinematics of stops."""

import math

import numpy as np
import pytest

from stream.demo.draw import gap_wait_s, seeds
from stream.demo.holds import CYCLE_S, FLOW, GAP_S, GREEN_S, HEADWAY_S, LOOK_S, NO_RULE, QUEUE, SIGNAL, STOP
from stream.demo.motion import leg_kernel
from tests.straight import seconds, send, straight


@pytest.mark.parametrize(
    ("per_hour", "mean_s", "share_zero"), [(300, 1.917, 0.597), (600, 4.663, 0.356), (900, 8.646, 0.212)]
)
def test_gap_wait_is_adams(per_hour, mean_s, share_zero):
    """Mean wait and share without wait for a gap of 6.2 s follow Adams 1936.

    Source: W. F. Adams 1936, (exp(q g) - 1) / q - g and exp(-q g); figures METHODS.md section 7 (formula
    from memory, figures computed there).
    """
    state = seeds(1, np.random.default_rng(1))
    waits = np.array([gap_wait_s(state, 0, per_hour / 3600.0, 6.2) for _ in range(100_000)])
    error = waits.std() / math.sqrt(waits.size)
    assert (
        abs(waits.mean() - mean_s) < 4.0 * error + 0.0005
    )  # four standard errors, and the figure's rounding
    share = (waits == 0.0).mean()
    assert abs(share - share_zero) < 4.0 * math.sqrt(share_zero * (1 - share_zero) / waits.size) + 0.0005


def test_stop_line_wait_is_adams_when_driven():
    """Vehicles driven to a stop line stand there for the look and Adams' mean wait, 600 vehicles an hour.

    Source: as above; the rest of the delay is v / 2a + v / 2d (METHODS.md section 6).
    """
    v, a, d, n = 50 / 3.6, 1.5, 2.0, 20_000
    start = np.arange(n) * 10.0
    rule = {FLOW: 600 / 3600, GAP_S: 6.2}
    held = seconds(send(straight(STOP, rule, v), start, a, d, is_random=True))
    free = seconds(send(straight(NO_RULE, {}, v), start[:1], a, d))[0]
    waits = held - free - v / (2 * a) - v / (2 * d) - LOOK_S
    assert abs(waits.mean() - 4.663) < 4.0 * waits.std() / math.sqrt(n)
    assert waits.min() == pytest.approx(0.0, abs=2e-6)  # times are whole microseconds


@pytest.mark.parametrize(
    ("cycle_s", "green_s", "load"),
    [
        (60, 30, 0.5),
        (60, 30, 0.8),
        (90, 36, 0.774),
        (90, 36, 0.9),
        (100, 30, 0.5),
        (80, 48, 0.6),
        (120, 30, 0.95),
    ],
)
def test_signal_delay_is_uniform_delay(cycle_s, green_s, load):
    """Mean delay of evenly spread arrivals at a fixed-time signal is d1 of the Highway Capacity Manual.

    Source: d1 = C (1 - g/C)^2 / (2 (1 - X g/C)), METHODS.md section 7. Green starts v / 2a earlier in the
    model than in the formula: what a start from rest loses is the formula's lost time.
    """
    v, a, d, n = 14.0, 1.25, 2.0, 3000
    lost_s = v / (2 * a)
    flow = load * green_s / cycle_s / HEADWAY_S
    rule = {CYCLE_S: cycle_s, GREEN_S: green_s + lost_s, QUEUE: flow}
    start = (np.arange(n) + 0.5) * cycle_s / n + 10 * cycle_s
    held = seconds(send(straight(SIGNAL, rule, v), start, a, d))
    free = seconds(send(straight(NO_RULE, {}, v), start[:1], a, d))[0]
    delay = held - free
    ratio = green_s / cycle_s
    expected = 0.5 * cycle_s * (1 - ratio) ** 2 / (1 - load * ratio)
    assert delay.mean() == pytest.approx(expected, rel=0.003)  # 3000 steps a cycle, queues in whole drives


def test_signal_delay_distribution_is_uniform_with_an_atom():
    """C 60, red 30, y 0.25: a third undelayed, median 7.50, P85 23.25, P95 27.75 s.

    Source: METHODS.md section 7, whole distribution (computed there from the queue's geometry).
    """
    v, a, d, n = 14.0, 1.25, 2.0, 6000
    rule = {CYCLE_S: 60.0, GREEN_S: 30.0 + v / (2 * a), QUEUE: 0.25 / HEADWAY_S}
    start = (np.arange(n) + 0.5) * 60.0 / n + 600.0
    free = seconds(send(straight(NO_RULE, {}, v), start[:1], a, d))[0]
    delay = np.sort(seconds(send(straight(SIGNAL, rule, v), start, a, d)) - free)
    assert (delay < 0.01).mean() == pytest.approx(1 / 3, abs=0.002)
    for q, expected in ((0.5, 7.50), (0.85, 23.25), (0.95, 27.75)):
        assert delay[math.ceil(q * n) - 1] == pytest.approx(expected, abs=0.03)  # a step is 0.01 s


@pytest.mark.parametrize(("a", "d", "loss_s"), [(1.5, 2.0, 8.102), (1.2, 1.5, 10.417)])
def test_full_stop_costs_v_over_2a_and_2d(a, d, loss_s):
    """A full stop from 50 km/h without a wait costs v/(2d) + v/(2a). Source: METHODS.md section 6."""
    v = 50 / 3.6
    start = np.zeros(1)
    held = seconds(send(straight(STOP, {}, v), start, a, d))[0]
    free = seconds(send(straight(NO_RULE, {}, v), start, a, d))[0]
    assert held - free - LOOK_S == pytest.approx(loss_s, abs=0.0006)  # three printed digits


def test_slow_bend_costs_the_kinematic_loss():
    """From 50 to 20 km/h, 15 m at that, and back: 4.537 s. Source: METHODS.md section 6."""
    v, u = 50 / 3.6, 20 / 3.6
    at_m, cap = np.array([0.0, 500.0, 515.0, 1000.0]), np.array([v, u, v])
    t_out, s_out, w = np.zeros(2000), np.zeros(2000), np.zeros(8)
    t, speed, n = leg_kernel(at_m, cap, 0, 0.0, v, 0.0, 1000.0, v, 1.5, 2.0, w, t_out, s_out, 0)
    assert t - 1000.0 / v == pytest.approx(4.537, abs=0.0006)
    assert speed == pytest.approx(v)
    assert s_out[n - 1] == 1000.0
