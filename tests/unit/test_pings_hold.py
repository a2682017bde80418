"""Pings held back."""

import numpy as np
import pytest

from stream.pings import HoldBack

S = 1_000_000


def push(hold: HoldBack, *pings: tuple[int, int]) -> list[tuple[int, int]]:
    """Put in pings of (vehicle, second) and take out those set free."""
    vehicle = np.array([v for v, _ in pings], np.int32)
    t_us = np.array([t * S for _, t in pings], np.int64)
    place = np.arange(len(pings), dtype=float)
    out = hold.push(vehicle, t_us, place, -place)
    assert out[2].tolist() == (-out[3]).tolist()
    return list(zip(out[0].tolist(), (out[1] // S).tolist(), strict=True))


def test_ping_is_held_until_its_vehicle_is_past_it() -> None:
    """With 10 s of lateness, a ping of second 5 waits for one of second 15 or later."""
    hold = HoldBack(10 * S)
    assert push(hold, (0, 5), (0, 14)) == []
    assert push(hold, (0, 15)) == [(0, 5)]
    assert len(hold) == 2


def test_pings_come_out_in_order_of_time() -> None:
    """What came in mixed up comes out in order."""
    hold = HoldBack(10 * S)
    assert push(hold, (0, 3), (0, 1), (0, 2), (0, 20)) == [(0, 1), (0, 2), (0, 3)]


def test_vehicles_do_not_wait_for_each_other() -> None:
    """Another vehicle's newest ping sets nothing free."""
    hold = HoldBack(10 * S)
    assert push(hold, (0, 5), (1, 100), (1, 111)) == [(1, 100)]


def test_late_ping_passes_through() -> None:
    """Older than the newest by more than the lateness: out at once, behind what is out already."""
    hold = HoldBack(10 * S)
    assert push(hold, (0, 5), (0, 20), (0, 4), (0, 9), (0, 10)) == [(0, 5), (0, 4), (0, 9), (0, 10)]


def test_one_time_comes_out_in_order_of_arrival() -> None:
    """Pings of the same time keep their order."""
    hold = HoldBack(S)
    times = np.full(3, 5 * S, np.int64)
    hold.push(np.zeros(3, np.int32), times, np.array([3.0, 1.0, 2.0]), np.zeros(3))
    assert hold.flush()[2].tolist() == [3.0, 1.0, 2.0]


def test_held_pings_are_the_whole_state() -> None:
    """What is held, given to a new one, goes on as if nothing had been."""
    hold = HoldBack(10 * S)
    push(hold, (0, 30), (0, 25), (1, 7))
    again = HoldBack(10 * S, hold.held())
    assert push(again, (0, 19), (0, 40), (1, 17)) == [(0, 19), (0, 25), (0, 30), (1, 7)]


def test_no_lateness_is_a_misuse() -> None:
    """Nothing to hold back is told to the programmer."""
    with pytest.raises(ValueError, match="lateness_us is 0"):
        HoldBack(0)
