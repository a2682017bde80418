"""Times lost by braking and speeding up, through the whole job: road, pings, store, exported passages.

Source of all formulas: uniform acceleration (any textbook of mechanics), as METHODS.md section 6 has them;
its values were computed there from the formulas, independently of this program. Pings at 1 s without noise.
"""

import math
from collections.abc import Callable
from pathlib import Path

import polars as pl
import pytest

from stream.config import Settings, load_settings
from tests.sketch import Sketch
from tests.trajectory import Motion, Path2D, Row, crosses, pings, straight, whole_job

Make = Callable[..., Settings]
START_S = 1_772_524_800  # 2026-03-03T08:00:00Z
PHASES_S = (0.0, 0.17, 0.39, 0.5, 0.71, 0.93)  # of the receiver against the motion
LIMITS_KMH = (30, 40, 50, 60, 80)
ARM_M = 700.0

# km/h, speeding up, braking (m/s^2), wait (s)
STOPS = [
    (50, 1.5, 2.0, 0.0),
    (50, 1.5, 2.0, 20.0),
    (50, 1.2, 1.5, 7.3),
    (30, 1.0, 1.5, 41.25),
    (40, 1.3, 3.4, 12.6),
    (60, 2.0, 2.5, 3.1),
    (80, 1.5, 2.0, 61.7),
]


def lost_s(kmh: float, a: float, d: float, wait_s: float) -> float:
    """Give what a full stop costs: v/2a + v/2d and the wait (METHODS.md section 6)."""
    v = kmh / 3.6
    return v / (2.0 * a) + v / (2.0 * d) + wait_s


def stop_drive(kmh: float, a: float, d: float, wait_s: float) -> Motion:
    """Cruise, brake to a stand at the mouth, wait, speed up to the cruise speed again."""
    motion = Motion(-450.0, kmh / 3.6)
    motion.brake_at(0.0, 0.0, d)
    motion.stand(wait_s)
    motion.speed_up(kmh / 3.6, a)
    motion.cruise_to(600.0)
    return motion


def each_phase(name: str, path: Path2D, drive: Callable[[], Motion]) -> list[Row]:
    """Give the pings of one vehicle for each phase, named `name/phase`."""
    rows: list[Row] = []
    for phase_s in PHASES_S:
        rows += pings(f"{name}/{phase_s}", path, drive(), START_S + 1.0 - phase_s, 550.0)
    return rows


def delays(passages: pl.DataFrame) -> pl.DataFrame:
    """Give name, phase and delay_s of each passage."""
    part = pl.col("vehicle").str.split("/")
    return passages.select(
        name=part.list.get(0),
        phase=part.list.get(1),
        delay_s=pl.col("delay_ms") / 1000.0,
        maneuver="maneuver",
    )


