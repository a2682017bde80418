"""Uniform delay at a fixed-time signal, commands as a user runs them: network, ingest, quantiles.

Source: uniform delay d1 of the Highway Capacity Manual as METHODS.md section 7 gives it (read there in
T. Mathew's lectures; Webster 1958 has the same first term), and the whole distribution of the same model.

Trajectories: the kinematic wave of a fluid queue (Lighthill and Whitham 1955; Newell 2002, from memory).
Vehicles come at a uniform rate at the limit, stop at once where the queue's tail stands by then, start at
once when the wave of starting reaches them and pass the stop line one saturation headway apart. So they
stand where a real queue would, up to 120 m back, all of it inside gates of 250 m; and braking costs nothing,
as in the formula, whose effective times of red and green hold that loss. Probes are spread evenly over the
cycle's arrivals, so the only error of sampling is their spacing.
"""

from dataclasses import dataclass
from typing import Any

import polars as pl
import pytest

from tests.command import done, done_json
from tests.trajectory import Motion, Row, crosses, frame, pings, straight

START_S = 1_772_524_800  # 2026-03-03T08:00:00Z, taken as the beginning of red
LIMIT_KMH = 50
V_MPS = LIMIT_KMH / 3.6
SPACING_M = 7.0  # of vehicles in a queue, METHODS.md section 6
GATE_M = 250.0
N_PROBES = 180


@dataclass(frozen=True)
class Signal:
    """Cycle and effective green, s; flow and saturation flow, veh/h; d1 as tabulated, s (0: no table)."""

    cycle_s: float
    green_s: float
    flow: float
    saturation: float
    d1_s: float

    @property
    def ratio(self) -> float:
        """Give X, flow over capacity."""
        return self.flow / (self.saturation * self.green_s / self.cycle_s)

    def uniform_s(self) -> float:
        """Give d1 = 0.5 C (1 - g/C)^2 / (1 - min(1, X) g/C)."""
        share = self.green_s / self.cycle_s
        return 0.5 * self.cycle_s * (1 - share) ** 2 / (1 - min(1.0, self.ratio) * share)

    def drive(self, phase_s: float) -> Motion:
        """Give the motion of a probe that would pass the stop line phase_s after the beginning of red."""
        red_s = self.cycle_s - self.green_s
        headway_s = 3600.0 / self.saturation
        ahead = self.flow / 3600.0 * phase_s
        motion = Motion(-GATE_M - 50.0, V_MPS)
        leaves_s = red_s + ahead * headway_s
        if leaves_s > phase_s:
            place_m = -ahead * SPACING_M
            assert place_m > -GATE_M / 2
            motion.cruise_to(place_m)
            motion.stand(leaves_s - phase_s)
            motion.v_mps = V_MPS
        motion.cruise_to(GATE_M + 100.0)
        return motion


# All check cases of METHODS.md section 7 with X < 1, the two of Webster's formula (first term) among them;
# the last two widen the range of g/C and X and have no table: the formula alone.
SIGNALS = (
    Signal(60, 30, 1200, 3000, 12.50),
    Signal(60, 30, 360, 1440, 10.00),
    Signal(90, 36, 600, 1900, 23.677),
    Signal(100, 30, 500, 1800, 33.923),
    Signal(60, 30, 600, 1800, 11.250),
    Signal(90, 36, 600, 1800, 24.300),
    Signal(80, 56, 900, 1900, 0.0),
    Signal(120, 24, 150, 1800, 0.0),
)
KNOWN = 1  # C 60, red 30, y 0.25: the case whose whole distribution METHODS.md section 7 gives


def _rows(signals: tuple[Signal, ...], sketch: Any) -> list[Row]:
    """Give the pings of all probes: one a cycle, the phases evenly spread, in a scattered order."""
    rows: list[Row] = []
    for i, signal in enumerate(signals):
        path = straight(sketch, i)
        for k in range(N_PROBES):
            phase_s = signal.cycle_s * ((k * 77) % N_PROBES + 0.5) / N_PROBES
            at_line_s = START_S + k * signal.cycle_s + phase_s
            begins_s = at_line_s - (GATE_M + 50.0) / V_MPS
            rows += pings(f"s{i}-{k}", path, signal.drive(phase_s), begins_s, GATE_M + 50.0)
    return rows


