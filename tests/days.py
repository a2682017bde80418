"""Three invented days in the tiny town, with all that real archives have: noise, jumps and the like.

Vehicles stand, stay, fall silent, jump, are told twice, come from afar, and drive on over every midnight.
"""

import itertools
import math
import random
from collections.abc import Sequence

from tests.archive import Row
from tests.town import STEP_M, STUB_M, lon_lat

Point = tuple[float, float]
START_S = 1_772_582_400  # 2026-03-04T00:00:00Z
DAY_S = 86_400
N_DAYS = 3
SETTINGS = {"privacy": {"plain_ids": True}, "trips": {"max_gap_s": 100, "dwell_s": 60}}
SPEED_MPS, NOISE_M = 11.0, 3.0
_EAST = 3 * STEP_M + STUB_M
# Ways through the town by its corners, in metres east and north of (0, 0).
_PATHS: tuple[tuple[Point, ...], ...] = (
    ((-STUB_M, STEP_M), (3 * STEP_M, STEP_M)),
    (
        (STEP_M, -STUB_M),
        (STEP_M, STEP_M),
        (2 * STEP_M, STEP_M),
        (2 * STEP_M, 2 * STEP_M),
        (_EAST, 2 * STEP_M),
    ),
    ((2 * STEP_M, -STUB_M), (2 * STEP_M, 2 * STEP_M), (-STUB_M, 2 * STEP_M)),
    ((_EAST, 0.0), (0.0, 0.0), (0.0, 2 * STEP_M), (STEP_M, 2 * STEP_M), (STEP_M, 0.0)),
)


def _along(path: Sequence[Point], s_m: float) -> Point:
    """Find the point of a path at a chainage; its last point beyond the end."""
    left = s_m
    for (x1, y1), (x2, y2) in itertools.pairwise(path):
        length = math.dist((x1, y1), (x2, y2))
        if left <= length:
            return x1 + (x2 - x1) * left / length, y1 + (y2 - y1) * left / length
        left -= length
    return path[-1]


def _seen(vehicle: str, t: int, at: Point, dice: random.Random) -> Row:
    lon, lat = lon_lat(at[0] + dice.gauss(0, NOISE_M), at[1] + dice.gauss(0, NOISE_M))
    return vehicle, t, round(lon, 7), round(lat, 7)


def _drive(vehicle: str, start: int, step_s: int, dice: random.Random) -> list[Row]:
    """Drive one path: stands of up to 50 s, now and then a silence, a stay or a jump."""
    path = dice.choice(_PATHS)
    length = sum(math.dist(a, b) for a, b in itertools.pairwise(path))
    rows: list[Row] = []
    s_m, t, stand_s, silent_s = 0.0, start, 0, 0
    while s_m < length:
        if stand_s == 0 and dice.random() < 0.015:
            stand_s = dice.choice((8, 25, 50, 120))
        if silent_s == 0 and dice.random() < 0.003:
            silent_s = dice.choice((30, 90, 150))
        s_m += 0.0 if stand_s else SPEED_MPS
        if t % step_s == 0 and not silent_s:
            x, y = _along(path, s_m)
            jump_m = 600.0 if dice.random() < 0.01 else 0.0
            rows.append(_seen(vehicle, t, (x + jump_m, y), dice))
        stand_s, silent_s, t = max(stand_s - 1, 0), max(silent_s - 1, 0), t + 1
    return rows


def archive(n_vehicles: int = 8, n_drives: int = 2, seed: int = 3) -> list[Row]:
    """Give the days in order of time; each vehicle drives around each midnight and at some other hour."""
    dice = random.Random(seed)
    rows: list[Row] = []
    for v in range(n_vehicles):
        step_s = (1, 3, 10)[v % 3]
        for day in range(N_DAYS):
            starts = [START_S + day * DAY_S + dice.randrange(3_600, 80_000), START_S + (day + 1) * DAY_S - 40]
            for start in starts[: n_drives if day < N_DAYS - 1 else 1]:
                rows += _drive(f"v{v}", start + dice.randrange(30), step_s, dice)
    rows += [dice.choice(rows) for _ in range(20)]
    rows += [(v, t, lon + 0.0005, lat) for v, t, lon, lat in (dice.choice(rows) for _ in range(10))]
    rows += [("far", START_S + d * DAY_S + i, 12.0, 50.0) for d in range(N_DAYS) for i in range(3)]
    return sorted(rows, key=lambda r: r[1])


def by_day(rows: Sequence[Row]) -> list[list[Row]]:
    """Cut an archive at its midnights."""
    days: list[list[Row]] = [[] for _ in range(N_DAYS)]
    for row in rows:
        days[min((row[1] - START_S) // DAY_S, N_DAYS - 1)].append(row)
    return days