def bend(sketch: Sketch, k: int, radius_m: float) -> list[int]:
    """Draw a road that comes from the west and bends by 90 degrees to the south, its 15 m arc in 16 steps.

    A side street joins in the middle of the arc, so the junction's mouth lies there.
    """
    steps, x0, y0 = 16, 0.0, 4000.0
    nodes = []
    for i in range(steps + 1):
        angle = 0.5 * math.pi * i / steps
        node = k + 10 + i
        sketch.node(node, x0 + radius_m * math.sin(angle), y0 + radius_m * math.cos(angle) - radius_m)
        nodes.append(node)
    sketch.node(k + 1, x0 - 600.0, y0)
    sketch.node(k + 2, x0 + radius_m, y0 - radius_m - 600.0)
    sketch.node(k + 3, x0 + 120.0, y0 + 120.0)
    chain = [k + 1, *nodes, k + 2]
    sketch.way(k + 6, chain, {"highway": "secondary", "maxspeed": "50"})
    sketch.way(k + 7, [nodes[steps // 2], k + 3])
    return chain


@pytest.fixture(scope="module")
def measured(tmp_path_factory: pytest.TempPathFactory) -> pl.DataFrame:
    """Drive all stops and the bend through one job.

    Gates 250 m from the mouth: all braking (at most 123 m, 80 km/h at 2.0) and all of the run-up (at most
    165 m, 80 km/h at 1.5) lie between them, and both are passed at the cruise speed.
    """
    over = {"gates": {"entry_m": 250, "exit_m": 250}, "privacy": {"plain_ids": True}}
    sketch = crosses(LIMITS_KMH, ARM_M)
    rows: list[Row] = []
    for case in STOPS:
        path = straight(sketch, LIMITS_KMH.index(case[0]))
        rows += each_phase(repr(case), path, lambda case=case: stop_drive(*case))
    chain = bend(sketch, 1000, 15.0 / (0.5 * math.pi))
    arc = Path2D(sketch, chain, chain[len(chain) // 2])

    def turn() -> Motion:
        motion = Motion(-450.0, 50 / 3.6)
        motion.brake_at(-7.5, 20 / 3.6, 2.0)
        motion.cruise_to(7.5)
        motion.speed_up(50 / 3.6, 1.5)
        motion.cruise_to(560.0)
        return motion

    rows += each_phase("bend", arc, turn)
    return delays(whole_job(tmp_path_factory.mktemp("job"), sketch, rows, load_settings(over=over)))


@pytest.mark.parametrize("case", STOPS, ids=str)
def test_full_stop_costs_what_kinematics_say(
    measured: pl.DataFrame, case: tuple[int, float, float, float]
) -> None:
    """v/2a + v/2d and the wait at the stop line, within 0.1 s for each phase of the receiver."""
    got = measured.filter(pl.col("name") == repr(case))
    assert got.height == len(PHASES_S)
    assert set(got["maneuver"]) == {"through"}
    wanted = lost_s(*case)
    assert got["delay_s"].to_list() == pytest.approx([wanted] * len(PHASES_S), abs=0.1)


def test_full_stop_value_of_the_table(measured: pl.DataFrame) -> None:
    """50 km/h at 1.5 and 2.0 m/s^2 cost 8.102 s, at 1.2 and 1.5 10.417 s (METHODS.md section 6)."""
    for case, wanted in (((50, 1.5, 2.0, 0.0), 8.102), ((50, 1.2, 1.5, 7.3), 10.417 + 7.3)):
        got = measured.filter(pl.col("name") == repr(case))["delay_s"]
        assert got.to_list() == pytest.approx([wanted] * len(PHASES_S), abs=0.1)


def test_slowing_to_a_turn_costs_what_kinematics_say(measured: pl.DataFrame) -> None:
    """50 to 20 km/h, 15 m of arc at 20, back at 1.5 m/s^2: 4.537 s (METHODS.md section 6), within 0.1 s."""
    got = measured.filter(pl.col("name") == "bend")
    assert set(got["maneuver"]) == {"right"}
    assert got["delay_s"].to_list() == pytest.approx([4.537] * len(PHASES_S), abs=0.1)


# METHODS.md section 6: share of the loss of speeding up at 1.5 m/s^2 that an exit gate at L m still sees.
SEEN = {
    40: {40: 1.000, 50: 0.955, 60: 0.883, 80: 0.743},
    60: {40: 1.000, 50: 0.999, 60: 0.962, 80: 0.843},
    100: {40: 1.000, 50: 1.000, 60: 1.000, 80: 0.951},
}
MISSED_S = {40: 1.90, 60: 1.16, 100: 0.36}  # same table, at 80 km/h


@pytest.mark.parametrize("exit_m", SEEN)
def test_exit_gate_sees_the_share_of_the_table(tmp_path: Path, make_settings: Make, exit_m: int) -> None:
    """A start from rest at the mouth shows in the delay by the tabulated share of v/2a.

    Within 0.03 s: linear interpolation while speeding up is wrong by at most a/8v = 0.017 s at the slowest
    gate (METHODS.md section 5), plus the table's and the coordinates' rounding. The entry gate stands 250 m
    away, so the braking loss v/2d and the wait are seen whole.
    """
    a, d, wait_s = 1.5, 2.0, 9.0
    settings = make_settings({"gates.entry_m": 250, "gates.exit_m": exit_m, "privacy.plain_ids": True})
    limits = tuple(SEEN[exit_m])
    sketch = crosses(limits, ARM_M)
    rows: list[Row] = []
    for i, kmh in enumerate(limits):
        rows += each_phase(str(kmh), straight(sketch, i), lambda kmh=kmh: stop_drive(kmh, a, d, wait_s))
    got = delays(whole_job(tmp_path, sketch, rows, settings))
    for kmh, share in SEEN[exit_m].items():
        whole_s = kmh / 3.6 / (2.0 * a)
        before_s = kmh / 3.6 / (2.0 * d) + wait_s
        seen_s = [x - before_s for x in got.filter(pl.col("name") == str(kmh))["delay_s"]]
        assert seen_s == pytest.approx([share * whole_s] * len(PHASES_S), abs=0.03)
        if kmh == 80:
            assert [whole_s - x for x in seen_s] == pytest.approx(
                [MISSED_S[exit_m]] * len(PHASES_S), abs=0.03
            )
