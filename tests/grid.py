"""Pings of vehicles on the made-up grids of tests/oracle/streets.py, placed in metres from its first node."""

import itertools
import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stream.detect.carry import new_states
from stream.detect.records import END_REASONS, UNFINISHED_REASONS, Found
from stream.detect.run import Detector
from stream.geodesy import metres_per_degree

LON, LAT = 5.0, 52.0
START_US = 1_772_524_800_000_000
Row = tuple[int, float, float]  # t_us, lon, lat


def lon_lat(east_m: float, north_m: float) -> tuple[float, float]:
    """Give the degrees of a place, with the scale that grids are drawn by."""
    k_lon, k_lat = metres_per_degree(LAT)
    return LON + east_m / k_lon, LAT + north_m / k_lat


def row(t_s: float, east_m: float, north_m: float) -> Row:
    """Make a ping some seconds after the start."""
    return (START_US + round(t_s * 1e6), *lon_lat(east_m, north_m))


def drive(
    corners_m: Sequence[tuple[float, float]],
    speed_mps: float = 10.0,
    every_s: float = 1.0,
    start_s: float = 0.0,
    noise_m: float = 0.0,
    seed: int = 0,
) -> list[Row]:
    """Give pings along straight lines from corner to corner at a steady speed."""
    rng = np.random.default_rng(seed)
    legs = list(itertools.pairwise(corners_m))
    lengths = [math.dist(a, b) for a, b in legs]
    rows = []
    for k in range(int(sum(lengths) / speed_mps / every_s + 1e-9) + 1):
        left = k * every_s * speed_mps
        leg = 0
        while leg < len(legs) - 1 and left > lengths[leg]:
            left -= lengths[leg]
            leg += 1
        (x0, y0), (x1, y1) = legs[leg]
        share = left / lengths[leg]
        dx, dy = rng.normal(0.0, noise_m, 2) if noise_m else (0.0, 0.0)
        rows.append(row(start_s + k * every_s, x0 + share * (x1 - x0) + dx, y0 + share * (y1 - y0) + dy))
    return rows


def stand(place_m: tuple[float, float], from_s: float, for_s: float, every_s: float = 5.0) -> list[Row]:
    """Give pings of a vehicle that stands, the first `every_s` after `from_s`."""
    return [row(from_s + k * every_s, *place_m) for k in range(1, int(for_s / every_s) + 1)]


def end_s(rows: Sequence[Row]) -> float:
    """Give the seconds from the start to the last ping."""
    return (rows[-1][0] - START_US) / 1e6


def columns(rows: Sequence[Row], vehicle: int = 0) -> tuple[Any, Any, Any, Any]:
    """Give the arguments of `Detector.feed` behind the records."""
    t_us, lon, lat = zip(*rows, strict=True) if rows else ((), (), ())
    return (
        np.full(len(rows), vehicle, np.int32),
        np.array(t_us, np.int64),
        np.array(lon, np.float64),
        np.array(lat, np.float64),
    )


def joined(parts: Sequence[Found]) -> Found:
    """Put what several chunks gave together; rows sorted by vehicle and time, else as they came."""

    def rows(name: str, time: str) -> NDArray[Any]:
        every = np.concatenate([getattr(part, name) for part in parts])
        return every[np.lexsort((every[time], every["vehicle_ix"]))]

    return Found(
        rows("passages", "entry_us"),
        rows("sections", "from_us"),
        rows("unfinished", "entry_us"),
        rows("trips", "trip_start_us"),
        np.sum([part.dropped for part in parts], axis=0),
        sum(part.n_used for part in parts),
    )


def detect(detector: Detector, rows: Sequence[Row]) -> Found:
    """Detect one vehicle's pings from first to last, and close."""
    states = new_states(1)
    return joined([detector.feed(states, *columns(rows)), detector.close(states)])


def trips_of(found: Found) -> list[tuple[int, int, int, str]]:
    """Give start, end, pings and ending of each trip, as the twin does (tests/oracle/runs.py)."""
    return [
        (int(t["trip_start_us"]), int(t["end_us"]), int(t["n_pings"]), END_REASONS[t["end_reason"]])
        for t in found.trips
    ]


def endings(found: Found) -> list[str]:
    """Give why each trip ended."""
    return [END_REASONS[k] for k in found.trips["end_reason"]]


def reasons(found: Found) -> list[str]:
    """Give why each unfinished passage is one."""
    return [UNFINISHED_REASONS[k] for k in found.unfinished["reason"]]
