"""Pings of invented vehicles that drive the tiny town (tests/town.py) at a steady speed, without noise."""

import csv
import io
import itertools
import math
from collections.abc import Iterable, Sequence
from pathlib import Path

from tests.town import lon_lat

START_S = 1_772_524_800  # 2026-03-03T08:00:00Z, a Tuesday
Row = tuple[str, int, float, float]
HEADS = ("vehicle_id", "ts", "lon", "lat")


def drive(
    vehicle: str, corners_m: Sequence[tuple[float, float]], start_s: int = START_S, speed_mps: float = 10.0
) -> list[Row]:
    """Give one ping a second along straight lines from corner to corner.

    Parameters
    ----------
    vehicle
        Its id.
    corners_m
        Points of the town's plan, metres east and north of its origin.
    start_s
        Time of the first ping, s since 1970, UTC.
    speed_mps
        Speed throughout.
    """
    rows: list[Row] = []
    legs = list(itertools.pairwise(corners_m))
    lengths = [math.dist(a, b) for a, b in legs]
    for second in range(int(sum(lengths) / speed_mps) + 1):
        left_m = second * speed_mps
        ix = 0
        while ix < len(legs) - 1 and left_m > lengths[ix]:
            left_m -= lengths[ix]
            ix += 1
        (x0, y0), (x1, y1) = legs[ix]
        share = left_m / lengths[ix]
        lon, lat = lon_lat(x0 + share * (x1 - x0), y0 + share * (y1 - y0))
        rows.append((vehicle, start_s + second, round(lon, 7), round(lat, 7)))
    return rows


def crossings(n_vehicles: int, start_s: int = START_S) -> list[Row]:
    """Give vehicles that drive through the signals at (1, 1), half of them straight on, half to the right.

    Each passes (0, 1) and (1, 1); rows stand in order of time.
    """
    rows: list[Row] = []
    for ix in range(n_vehicles):
        end = (520.0, 300.0) if ix % 2 == 0 else (300.0, 80.0)
        rows += drive(f"car-{ix}", [(-140.0, 300.0), (300.0, 300.0), end], start_s + 5 * ix)
    return sorted(rows, key=lambda row: row[1])


def write_csv(path: Path, rows: Iterable[Sequence[object]], heads: Sequence[str] = HEADS) -> Path:
    """Write rows under the given names and give the path."""
    text = io.StringIO()
    out = csv.writer(text, lineterminator="\n")
    out.writerow(heads)
    out.writerows(rows)
    path.write_text(text.getvalue(), encoding="utf-8")
    return path
