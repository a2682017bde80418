"""Passages on grids: gates where they are drawn, each reason to be unfinished, time credited exactly."""

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from stream.config import Settings, load_settings
from stream.detect.records import UNFINISHED_REASONS, Found
from stream.detect.run import Detector
from stream.network.model import Streets
from tests.grid import START_US, Row, detect, drive, end_s, endings, reasons, stand
from tests.oracle.audit import check_all
from tests.oracle.streets import grid_streets

SETTINGS = load_settings()
BLOCK, ENTRY, EXIT = 400.0, 60.0, 40.0
STREETS = grid_streets(3, BLOCK, entry_m=ENTRY, exit_m=EXIT)
# Places are kept in 1e-7 degree, 0.7 cm and 1.1 cm: at 10 m/s that is 1.1 ms at each of the pings around.
NEAR_US = 2_500


def arm(streets: Streets, node: int, toward: int) -> int:
    """Give the arm of a node's junction that leads toward another node."""
    for a, junction in enumerate(streets.arm_junction.tolist()):
        edge = int(np.flatnonzero(streets.exit_gate_arm == a)[0])
        ends = (int(streets.road_from[edge // 2]), int(streets.road_to[edge // 2]))
        if (ends if edge % 2 == 0 else ends[::-1]) == (node, toward):
            assert junction == streets.node_junction[node]
            return a
    raise ValueError("no such arm")


# Node 4 is the middle, 1 and 7 south and north of it, 3 and 5 west and east.
WEST, EAST, SOUTH, NORTH = (arm(STREETS, 4, node) for node in (3, 5, 1, 7))
MIDDLE = (BLOCK, BLOCK)


@pytest.fixture(scope="module")
def detector() -> Detector:
    """Give a detector on one thread."""
    return Detector(STREETS, SETTINGS, threads=1)


def found_of(detector: Detector, rows: list[Row]) -> Found:
    """Detect, and check all that must hold."""
    found = detect(detector, rows)
    check_all(found, STREETS)
    return found


@pytest.mark.parametrize("speed_mps", [5.0, 10.0, 17.0])
@pytest.mark.parametrize("every_s", [0.5, 1.0, 2.0])
@pytest.mark.parametrize(
    ("to", "out"),
    [((BLOCK + 300.0, BLOCK), EAST), ((BLOCK, BLOCK + 300.0), NORTH), ((BLOCK, BLOCK - 300.0), SOUTH)],
)
def test_gates_of_steady_drives_are_timed_by_their_place(
    detector: Detector, speed_mps: float, every_s: float, to: tuple[float, float], out: int
) -> None:
    """At a steady speed a gate's time is its distance over the speed, straight on and round corners."""
    found = found_of(detector, drive([(100.0, BLOCK), MIDDLE, to], speed_mps, every_s))
    assert len(found.passages) == 1
    p = found.passages[0]
    assert (int(p["arm_in_ix"]), int(p["arm_out_ix"])) == (WEST, out)
    # A step that cuts the corner is shorter than the way; the gates lie over 35 m from it.
    for at_m, t_us in [(300.0 - ENTRY, p["entry_us"]), (300.0 + EXIT, p["exit_us"])]:
        assert abs(START_US + at_m / speed_mps * 1e6 - int(t_us)) < NEAR_US * 10.0 / speed_mps
    assert abs(float(p["entry_speed_mps"]) - speed_mps) < 0.05
    assert p["max_step_ms"] == every_s * 1000
    assert abs(p["n_pings"] - (ENTRY + EXIT) / speed_mps / every_s) <= 1.0
    assert abs(p["inside_m"]) < 0.05


def test_section_runs_from_exit_gate_to_entry_gate(detector: Detector) -> None:
    """Between two junctions the section has the road's length less the gates, and the time between them."""
    # Along the western side: junctions at (0, 400) only; along the middle: (0, 400), (400, 400), (800, 400).
    found = found_of(detector, drive([(0.0, 100.0), (0.0, BLOCK), (BLOCK, BLOCK), (BLOCK + 300.0, BLOCK)]))
    assert len(found.passages) == 2
    s = found.sections[0]
    assert abs(float(s["path_m"]) - (BLOCK - ENTRY - EXIT)) < 0.05
    assert (int(s["from_us"]), int(s["to_us"])) == (
        int(found.passages["exit_us"][0]),
        int(found.passages["entry_us"][1]),
    )
    assert int(s["arm_from_ix"]) == int(found.passages["arm_out_ix"][0]) == arm(STREETS, 3, 4)
    assert int(s["arm_to_ix"]) == int(found.passages["arm_in_ix"][1]) == WEST


def test_stand_inside_is_slow_time_and_at_the_gate_a_queue(detector: Detector) -> None:
    """A stand at the stop line counts as slow time; one that reaches past the entry gate is told."""
    rows = drive([(100.0, BLOCK), (390.0, BLOCK)])
    rows += stand((390.0, BLOCK), end_s(rows), 40.0, 1.0)
    rows += drive([(400.0, BLOCK), (700.0, BLOCK)], start_s=end_s(rows) + 1.0)
    p = found_of(detector, rows).passages[0]
    assert abs(int(p["slow_ms"]) - 40_000) <= 1_000
    assert p["is_queued_at_gate"] == 0
    assert abs(int(p["exit_us"]) - int(p["entry_us"]) - 50_000_000) < NEAR_US
    rows = drive([(100.0, BLOCK), (330.0, BLOCK)])
    rows += stand((330.0, BLOCK), end_s(rows), 40.0, 1.0)
    rows += drive([(340.0, BLOCK), (700.0, BLOCK)], start_s=end_s(rows) + 1.0)
    p = found_of(detector, rows).passages[0]
    assert p["is_queued_at_gate"] == 1
    assert p["slow_ms"] <= 1_000


def to_inside() -> list[Row]:
    """Drive to 15 m before the middle, well past the entry gate."""
    return drive([(200.0, BLOCK), (385.0, BLOCK)])


def by_gap() -> list[Row]:
    """Fall silent inside, and come back beyond the limit."""
    rows = to_inside()
    return rows + drive([(600.0, BLOCK), (700.0, BLOCK)], start_s=end_s(rows) + 121.0)


def by_dwell() -> list[Row]:
    """Cross the gate, fall back before it as noise does, and stand there."""
    rows = drive([(200.0, BLOCK), (360.0, BLOCK)])
    return rows + stand((333.0, BLOCK), end_s(rows), 400.0)


def by_break() -> list[Row]:
    """Leave the streets inside, for many anchors, at a walk: no street within 40 m, no way to the next."""
    rows = to_inside()
    return rows + drive([(345.0, 340.0), (200.0, 200.0)], 5.0, start_s=end_s(rows) + 2.0)


def by_close() -> list[Row]:
    """End with the archive, inside."""
    return to_inside()


def by_timeout() -> list[Row]:
    """Stand inside beyond max_passage_s."""
    rows = to_inside()
    return rows + stand((385.0, BLOCK), end_s(rows), 1000.0)


def by_turning_back() -> list[Row]:
    """Cross the entry gate, turn before the place of the exit gate, and go to another junction's gate."""
    return drive([(200.0, BLOCK), (352.0, BLOCK), (50.0, BLOCK)])


WAYS: dict[str, Callable[[], list[Row]]] = {
    "gap": by_gap,
    "dwell": by_dwell,
    "break": by_break,
    "close": by_close,
    "timeout": by_timeout,
    "turned_back": by_turning_back,
}


@pytest.mark.parametrize("reason", UNFINISHED_REASONS)
def test_each_reason_leaves_a_passage_unfinished(detector: Detector, reason: str) -> None:
    """Each way to enter and not to come out leaves the passage of the western arm unfinished."""
    rows = WAYS[reason]()
    found = found_of(detector, rows)
    # Whoever turns back is seen to have done so at the next junction's gate, whose passage the close ends.
    assert reasons(found) == [reason, *(["close"] if reason == "turned_back" else [])]
    assert found.unfinished["arm_in_ix"][0] == WEST
    assert len(found.passages) == 0
    entry_us = START_US + (BLOCK - ENTRY - 200.0) / 10.0 * 1e6
    assert abs(int(found.unfinished["entry_us"][0]) - entry_us) < NEAR_US


def test_last_sight_of_an_unfinished_passage_is_its_last_ping(detector: Detector) -> None:
    """After a gap or the close the last sight is the last ping; after a timeout, where the stand began."""
    for ways in (by_gap, by_close):
        assert found_of(detector, ways()).unfinished["last_us"].tolist() == [to_inside()[-1][0]]
    found = found_of(detector, by_timeout())
    assert found.unfinished["last_us"].tolist() == found.trips["end_us"].tolist()
    assert endings(found) == ["dwell"]


def test_turning_at_the_crossing_is_a_reversal(detector: Detector) -> None:
    """In over the gate, to the crossing and back over the same arm is a passage in reverse."""
    found = found_of(detector, drive([(200.0, BLOCK), (403.0, BLOCK), (200.0, BLOCK)]))
    pairs = list(
        zip(found.passages["arm_in_ix"].tolist(), found.passages["arm_out_ix"].tolist(), strict=True)
    )
    assert pairs == [(WEST, WEST)]
    assert len(found.unfinished) == 0


def test_time_between_first_and_last_gate_is_split_without_rest(detector: Detector) -> None:
    """Two passages, a section between, a turn back and the way to the next gate: each gets its own time."""
    rows = drive([(0.0, 100.0), (0.0, BLOCK), (352.0, BLOCK), (0.0, BLOCK), (0.0, 100.0)])
    found = found_of(detector, rows)
    t = found.trips[0]
    assert int(t["last_gate_us"]) - int(t["first_gate_us"]) == sum(
        int(t[name]) for name in ("passage_us", "section_us", "unfinished_us", "other_us")
    )
    assert reasons(found) == ["turned_back"]
    assert len(found.passages) == 2
    # Out at 40 m to the gate at 340; in there, on to 352 and back to the gate at 60; all at 10 m/s.
    assert abs(int(t["section_us"]) - 30_000_000) < 2 * NEAR_US
    assert abs(int(t["unfinished_us"]) - (12 + 292) * 100_000) < 2 * NEAR_US
    assert int(t["other_us"]) == 0
    assert int(t["passage_us"]) == int((found.passages["exit_us"] - found.passages["entry_us"]).sum())


def test_time_after_a_break_belongs_to_nothing(detector: Detector) -> None:
    """Off the streets and on again: the time from the last gate to the next one is unfinished time."""
    rows = by_break()
    rows += drive([(200.0, 300.0), (200.0, BLOCK), (700.0, BLOCK)], start_s=end_s(rows) + 10.0)
    found = found_of(detector, rows)
    assert found.trips["n_breaks"].tolist() == [1]
    assert len(found.passages) == 1
    t = found.trips[0]
    assert int(t["unfinished_us"]) == int(found.passages["entry_us"][0]) - int(t["first_gate_us"])
    assert int(t["other_us"]) == 0


def test_time_to_an_exit_gate_after_a_break_is_unfinished_time(detector: Detector) -> None:
    """Off the streets inside, on again behind a crossing: the time to the exit gate there is unfinished."""
    rows = by_break()
    rows += drive([(BLOCK, 420.0), (BLOCK, 700.0)], start_s=end_s(rows) + 10.0)
    found = found_of(detector, rows)
    t = found.trips[0]
    assert (reasons(found), len(found.passages)) == (["break"], 0)
    assert int(t["first_gate_us"]) == int(found.unfinished["entry_us"][0])
    assert abs(int(t["last_gate_us"]) - rows[-1][0] + (700.0 - 440.0) / 10.0 * 1e6) < NEAR_US
    assert int(t["unfinished_us"]) == int(t["last_gate_us"]) - int(t["first_gate_us"])
    assert (int(t["other_us"]), int(t["section_us"])) == (0, 0)


def test_trip_that_meets_no_gate_has_none(detector: Detector) -> None:
    """A drive within a block has no gate, no time to split, and its length."""
    t = found_of(detector, drive([(60.0, BLOCK), (300.0, BLOCK)])).trips[0]
    assert (int(t["first_gate_us"]), int(t["last_gate_us"])) == (-1, -1)
    assert abs(int(t["path_mm"]) - 240_000) < 30


@pytest.mark.parametrize("every_s", [1.0, 5.0, 10.0, 30.0])
def test_gate_times_never_run_backward_along_the_path(detector: Detector, every_s: float) -> None:
    """Along noisy drives at any interval, each gate is passed at or after the one before."""
    for seed in range(6):
        corners = [(100.0, BLOCK), MIDDLE, (BLOCK, 0.0), (0.0, 0.0), (0.0, BLOCK), MIDDLE, (BLOCK, 700.0)]
        rows = drive(corners, 11.0, every_s, noise_m=4.0, seed=seed)
        found = found_of(detector, rows)
        order = np.sort(np.concatenate([found.passages["entry_us"], found.sections["from_us"]]))
        ends = np.sort(np.concatenate([found.passages["exit_us"], found.sections["to_us"]]))
        assert (order <= ends).all()
        assert (ends[:-1] <= order[1:]).all()
        assert len(found.passages) >= 3


def settings_with(make_settings: Any, **over: float) -> Settings:
    """Give settings with some values of `passages` changed."""
    return make_settings({f"passages.{name}": value for name, value in over.items()})


def test_slow_and_queue_limits_come_from_the_settings(make_settings: Any) -> None:
    """At 3 m/s throughout, nothing is slow below 5 km/h; below 12 km/h all of it is, and a queue."""
    rows = drive([(200.0, BLOCK), (600.0, BLOCK)], 3.0)
    fast = Detector(STREETS, settings_with(make_settings, slow_kmh=5, queue_kmh=6), threads=1)
    slow = Detector(STREETS, settings_with(make_settings, slow_kmh=12, queue_kmh=12), threads=1)
    p, q = found_of(fast, rows).passages[0], found_of(slow, rows).passages[0]
    assert (int(p["slow_ms"]), int(p["is_queued_at_gate"])) == (0, 0)
    assert (int(q["slow_ms"]), int(q["is_queued_at_gate"])) == (
        (int(q["exit_us"]) - int(q["entry_us"])) // 1000,
        1,
    )
