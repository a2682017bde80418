"""Metres, bearings and turn angles on the WGS 84 ellipsoid, without a map projection.

Guarantee: with the scale taken at the mean latitude of a pair, the flat distance differs from the
geodesic by less than 1 cm over 300 m up to 74 degrees of latitude (METHODS.md section 3).
"""

import math

from stream.kernel import kernel

A_M = 6_378_137.0
E2 = 0.006_694_379_990_141_3
RAD = math.pi / 180.0
FULL_E7 = 3_600_000_000


@kernel
def metres_per_degree(lat_deg: float) -> tuple[float, float]:
    """Give metres per degree of longitude and of latitude at a latitude.

    Source: meridian and prime-vertical radii, METHODS.md section 3.
    """
    s = math.sin(lat_deg * RAD)
    w = 1.0 - E2 * s * s
    n = A_M / math.sqrt(w)
    m = n * (1.0 - E2) / w
    return n * math.cos(lat_deg * RAD) * RAD, m * RAD


@kernel
def wrap_e7(d_lon_e7: int) -> int:
    """Bring a difference of longitudes, in 1e-7 degree, into [-180, 180) degrees."""
    if d_lon_e7 >= FULL_E7 // 2:
        return d_lon_e7 - FULL_E7
    if d_lon_e7 < -(FULL_E7 // 2):
        return d_lon_e7 + FULL_E7
    return d_lon_e7


@kernel
def offset_m(lon1_e7: int, lat1_e7: int, lon2_e7: int, lat2_e7: int) -> tuple[float, float]:
    """Give the metres east and north from point 1 to point 2, scaled at their mean latitude.

    Coordinates are integers of 1e-7 degree; the pair may stand across the 180th meridian.
    """
    k_lon, k_lat = metres_per_degree((lat1_e7 + lat2_e7) * 0.5e-7)
    return wrap_e7(lon2_e7 - lon1_e7) * 1e-7 * k_lon, (lat2_e7 - lat1_e7) * 1e-7 * k_lat


@kernel
def bearing_deg(east_m: float, north_m: float) -> float:
    """Give the bearing of a vector, degrees clockwise from true north in [0, 360)."""
    b = math.atan2(east_m, north_m) / RAD
    return b + 360.0 if b < 0.0 else b


@kernel
def turn_deg(bearing_in_deg: float, bearing_out_deg: float) -> float:
    """Give bearing out minus bearing in, wrapped into (-180, 180]; right is positive."""
    d = bearing_out_deg - bearing_in_deg
    return d - 360.0 * math.ceil((d - 180.0) / 360.0)
