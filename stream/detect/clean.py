"""Which pings are dropped, and why: the reasons of `records.DROP_REASONS` that the pass decides.

Guarantee: each ping is used, dropped for one reason, or held (at most one a vehicle) until the next one
decides; nothing is lost uncounted.
"""

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stream.geodesy import wrap_e7
from stream.kernel import kernel
from stream.network.cells import CELL_E7, HALF_LAT_E7, HALF_LON_E7, find_tile, tile_key
from stream.network.model import F64, I32
from stream.network.routes import StreetIndex

USED = -1
BAD_COORDINATE, NULL_ISLAND, OUTSIDE_AREA, DUPLICATE, SAME_TIME_ELSEWHERE, LATE, IMPOSSIBLE_SPEED = range(7)

# What `judge` says beside the reasons to drop.
GOOD = -1
HOLD = -2  # may be a jump: wait for the next ping
DROP_HELD = -3  # good, and what was held was an outlier
HELD_ELSEWHERE = (
    -4
)  # agrees with the held ping, not with the one before: the trip ends, a new one starts there
REPLACE_HELD = -5  # agrees with neither: the held one is an outlier, this one is held


@kernel
def to_e7(degrees: float) -> int:
    """Turn degrees into integers of 1e-7 degree, halves upward."""
    return math.floor(degrees * 1e7 + 0.5)


@kernel
def place_kernel(
    lon: F64, lat: F64, index: StreetIndex, lon_out: I32, lat_out: I32, reason_out: NDArray[np.int8]
) -> None:
    """Turn coordinates into integers of 1e-7 degree and find those that no street can explain.

    Parameters
    ----------
    lon, lat : float64[n]      degrees, WGS 84; anything
    lon_out, lat_out : int32[n]
    reason_out : int8[n]       -1, or the reason to drop

    Source: DESIGN.md section 5, Clean.
    """
    for i in range(lon.shape[0]):
        x = lon[i]
        y = lat[i]
        lon_out[i] = 0
        lat_out[i] = 0
        if not (-180.0 <= x <= 180.0 and -90.0 <= y <= 90.0):  # NaN fails too
            reason_out[i] = BAD_COORDINATE
            continue
        if abs(x) < 1e-6 and abs(y) < 1e-6:
            reason_out[i] = NULL_ISLAND
            continue
        e = to_e7(x)
        n = to_e7(y)
        if e >= HALF_LON_E7:
            e -= 2 * HALF_LON_E7
        lon_out[i] = e
        lat_out[i] = n
        row = (n + HALF_LAT_E7) // CELL_E7
        tile_row = row >> 5
        at = tile_row - index.tile_row_first
        if at < 0 or at >= index.cell_width.shape[0]:
            reason_out[i] = OUTSIDE_AREA
            continue
        col = (e + HALF_LON_E7) // index.cell_width[at]
        if find_tile(index.hash_key, index.hash_tile, tile_key(tile_row, col >> 5)) == -2:
            reason_out[i] = OUTSIDE_AREA
        else:
            reason_out[i] = USED


@kernel
def scale_at(index: StreetIndex, lat: Any) -> tuple[float, float]:
    """Give the metres of 1e-7 degree of longitude and of latitude at a latitude's row of cells."""
    row: Any = (np.int64(lat) + HALF_LAT_E7) // CELL_E7 - index.row_first
    row = min(max(row, 0), index.row_scale.shape[0] - 1)
    return index.row_scale[row, 0], index.row_scale[row, 1]


@kernel
def square_m2(k_lon: float, k_lat: float, lon1: Any, lat1: Any, lon2: Any, lat2: Any) -> float:
    """Give the squared distance of two points at a given scale."""
    d_lon: Any = np.int64(lon2) - lon1
    dx = wrap_e7(d_lon) * k_lon
    dy = (np.int64(lat2) - lat1) * k_lat
    return dx * dx + dy * dy


@kernel
def apart_m(index: StreetIndex, lon1: Any, lat1: Any, lon2: Any, lat2: Any) -> float:
    """Give the distance of two points in metres, scaled at the first one's row of cells (flat)."""
    k_lon, k_lat = scale_at(index, lat1)
    return math.sqrt(square_m2(k_lon, k_lat, lon1, lat1, lon2, lat2))


@kernel
def is_reachable(square: float, dt_us: int, par: Any) -> bool:
    """Tell whether a vehicle can have come so far (squared metres) in that time."""
    limit_m = par.jump_slack_m + par.max_speed_mps * dt_us * 1e-6
    return square <= limit_m * limit_m


@kernel
def judge(st: Any, t_us: int, lon: int, lat: int, k_lon: float, k_lat: float, par: Any) -> int:
    """Decide on a placed ping from the last good one and the held one; changes nothing.

    Parameters
    ----------
    k_lon, k_lat : float    metres of 1e-7 degree at the ping

    Returns
    -------
    verdict : int    a reason to drop (>= 0), or GOOD, HOLD, DROP_HELD, HELD_ELSEWHERE, REPLACE_HELD
    """
    if not st.has_last:
        return GOOD
    newest = st.held_us if st.is_held else st.t_us
    if t_us < newest:
        return LATE
    if t_us == newest:
        same_lon = st.held_lon if st.is_held else st.lon
        same_lat = st.held_lat if st.is_held else st.lat
        return DUPLICATE if lon == same_lon and lat == same_lat else SAME_TIME_ELSEWHERE
    from_last = is_reachable(square_m2(k_lon, k_lat, st.lon, st.lat, lon, lat), t_us - st.t_us, par)
    if not st.is_held:
        return GOOD if from_last else HOLD
    if from_last:
        return DROP_HELD
    square = square_m2(k_lon, k_lat, st.held_lon, st.held_lat, lon, lat)
    return HELD_ELSEWHERE if is_reachable(square, t_us - st.held_us, par) else REPLACE_HELD
