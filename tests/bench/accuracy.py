"""Accuracy of detection against drives whose passages are known: recall, precision, arms, times.

Used by the documented command (`python -m tests.bench.accuracy --help`) and, in small, by the tests.
"""

import argparse
import sys
import tempfile
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import polars as pl

from stream.config import Settings, load_demo, load_settings
from stream.demo.drive import drive, drive_network
from stream.demo.fleet import Fleet, day_trips
from stream.demo.plan import write_osm, write_zones
from stream.demo.rules import LEVEL, town_roads
from stream.demo.town import TIME_ZONE, build_plan
from stream.demo.track import Tracks, sample
from stream.demo.truth import true_passages
from stream.detect.carry import new_states
from stream.detect.run import Detector
from stream.network import Built, build_network

INTERVALS_S = (1.0, 3.0, 5.0, 10.0, 15.0, 30.0)
HELSINKI = Path(__file__).parent.parent / "data" / "helsinki.osm.pbf"
MIDNIGHT_US = 1_780_268_400_000_000  # 2026-06-01T00:00 in the town, one hour ahead of UTC


@dataclass(frozen=True)
class Accuracy:
    """Figures of one place and interval; shares of 1, seconds.

    Attributes
    ----------
    n_true, n_found : passages between first and last ping; passages detected
    recall, precision : share found of the true ones, share true of those found (same junction and time)
    right_arms : share of the matched whose two arms are right
    bias_s : mean error of the traversal of those with the right arms
    mae_s : mean absolute error of those that did not stand within 10 m of a gate
    """

    place: str
    interval_s: float
    n_true: int
    n_found: int
    recall: float
    precision: float
    right_arms: float
    bias_s: float
    mae_s: float
    p50_shift_s: float
    p85_shift_s: float


def detect(built: Built, pings: pl.DataFrame, settings: Settings, threads: int = 0) -> pl.DataFrame:
    """Run detection on a frame of pings.

    Returns
    -------
    vehicle, junction_id, arm_in, arm_out, entry_us, exit_us, timing_error_ms, max_step_ms
    """
    names = pings["vehicle_id"].unique(maintain_order=True)
    codes = pl.DataFrame({"vehicle_id": names, "ix": np.arange(len(names), dtype=np.int32)})
    coded = pings.join(codes, on="vehicle_id", how="left", maintain_order="left")
    detector = Detector(built.streets, settings, threads)
    states = new_states(len(names))
    parts = [
        detector.feed(
            states,
            coded["ix"].to_numpy(),
            coded["ts"].dt.epoch("us").to_numpy(),
            coded["lon"].to_numpy(),
            coded["lat"].to_numpy(),
        ),
        detector.close(states),
    ]
    rows = np.concatenate([p.passages for p in parts])
    arm = built.tables["arm"]
    into, out = arm[rows["arm_in_ix"].tolist()], arm[rows["arm_out_ix"].tolist()]
    return pl.DataFrame(
        {
            "vehicle": names.gather(rows["vehicle_ix"]),
            "junction_id": into["junction_id"],
            "arm_in": into["arm"].cast(pl.Int64),
            "arm_out": out["arm"].cast(pl.Int64),
            "entry_us": rows["entry_us"],
            "exit_us": rows["exit_us"],
            "timing_error_ms": rows["timing_error_ms"],
            "max_step_ms": rows["max_step_ms"],
        }
    )


def trip_spans(tracks: Tracks, pings: pl.DataFrame) -> pl.DataFrame:
    """Give the first and last ping of each trip: vehicle, first_us, last_us."""
    first = tracks.t_us[tracks.time_start[:-1]]
    last = tracks.t_us[tracks.time_start[1:] - 1]
    names = pl.Series(tracks.names).gather(tracks.vehicle_ix)
    trips = pl.DataFrame({"vehicle": names, "from_us": first, "to_us": last, "trip": np.arange(len(first))})
    at = pings.select(vehicle="vehicle_id", at_us=pl.col("ts").dt.epoch("us")).sort("at_us")
    inside = at.join_asof(
        trips.sort("from_us"), left_on="at_us", right_on="from_us", by="vehicle", check_sortedness=False
    ).filter(pl.col("at_us") <= pl.col("to_us"))
    return inside.group_by("vehicle", "trip").agg(
        first_us=pl.col("at_us").min(), last_us=pl.col("at_us").max()
    )


def within_pings(truth: pl.DataFrame, spans: pl.DataFrame) -> pl.DataFrame:
    """Keep the true passages that lie between the first and the last ping of their trip."""
    return (
        truth.join(spans, on="vehicle")
        .filter((pl.col("entry_us") >= pl.col("first_us")) & (pl.col("exit_us") <= pl.col("last_us")))
        .drop("first_us", "last_us", "trip")
    )


def match(truth: pl.DataFrame, found: pl.DataFrame) -> pl.DataFrame:
    """Pair true and found passages, one to one: same vehicle and junction, overlapping in time."""
    left = truth.with_row_index("true_ix")
    right = found.with_row_index("found_ix")
    pairs = (
        left.join(right, on=["vehicle", "junction_id"], suffix="_found")
        .filter(
            (pl.col("entry_us_found") < pl.col("exit_us")) & (pl.col("exit_us_found") > pl.col("entry_us"))
        )
        .with_columns(
            apart=(pl.col("entry_us_found") - pl.col("entry_us")).abs()
            + (pl.col("exit_us_found") - pl.col("exit_us")).abs()
        )
        .sort("apart")
    )
    return pairs.unique("true_ix", keep="first", maintain_order=True).unique(
        "found_ix", keep="first", maintain_order=True
    )


