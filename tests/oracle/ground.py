"""Plain metres and nearest places: own formulas, lists and loops (METHODS.md section 3).

A point is (lon, lat) in 1e-7 degree, mostly whole; a line is a list of points, straight in degrees between.
"""

import itertools
import math
from collections.abc import Sequence

from stream.network.model import Streets

Point = tuple[float, float]
FULL = 3_600_000_000


def radii_m(lat_deg: float) -> tuple[float, float]:
    """Give the radii of the prime vertical and of the meridian, WGS 84."""
    flattening = 1.0 / 298.257223563
    e2 = flattening * (2.0 - flattening)
    w = 1.0 - e2 * math.sin(math.radians(lat_deg)) ** 2
    return 6378137.0 / math.sqrt(w), 6378137.0 * (1.0 - e2) / w**1.5


def vector_m(a: Point, b: Point) -> tuple[float, float]:
    """Give the metres east and north from a to b, with the scale at their mean latitude."""
    lat = (a[1] + b[1]) / 2e7
    across, along = radii_m(lat)
    d_lon = (b[0] - a[0] + FULL // 2) % FULL - FULL // 2
    east = math.radians(d_lon / 1e7) * across * math.cos(math.radians(lat))
    return east, math.radians((b[1] - a[1]) / 1e7) * along


def apart_m(a: Point, b: Point) -> float:
    """Give the distance of two points."""
    return math.hypot(*vector_m(a, b))


def e7(lon: float, lat: float) -> Point:
    """Round degrees to 1e-7, halves up; 180 east is 180 west."""
    x, y = math.floor(lon * 1e7 + 0.5), math.floor(lat * 1e7 + 0.5)
    return (x - FULL if x >= FULL // 2 else x), y


def roads_of(streets: Streets) -> list[list[Point]]:
    """Give the drawn line of each road."""
    starts = streets.point_start.tolist()
    points = list(zip(streets.point_lon_e7.tolist(), streets.point_lat_e7.tolist(), strict=True))
    return [points[a:b] for a, b in itertools.pairwise(starts)]


def length_m(line: Sequence[Point]) -> float:
    """Give the length of a line."""
    return sum(apart_m(a, b) for a, b in itertools.pairwise(line))


def finely(line: Sequence[Point], step_m: float = 100.0) -> list[Point]:
    """Give a line with points at least every so many metres, so that flat metres hold between them."""
    out = [line[0]]
    for a, b in itertools.pairwise(line):
        d_lon = (b[0] - a[0] + FULL // 2) % FULL - FULL // 2
        n = math.ceil(apart_m(a, b) / step_m)
        out += [(a[0] + d_lon * k / n, a[1] + (b[1] - a[1]) * k / n) for k in range(1, n)]
        out.append(b)
    return out


def nearest(point: Point, line: Sequence[Point]) -> tuple[float, float]:
    """Give the place on a line nearest to a point: metres along it, metres off it."""
    best = (0.0, math.inf)
    passed = 0.0
    for a, b in itertools.pairwise(line):
        (ax, ay), (bx, by) = vector_m(point, a), vector_m(point, b)
        ux, uy = bx - ax, by - ay
        long = math.hypot(ux, uy)
        share = min(1.0, max(0.0, -(ax * ux + ay * uy) / (long * long))) if long else 0.0
        off = math.hypot(ax + share * ux, ay + share * uy)
        if off < best[1]:
            best = (passed + share * long, off)
        passed += apart_m(a, b)
    return best


def off_m(point: Point, line: Sequence[Point], at_m: float) -> float:
    """Give the distance of a point from the place at some metres along a line."""
    for a, b in itertools.pairwise(line):
        long = apart_m(a, b)
        if at_m <= long or b is line[-1]:
            (ax, ay), (bx, by) = vector_m(point, a), vector_m(point, b)
            share = at_m / long
            return math.hypot(ax + share * (bx - ax), ay + share * (by - ay))
        at_m -= long
    raise ValueError("a line without points")


def places_near(point: Point, roads: Sequence[Sequence[Point]], radius_m: float) -> list[tuple[float, int]]:
    """Give the roads nearer than the radius as (metres off, road), nearest first."""
    found = [(nearest(point, line)[1], road) for road, line in enumerate(roads)]
    return sorted(place for place in found if place[0] < radius_m)
