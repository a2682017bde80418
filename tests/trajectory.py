"""Exact drives along drawn roads: uniform accelerations, stands, and the pings of a noiseless receiver."""

import itertools
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path

import polars as pl

from stream.config import Settings
from stream.export import write
from stream.ingest import ingest
from stream.network import build_network
from stream.store import Store, put_network
from stream.store.audit import run_audit
from stream.store.ledger import network_config
from tests.sketch import GEOD, Sketch

Row = tuple[str, datetime, float, float]


@dataclass
class Motion:
    """A place over time in phases of uniform acceleration; metres along a path, seconds from the start.

    Each method adds a phase. `v_mps` may be set between phases: a jump in speed, as in a point queue.
    """

    x_m: float
    v_mps: float
    t_s: float = 0.0
    _phases: list[tuple[float, float, float, float]] = field(default_factory=list)

    def _add(self, span_s: float, a_mps2: float) -> None:
        self._phases.append((self.t_s, self.x_m, self.v_mps, a_mps2))
        self.t_s += span_s
        self.x_m += self.v_mps * span_s + 0.5 * a_mps2 * span_s * span_s
        self.v_mps += a_mps2 * span_s

    def cruise_to(self, x_m: float) -> None:
        """Go on at the present speed until x_m."""
        assert x_m >= self.x_m - 1e-9
        self._add((x_m - self.x_m) / self.v_mps, 0.0)

    def brake_at(self, x_m: float, to_mps: float, d_mps2: float) -> None:
        """Go on, then brake so that the speed is to_mps exactly at x_m."""
        v = self.v_mps
        self.cruise_to(x_m - (v * v - to_mps * to_mps) / (2.0 * d_mps2))
        self._add((v - to_mps) / d_mps2, -d_mps2)
        self.x_m, self.v_mps = x_m, to_mps

    def speed_up(self, to_mps: float, a_mps2: float) -> None:
        """Speed up to to_mps."""
        self._add((to_mps - self.v_mps) / a_mps2, a_mps2)

    def stand(self, span_s: float) -> None:
        """Stand still."""
        self.v_mps = 0.0
        self._add(span_s, 0.0)

    def at(self, t_s: float) -> float:
        """Give the place at a time; the last phase goes on for ever."""
        begin, x, v, a = next(p for p in reversed(self._phases) if p[0] <= t_s or p is self._phases[0])
        span = t_s - begin
        return x + v * span + 0.5 * a * span * span


class Path2D:
    """A chain of a sketch's nodes as a path: chainage 0 at one of them, metres along geodesics."""

    def __init__(self, sketch: Sketch, nodes: Sequence[int], zero: int) -> None:
        self._place = [sketch.place[n] for n in nodes]
        legs = [GEOD.inv(*a, *b)[2] for a, b in itertools.pairwise(self._place)]
        run = [0.0, *itertools.accumulate(legs)]
        self._at_m = [m - run[nodes.index(zero)] for m in run]

    def lon_lat(self, x_m: float) -> tuple[float, float]:
        """Give the coordinates at a chainage, as rounded as an archive of 1e-7 degree."""
        assert self._at_m[0] <= x_m <= self._at_m[-1]
        i = next(i for i in range(len(self._at_m) - 1) if x_m <= self._at_m[i + 1])
        share = (x_m - self._at_m[i]) / (self._at_m[i + 1] - self._at_m[i])
        (lon0, lat0), (lon1, lat1) = self._place[i], self._place[i + 1]
        return round(lon0 + share * (lon1 - lon0), 7), round(lat0 + share * (lat1 - lat0), 7)


def pings(vehicle: str, path: Path2D, motion: Motion, start_s: float, last_m: float) -> list[Row]:
    """Give one ping at each whole second of UTC until the path's place last_m is passed.

    Parameters
    ----------
    start_s
        UTC epoch of the motion's time 0; its fraction is the phase of the receiver.
    """
    rows = []
    for second in itertools.count(math.ceil(start_s)):
        x_m = motion.at(second - start_s)
        if x_m > last_m:
            return rows
        rows.append((vehicle, datetime.fromtimestamp(second, UTC), *path.lon_lat(x_m)))
    raise AssertionError


def crosses(limits_kmh: Sequence[int], arm_m: float, lon: float = 24.94, lat: float = 60.17) -> Sketch:
    """Give crossings 2.5 arms apart; number i has node 10 i + 1, its straight road 10 i + 2, +1, + 3.

    The straight road runs from the west to the east and has the limit given; the road across has none.
    """
    sketch = Sketch(lon, lat)
    for i, kmh in enumerate(limits_kmh):
        k, x = 10 * i, 2.5 * arm_m * i
        sketch.nodes(
            {k + 1: (x, 0), k + 2: (x - arm_m, 0), k + 3: (x + arm_m, 0), k + 4: (x, 150), k + 5: (x, -150)}
        )
        sketch.way(k + 6, [k + 2, k + 1, k + 3], {"highway": "secondary", "maxspeed": str(kmh)})
        sketch.way(k + 7, [k + 4, k + 1, k + 5])
    return sketch


def straight(sketch: Sketch, i: int) -> Path2D:
    """Give the straight road of crossing number i, chainage 0 at the crossing: the mouth of all its arms."""
    return Path2D(sketch, [10 * i + 2, 10 * i + 1, 10 * i + 3], 10 * i + 1)


def frame(rows: Iterable[Row]) -> pl.DataFrame:
    """Give pings as an archive holds them: in order of time."""
    return pl.DataFrame(list(rows), schema=["vehicle_id", "ts", "lon", "lat"], orient="row").sort(
        "ts", "vehicle_id"
    )


def whole_job(folder: Path, sketch: Sketch, rows: Iterable[Row], settings: Settings) -> pl.DataFrame:
    """Build the network, take the pings in from a Parquet file, audit, and give the exported passages.

    The settings need `privacy.plain_ids`, so that vehicles are told apart by their own names.
    """
    file, store_path, out = folder / "day.parquet", folder / "s.duckdb", folder / "passages.parquet"
    frame(rows).write_parquet(file)
    with Store.open(store_path, create=True) as store:
        put_network(store, build_network(sketch.write(folder), None, settings), network_config(settings))
    ingest(store_path, [file], settings, close=True)
    with Store.open(store_path, read_only=True) as store:
        assert not [found for found in run_audit(store) if found["n_faults"]]
        write(store, "passages", out, settings)
    return pl.read_parquet(out)
