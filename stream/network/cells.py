"""Cells to find segments by: a grid in integers of 1e-7 degree, kept in tiles near roads, found by hashing.

A cell is about 32 m wide, whatever the latitude; 32 x 32 cells are a tile. One grid serves any place on
earth; metres are made locally by the ellipsoid's scale at the row.
"""

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stream.geodesy import FULL_E7, metres_per_degree, wrap_e7
from stream.kernel import kernel
from stream.network.model import F64, I32, I64, NONE

CELL_E7 = 2880  # 1e-7 degree of latitude, about 32 m
TILE = 32  # cells along a tile's side
HALF_LON_E7 = 1_800_000_000
HALF_LAT_E7 = 900_000_000


@kernel
def tile_key(tile_row: Any, tile_col: Any) -> Any:
    """Join a tile's row and column into one number."""
    return (tile_row << 24) | tile_col


@kernel
def find_tile(hash_key: I64, hash_tile: I32, key: Any) -> Any:
    """Find a tile by its key: its number, -1 for one without roads, -2 outside the area."""
    mask = hash_key.shape[0] - 1
    at = (key * 0x9E3779B1 >> 7) & mask
    while hash_key[at] != NONE:
        if hash_key[at] == key:
            return hash_tile[at]
        at = (at + 1) & mask
    return -2


@kernel
def put_tiles(keys: I64, tiles: I32, hash_key: I64, hash_tile: I32) -> None:
    """Fill an empty hash (a power of two, over twice the keys) with distinct keys."""
    mask = hash_key.shape[0] - 1
    for i in range(keys.shape[0]):
        at = (keys[i] * 0x9E3779B1 >> 7) & mask
        while hash_key[at] != NONE:
            at = (at + 1) & mask
        hash_key[at] = keys[i]
        hash_tile[at] = tiles[i]


@kernel
def column_at(lon: float, width: int, n_cols: int) -> int:
    """Give the column of a longitude; columns count on across the 180th meridian, the last one is cut short.

    Parameters
    ----------
    lon : float    1e-7 degree east of the 180th meridian; may be below 0 or over a full turn
    """
    if lon < 0.0:
        return math.floor((lon + FULL_E7) / width) - n_cols
    if lon >= FULL_E7:
        return math.floor((lon - FULL_E7) / width) + n_cols
    return math.floor(lon / width)