def measure(
    place: str,
    built: Built,
    tracks: Tracks,
    interval_s: float,
    settings: Settings,
    seed: int,
    sigma_m: float = 4.0,
    tau_s: float = 40.0,
) -> Accuracy:
    """Sample tracks with correlated noise, detect, and compare with the truth."""
    pings = sample(tracks, interval_s, sigma_m, tau_s, seed)
    truth = true_passages(tracks, built.tables["arm"], built.tables["junction"], built.tables["movement"])
    truth = within_pings(truth, trip_spans(tracks, pings))
    found = detect(built, pings, settings)
    pairs = match(truth, found)
    return figures(place, interval_s, truth, found, pairs)


def figures(
    place: str, interval_s: float, truth: pl.DataFrame, found: pl.DataFrame, pairs: pl.DataFrame
) -> Accuracy:
    """Sum a matching up."""
    right = (
        pairs.filter(
            (pl.col("arm_in") == pl.col("arm_in_found")) & (pl.col("arm_out") == pl.col("arm_out_found"))
        )
        .with_columns(
            true_s=(pl.col("exit_us") - pl.col("entry_us")) / 1e6,
            found_s=(pl.col("exit_us_found") - pl.col("entry_us_found")) / 1e6,
        )
        .with_columns(error_s=pl.col("found_s") - pl.col("true_s"))
    )
    clear = right.filter(~pl.col("stood_near_gate"))

    def shift(q: float) -> float:
        return float(right["found_s"].quantile(q) or 0.0) - float(right["true_s"].quantile(q) or 0.0)

    return Accuracy(
        place,
        interval_s,
        truth.height,
        found.height,
        pairs.height / max(truth.height, 1),
        pairs.height / max(found.height, 1),
        right.height / max(pairs.height, 1),
        float(np.mean(right["error_s"].to_numpy())),
        float(np.mean(np.abs(clear["error_s"].to_numpy()))),
        shift(0.5),
        shift(0.85),
    )


_COLUMNS = ("step s", "true", "recall", "precision", "arms", "bias s", "MAE s", "P50 off", "P85 off")
HEAD = f"{'place':<10}" + "".join(f"{name:>10}" for name in _COLUMNS)


def line(a: Accuracy) -> str:
    """Format one row of the table."""
    shares = "".join(f"{share:>10.2%}" for share in (a.recall, a.precision, a.right_arms))
    seconds = "".join(f"{s:>10.3f}" for s in (a.bias_s, a.mae_s, a.p50_shift_s, a.p85_shift_s))
    return f"{a.place:<10}{a.interval_s:>10g}{a.n_true:>10}{shares}{seconds}"


def town(n_trips: int, seed: int, settings: Settings) -> tuple[Built, Tracks]:
    """Build the demo's town and drive a day there as the demo does: signals, gaps, queues, parking.

    Parameters
    ----------
    n_trips
        About how many trips; the fleet is as large as that takes at the demo's trips a day.
    """
    demo, plan = load_demo(), build_plan(is_left=False)
    with tempfile.TemporaryDirectory() as name:
        extract, zones = Path(name) / "town.osm", Path(name) / "zones.geojson"
        write_osm(plan, extract)
        write_zones(plan, zones, TIME_ZONE)
        built = build_network(extract, zones, settings)
    n_vehicles = max(1, round(n_trips / demo.trips_a_day))
    fleet = Fleet(n_vehicles, demo.trips_a_day, demo.reach_s, demo.park_share, demo.park_s)
    roads = town_roads(plan)
    return built, drive(roads, day_trips(roads, fleet, LEVEL, MIDNIGHT_US, seed), LEVEL, seed + 1)


def helsinki(n_trips: int, seed: int, settings: Settings) -> tuple[Built, Tracks]:
    """Build the real extract's network and drive random routes along it, with random stops at junctions."""
    built = build_network(HELSINKI, None, settings)
    return built, drive_network(built.streets, n_trips, seed)


PLACES = {"town": town, "helsinki": helsinki}


def main(arguments: Sequence[str] | None = None) -> int:
    """Print the table for the places and intervals asked for."""
    ask = argparse.ArgumentParser(
        prog="python -m tests.bench.accuracy",
        description="Measure detection against drives with known passages: in the demo's town and along "
        "the real extract in tests/data. Noise is first-order Gauss-Markov.",
    )
    ask.add_argument("--place", default=",".join(PLACES), help="places, comma between; default %(default)s")
    ask.add_argument("--trips", type=int, default=1200, help="trips a place; default %(default)s")
    steps = ",".join(f"{step:g}" for step in INTERVALS_S)
    ask.add_argument("--interval", default=steps, help="s between pings; default %(default)s")
    ask.add_argument("--sigma", type=float, default=4.0, help="noise per axis, m; default %(default)s")
    ask.add_argument("--tau", type=float, default=40.0, help="its time constant, s; default %(default)s")
    ask.add_argument(
        "--seed", type=int, default=1, help="of drives; noise takes the next; default %(default)s"
    )
    given = ask.parse_args(arguments)
    places = given.place.split(",")
    if unknown := [name for name in places if name not in PLACES]:
        ask.error(f"--place {unknown[0]}: there are {', '.join(PLACES)}")
    settings = load_settings()
    print(HEAD)
    for name in places:
        built, tracks = PLACES[name](given.trips, given.seed, settings)
        for step in map(float, given.interval.split(",")):
            got = measure(name, built, tracks, step, settings, given.seed + 1, given.sigma, given.tau)
            print(line(got), flush=True)
    return 0


if __name__ == "__main__":
    sys.exit(main())
