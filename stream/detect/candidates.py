"""Where on the streets a ping may lie: the nearest place on each road within reach."""

from typing import Any

import numpy as np

from stream.geodesy import wrap_e7
from stream.kernel import kernel
from stream.network.cells import CELL_E7, HALF_LAT_E7, HALF_LON_E7, find_tile, tile_key
from stream.network.routes import StreetIndex

MAX_ROADS = 10  # nearest roads looked at


PLACES = np.dtype(
    [
        ("road", np.int32, (MAX_ROADS,)),
        ("at_m", np.float64, (MAX_ROADS,)),  # chainage along the drawing
        ("square_m2", np.float64, (MAX_ROADS,)),  # squared distance from the ping
    ],
    align=True,
)
Places = Any  # record of PLACES: room for the candidates of one ping


@kernel
def project_kernel(segment: Any, east_m: float, north_m: float) -> tuple[float, float]:
    """Project a point, in metres from the segment's start: distance along it, squared distance off it."""
    along = east_m * segment.ux + north_m * segment.uy
    if along < 0.0:
        along = 0.0
    elif along > segment.length:
        along = np.float64(segment.length)
    dx = east_m - along * segment.ux
    dy = north_m - along * segment.uy
    return along, dx * dx + dy * dy


@kernel
def put_place(places: Places, n: int, road: int, at_m: float, square_m2: float) -> int:
    """Put a road among the nearest ones, in order of distance; give the new count."""
    at = n
    while at > 0 and places.square_m2[at - 1] > square_m2:
        at -= 1
    if at >= MAX_ROADS:
        return n
    last = n if n < MAX_ROADS else MAX_ROADS - 1
    for k in range(last, at, -1):
        places.road[k] = places.road[k - 1]
        places.at_m[k] = places.at_m[k - 1]
        places.square_m2[k] = places.square_m2[k - 1]
    places.road[at] = road
    places.at_m[at] = at_m
    places.square_m2[at] = square_m2
    return n + 1 if n < MAX_ROADS else n


@kernel
def find_places_kernel(index: StreetIndex, lon: Any, lat: Any, radius_m: float, places: Places) -> int:
    """Find the nearest place on each road within the radius.

    Parameters
    ----------
    lon, lat : int       1e-7 degree
    places : written     ascending by distance

    Returns
    -------
    n : int
    """
    lat0 = np.int64(lat) + HALF_LAT_E7
    lon0 = np.int64(lon) + HALF_LON_E7
    row = lat0 // CELL_E7
    tile_row = row >> 5
    tile_at = tile_row - index.tile_row_first
    if tile_at < 0 or tile_at >= index.cell_width.shape[0]:
        return 0
    col = lon0 // index.cell_width[tile_at]
    tile = find_tile(index.hash_key, index.hash_tile, tile_key(tile_row, col >> 5))
    if tile < 0:
        return 0
    cell = tile * 1024 + (row & 31) * 32 + (col & 31)
    k_lon = index.row_scale[row - index.row_first, 0]
    k_lat = index.row_scale[row - index.row_first, 1]
    limit = radius_m * radius_m
    n = 0
    road = -1
    best = limit
    best_at = 0.0
    for i in range(index.cell_start[cell], index.cell_start[cell + 1]):
        s = index.segment[index.cell_segment[i]]
        if s.road != road:
            if road >= 0 and best < limit:
                n = put_place(places, n, road, best_at, best)
            road = s.road
            best = limit
        along, square = project_kernel(s, wrap_e7(np.int64(lon) - s.lon) * k_lon, (lat - s.lat) * k_lat)
        if square < best:
            best = square
            best_at = s.at + along
    if road >= 0 and best < limit:
        n = put_place(places, n, road, best_at, best)
    return n