@pytest.fixture(scope="module")
def ladders(tmp_path_factory: pytest.TempPathFactory) -> dict[int, dict[str, Any]]:
    """Run the commands; give each signal's ladder and its exported delays, by its place in SIGNALS."""
    folder = tmp_path_factory.mktemp("signals")
    sketch = crosses([LIMIT_KMH] * len(SIGNALS), 600.0)
    extract = sketch.write(folder)
    frame(_rows(SIGNALS, sketch)).write_parquet(folder / "day.parquet")
    (folder / "turntally.yaml").write_text(f"gates: {{entry_m: {GATE_M:g}, exit_m: {GATE_M:g}}}\n")
    done("network", extract, cwd=folder)
    done("ingest", "day.parquet", "--close", cwd=folder)
    assert done_json("audit", cwd=folder)["is_sound"]
    told = done_json("quantiles", "--tally", "movement", "--by", "junction_id", cwd=folder)
    done("export", "passages", "--to", "passages.parquet", cwd=folder)
    passages = pl.read_parquet(folder / "passages.parquet")
    lines: dict[int, dict[str, Any]] = {}
    for line in told["rows"]:
        of_it = passages.filter(pl.col("junction_id") == int(line["junction_id"]))
        delays_s = sorted(x / 1000.0 for x in of_it["delay_ms"])
        lines[(int(line["junction_id"]) - 1) // 10] = {**line, "delays_s": delays_s}
    return lines


def test_table_is_what_the_formula_gives() -> None:
    """The tabulated d1 of METHODS.md section 7 and the formula here agree, all with X below 1."""
    assert len(SIGNALS) >= 6
    for signal in SIGNALS:
        assert 0.0 < signal.ratio < 1.0
        if signal.d1_s:
            assert signal.uniform_s() == pytest.approx(signal.d1_s, abs=0.005)


@pytest.mark.parametrize(
    "i", range(len(SIGNALS)), ids=lambda i: f"C{SIGNALS[i].cycle_s}g{SIGNALS[i].green_s}"
)
def test_mean_delay_is_uniform_delay(ladders: dict[int, dict[str, Any]], i: int) -> None:
    """The measured mean of each signal lies within 3 % of d1; none of the probes is missing."""
    assert ladders[i]["n"] == N_PROBES
    wanted = SIGNALS[i].d1_s or SIGNALS[i].uniform_s()
    assert ladders[i]["mean_s"] == pytest.approx(wanted, rel=0.03)


def test_whole_distribution_is_that_of_the_model(ladders: dict[int, dict[str, Any]]) -> None:
    """C 60, red 30, y 0.25: median 7.50, P85 23.25, P95 27.75 s, a third undelayed.

    The ladder's bound is max(0.125 s, 1 %); the probes' delays are C (1 - y) / N_PROBES = 0.25 s apart,
    so the order statistic itself may lie 0.25 s from the model's; timing may add 0.05 s at 1 s pings.
    """
    line = ladders[KNOWN]
    spacing_s = 60.0 * 0.75 / N_PROBES
    assert spacing_s == 0.25
    for name, wanted in (("p5_s", 0.0), ("p15_s", 0.0), ("p50_s", 7.50), ("p85_s", 23.25), ("p95_s", 27.75)):
        assert line[name] == pytest.approx(wanted, abs=max(0.125, 0.01 * wanted) + spacing_s + 0.05), name


def test_every_delay_is_that_of_the_model(ladders: dict[int, dict[str, Any]]) -> None:
    """P(d > x) = (R - x) / (C (1 - y)): the probe of rank k has the delay at (k - 1/2) / n, within 0.1 s."""
    red_s, span_s = 30.0, 60.0 * 0.75
    got = ladders[KNOWN]["delays_s"]
    shares = [(k + 0.5) / N_PROBES for k in range(N_PROBES)]
    wanted = [max(0.0, red_s - span_s * (1.0 - share)) for share in shares]
    assert got == pytest.approx(wanted, abs=0.1)
    undelayed = sum(x < 0.1 for x in got) / N_PROBES
    assert undelayed == pytest.approx(1 / 3, abs=1 / N_PROBES)