@kernel
def spread_kernel(
    segment: Any,
    reach_m: float,
    tile_row_first: int,
    cell_width: I64,
    hash_key: I64,
    hash_tile: I32,
    cell_count: I32,
    cell_segment: I32,
    key_out: I64,
    what: int,
) -> int:
    """Walk the cells within reach of each segment.

    Parameters
    ----------
    what : int    0: write tile keys to `key_out` (or only count, when it is empty);
                  1: count segments by cell; 2: fill `cell_segment`, using `cell_count` as cursors

    Returns
    -------
    n : int       keys written or cells touched
    """
    n = 0
    writing = key_out.shape[0] > 0
    for i in range(segment.shape[0]):
        s = segment[i]
        k_lon, k_lat = metres_per_degree(s.lat * 1e-7)
        ex = s.ux * s.length
        ey = s.uy * s.length
        west = min(0.0, ex) - reach_m
        east = max(0.0, ex) + reach_m
        south = min(0.0, ey) - reach_m
        north = max(0.0, ey) + reach_m
        lat0 = np.int64(s.lat) + HALF_LAT_E7
        row_a = int((lat0 + south / k_lat * 1e7) // CELL_E7)
        row_b = int((lat0 + north / k_lat * 1e7) // CELL_E7)
        for tile_row in range(row_a >> 5, (row_b >> 5) + 1):
            width = cell_width[tile_row - tile_row_first]
            n_cols = (FULL_E7 + width - 1) // width
            lon0 = np.int64(s.lon) + HALF_LON_E7
            col_a = column_at(lon0 + west / k_lon * 1e7, width, n_cols)
            col_b = column_at(lon0 + east / k_lon * 1e7, width, n_cols)
            if what == 0:
                tile_col = NONE
                for col in range(col_a, col_b + 1):
                    if col % n_cols >> 5 != tile_col:
                        tile_col = col % n_cols >> 5
                        if writing:
                            key_out[n] = tile_key(tile_row, tile_col)
                        n += 1
                continue
            half_w = 0.5 * width * 1e-7 * k_lon
            half_h = 0.5 * CELL_E7 * 1e-7 * k_lat
            limit = reach_m + math.sqrt(half_w * half_w + half_h * half_h)
            for row in range(max(row_a, tile_row * TILE), min(row_b, tile_row * TILE + TILE - 1) + 1):
                cy = ((row + 0.5) * CELL_E7 - lat0) * 1e-7 * k_lat
                for col in range(col_a, col_b + 1):
                    real = col % n_cols
                    cx = wrap_e7(real * width + width // 2 - lon0) * 1e-7 * k_lon
                    along = min(max(cx * s.ux + cy * s.uy, 0.0), np.float64(s.length))
                    dx = cx - along * s.ux
                    dy = cy - along * s.uy
                    if dx * dx + dy * dy > limit * limit:
                        continue
                    tile = find_tile(hash_key, hash_tile, tile_key(tile_row, real >> 5))
                    if tile < 0:
                        continue
                    cell = tile * TILE * TILE + (row & 31) * TILE + (real & 31)
                    if what == 1:
                        cell_count[cell] += 1
                    else:
                        cell_segment[cell_count[cell]] = i
                        cell_count[cell] += 1
                    n += 1
    return n


def row_tables(lat_e7: I32) -> tuple[int, F64, int, I64]:
    """Make scales by row of cells and cell widths by row of tiles, for the latitudes of a network."""
    tile_rows = (np.array([lat_e7.min(), lat_e7.max()], np.int64) + HALF_LAT_E7) // CELL_E7 // TILE
    first, last = int(tile_rows[0]) - 2, int(tile_rows[1]) + 2
    rows = np.arange(first * TILE, (last + 1) * TILE)
    lat = np.clip((rows + 0.5) * CELL_E7 * 1e-7 - 90.0, -89.9, 89.9)
    scale = np.array([metres_per_degree(float(x)) for x in lat]) * 1e-7
    middle = (np.arange(first, last + 1) + 0.5) * TILE * CELL_E7 * 1e-7 - 90.0
    width = np.ceil(CELL_E7 / np.cos(np.radians(np.clip(middle, -89.0, 89.0)))).astype(np.int64)
    return first * TILE, scale, first, width


def find_tiles(
    segment: NDArray[Any], reach_m: float, tile_row_first: int, width: I64
) -> tuple[I64, I32, int]:
    """Find the tiles within reach of a road, and their neighbours, as a hash; give the count of the first."""
    none64, none32 = np.empty(0, np.int64), np.empty(0, np.int32)
    args = (segment, reach_m, tile_row_first, width, none64, none32, none32, none32)
    keys = np.empty(spread_kernel(*args, none64, 0), np.int64)
    spread_kernel(*args, keys, 0)
    keys = np.unique(keys)
    rows, cols = keys >> 24, keys & 0xFFFFFF
    around: list[I64] = []
    for d_row in (-1, 0, 1):
        other = np.clip(rows + d_row, tile_row_first, tile_row_first + len(width) - 1)
        ratio = width[rows - tile_row_first] / width[other - tile_row_first]
        n_cells = (2 * HALF_LON_E7 + width[other - tile_row_first] - 1) // width[other - tile_row_first]
        n_cols = (n_cells + TILE - 1) // TILE
        beside = [(np.floor(cols * ratio).astype(np.int64) + d_col) % n_cols for d_col in (-1, 0, 1, 2)]
        around.extend((other << 24) | col for col in beside)
    extra = np.setdiff1d(np.unique(np.concatenate(around)), keys)
    size = 1 << max(4, int(2 * (len(keys) + len(extra))).bit_length())
    hash_key, hash_tile = np.full(size, NONE, np.int64), np.full(size, NONE, np.int32)
    put_tiles(keys, np.arange(len(keys), dtype=np.int32), hash_key, hash_tile)
    put_tiles(extra, np.full(len(extra), NONE, np.int32), hash_key, hash_tile)
    return hash_key, hash_tile, len(keys)
