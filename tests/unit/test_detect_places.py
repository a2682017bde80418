"""Candidates: the nearest place on each road, against measuring every road; tiles against a dict."""

import math
from dataclasses import replace

import numpy as np
import pytest

from stream.detect.candidates import MAX_ROADS, find_places_kernel
from stream.detect.candidates import PLACES as ROOM
from stream.detect.records import new_record
from stream.network.cells import find_tile, put_tiles, tile_key
from stream.network.model import Streets
from stream.network.routes import StreetIndex, build_index
from tests.oracle.ground import FULL, Point, finely, length_m, off_m, places_near, radii_m, roads_of
from tests.oracle.streets import streets_of

RADIUS_M = 40.0
# Flat metres of a segment of at most 300 m near 70 degrees are off by up to 7 mm (METHODS.md section 3), and
# where a longer one is cut is rounded to 1e-7 degree each way (1.1 cm).
NEAR_M = 0.02
PLACES = {
    "equator": (9.0, 0.0),
    "north": (24.9, 65.0),
    "south": (-71.0, -53.0),
    "east of 180": (-179.9995, 52.0),
    "west of 180": (179.9995, -17.0),
    "on 180": (180.0, 65.0),
}


def moved(origin: tuple[float, float], east_m: float, north_m: float) -> Point:
    """Give the point some metres from an origin, in 1e-7 degree."""
    across, along = radii_m(origin[1])
    lon = origin[0] + math.degrees(east_m / across / math.cos(math.radians(origin[1])))
    x = (round(lon * 1e7) + FULL // 2) % FULL - FULL // 2
    return x, round((origin[1] + math.degrees(north_m / along)) * 1e7)


def scattered(origin: tuple[float, float], seed: int, n: int = 40, wide_m: float = 900.0) -> Streets:
    """Draw crooked roads at random, short and long, each apart from the others."""
    rng = np.random.default_rng(seed)
    lines: list[list[Point]] = []
    for _ in range(n):
        at, heading = rng.uniform(-wide_m / 2, wide_m / 2, 2), rng.uniform(0.0, 2 * math.pi)
        line = [moved(origin, *at.tolist())]
        for _ in range(int(rng.integers(1, 6))):
            heading += rng.normal(0.0, 0.7)
            at = at + rng.choice([4.0, 40.0, 200.0, 700.0]) * np.array([math.sin(heading), math.cos(heading)])
            line.append(moved(origin, *at.tolist()))
        lines.append(line)
    ends = [end for line in lines for end in (line[0], line[-1])]
    streets = streets_of(ends, [(2 * k, 2 * k + 1) for k in range(n)])
    points = np.array([point for line in lines for point in line], np.int32)
    return replace(
        streets,
        point_start=np.concatenate([[0], np.cumsum([len(line) for line in lines])]).astype(np.int32),
        point_lon_e7=points[:, 0].copy(),
        point_lat_e7=points[:, 1].copy(),
        road_length_m=np.array([length_m(line) for line in lines]),
    )


def index_of(streets: Streets) -> StreetIndex:
    """Build the index with the radius of these tests."""
    return build_index(streets, RADIUS_M, 1.0, 5.0, 3.0)


def lines_of(streets: Streets) -> list[list[Point]]:
    """Give the roads as fine lines."""
    return [finely(line) for line in roads_of(streets)]


def check_point(index: StreetIndex, roads: list[list[Point]], point: Point) -> int:
    """Compare the places of one point with measuring every road; give how many there are."""
    places = new_record(ROOM)
    n = find_places_kernel(index, *np.array(point, np.int32), RADIUS_M, places)
    plain = places_near(point, roads, RADIUS_M + NEAR_M)
    surely = [road for off, road in plain if off < RADIUS_M - NEAR_M]
    found = places.road[:n].tolist()
    assert len(set(found)) == n, "a road stands twice"
    assert set(found) <= {road for _, road in plain}
    if len(plain) <= MAX_ROADS:
        assert set(surely) <= set(found)
    off_of = {road: off for off, road in plain}
    assert places.square_m2[:n].tolist() == sorted(places.square_m2[:n].tolist())
    for k, road in enumerate(found):
        off = math.sqrt(places.square_m2[k])
        assert abs(off - off_of[road]) < NEAR_M
        # The place itself: as far from the point as is said, wherever two places are equally near.
        assert abs(off_m(point, roads[road], float(places.at_m[k])) - off) < 2 * NEAR_M
        assert abs(off_of[road] - plain[k][0]) < NEAR_M, "not the nearest first"
    return n


@pytest.mark.parametrize("where", PLACES)
@pytest.mark.parametrize("seed", [1, 2])
def test_places_are_those_of_measuring_every_road(where: str, seed: int) -> None:
    """Roads, order, distance and chainage are those of brute force: any latitude, and across 180 degrees."""
    origin = PLACES[where]
    streets = scattered(origin, seed)
    index, roads = index_of(streets), lines_of(streets)
    rng = np.random.default_rng(100 + seed)
    counts = [
        check_point(index, roads, moved(origin, *rng.uniform(-600, 600, 2).tolist())) for _ in range(60)
    ]
    for line in roads:  # and near each bend
        lon, lat = line[len(line) // 2]
        near = moved((lon / 1e7, lat / 1e7), *rng.normal(0.0, 15.0, 2).tolist())
        counts.append(check_point(index, roads, near))
    assert sum(counts) > 60


@pytest.mark.parametrize("lat", [0.0, 51.7, -17.0, 65.0, 70.3])
@pytest.mark.parametrize("side", [-1, 1])
def test_places_are_found_across_the_180th_meridian_from_one_side(lat: float, side: int) -> None:
    """A road on one side alone is found from the other, to the radius and no farther."""
    ends = [moved((180.0, lat), side * 5.0, north) for north in (-120.0, 150.0)]
    streets = streets_of(ends, [(0, 1)])
    index, roads = index_of(streets), lines_of(streets)
    for metres in np.arange(-60.0, 60.0, 1.0):
        n = check_point(index, roads, moved((180.0, lat), side * float(metres), 20.0))
        assert n == (abs(float(metres) - 5.0) < RADIUS_M) or abs(abs(float(metres) - 5.0) - RADIUS_M) < NEAR_M


@pytest.mark.parametrize("lat", [0.0, 65.0])
def test_only_the_nearest_roads_are_kept_where_there_are_many(lat: float) -> None:
    """Of more roads within the radius than there is room for, the nearest ones stay."""
    origin = (10.0, lat)
    ends = [moved(origin, x, y) for x in np.arange(0.0, 42.0, 3.0).tolist() for y in (-50.0, 50.0)]
    streets = streets_of(ends, [(2 * k, 2 * k + 1) for k in range(len(ends) // 2)])
    places = new_record(ROOM)
    point = moved(origin, 20.2, 3.0)
    n = find_places_kernel(index_of(streets), *np.array(point, np.int32), RADIUS_M, places)
    assert n == MAX_ROADS
    plain = places_near(point, lines_of(streets), RADIUS_M)
    assert [road for _, road in plain[:MAX_ROADS]] == places.road[:n].tolist()


@pytest.mark.parametrize(("lon", "lat"), [(0.0, 0.0), (179.9, 89.9), (-180.0, -90.0), (24.9, 60.0)])
def test_nowhere_near_a_road_there_is_no_place(lon: float, lat: float) -> None:
    """Far from every road, at any corner of the earth, nothing is found and nothing is read amiss."""
    index = index_of(scattered((24.9, 65.0), 3))
    n = find_places_kernel(index, np.int32(lon * 1e7), np.int32(lat * 1e7), RADIUS_M, new_record(ROOM))
    assert n == 0


@pytest.mark.parametrize("seed", range(3))
def test_tiles_are_found_as_in_a_dict(seed: int) -> None:
    """Each tile put in is found with its number, and no other key is."""
    rng = np.random.default_rng(seed)
    keys = np.unique(
        [
            tile_key(int(r), int(c))
            for r, c in zip(rng.integers(0, 19532, 300), rng.integers(0, 39063, 300), strict=True)
        ]
    )
    tiles = rng.permutation(len(keys)).astype(np.int32) - 1  # -1: in the area, without roads
    size = 1 << (2 * len(keys)).bit_length()
    hash_key, hash_tile = np.full(size, -1, np.int64), np.full(size, -1, np.int32)
    put_tiles(keys, tiles, hash_key, hash_tile)
    plain = dict(zip(keys.tolist(), tiles.tolist(), strict=True))
    asked = [*keys.tolist(), *(keys + 1).tolist(), *(keys + (1 << 24)).tolist(), 0]
    assert [plain.get(key, -2) for key in asked] == [find_tile(hash_key, hash_tile, key) for key in asked]


def test_tile_keys_are_distinct() -> None:
    """Row and column of any tile on earth can be read back from its key."""
    for row, col in [(0, 0), (0, 39062), (19531, 0), (19531, 39062), (17, 1 << 20)]:
        key = tile_key(row, col)
        assert (key >> 24, key & 0xFFFFFF) == (row, col)
