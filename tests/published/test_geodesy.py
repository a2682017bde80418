"""Local metres, bearings and turn angles against geodesics and published tables.

Outside: pyproj's geodesics (Karney, J. Geodesy 87, 2013, 43-55) and the tables of METHODS.md sections 2 and 3
(radii and degrees computed from the textbook formulas; the Wellington pair is GeographicLib's own example).
"""

import math

import numpy as np
import pytest
from pyproj import Geod

from stream import geodesy

WGS84 = Geod(ellps="WGS84")
LATITUDES = (-70.0, -41.3, 0.0, 1e-6, 15.0, 30.0, 45.0, 52.1, 60.17, 66.6, 70.0)
LONGITUDES = (-180.0, -179.9995, -71.1, 0.0, 24.94, 179.9990, 179.9999999)


def pairs(length_m: float) -> list[tuple[int, int, int, int, float, float]]:
    """Give pairs of points (1e-7 degree) near `length_m` apart, with their geodesic length and azimuth."""
    out = []
    for lat in LATITUDES:
        for lon in LONGITUDES:
            for azimuth in np.arange(0.0, 360.0, 17.0):
                lon2, lat2, _ = WGS84.fwd(lon, lat, azimuth, length_m)
                e7 = [round(v * 1e7) for v in (lon, lat, lon2, lat2)]
                degrees = [v * 1e-7 for v in e7]
                forward, _, metres = WGS84.inv(*degrees)
                out.append((*e7, metres, forward))
    return out


@pytest.mark.parametrize("length_m", [1.0, 30.0, 120.0, 300.0])
def test_flat_distance_matches_the_geodesic(length_m: float) -> None:
    """Up to 300 m, from the equator to 70 degrees and across 180 degrees, the flat length errs below 1 cm."""
    worst, n_across = 0.0, 0
    for lon1, lat1, lon2, lat2, metres, _ in pairs(length_m):
        east, north = geodesy.offset_m(lon1, lat1, lon2, lat2)
        worst = max(worst, abs(math.hypot(east, north) - metres))
        n_across += abs(lon2 - lon1) > 1_800_000_000
    assert worst < 0.01
    assert n_across > 50


def test_flat_distance_at_the_mean_latitude_is_better_than_promised() -> None:
    """METHODS.md section 3: with the scale at the mean latitude, below 0.01 mm up to 1 km and 70 degrees."""
    worst = 0.0
    for lon1, lat1, lon2, lat2, metres, _ in pairs(1000.0):
        east, north = geodesy.offset_m(lon1, lat1, lon2, lat2)
        worst = max(worst, abs(math.hypot(east, north) - metres))
    assert worst < 1e-5


def test_bearing_of_the_flat_vector_matches_the_azimuth_at_the_middle() -> None:
    """Over 30 m the bearing lies within 0.001 degree of the geodesic's azimuth halfway.

    At the start it may differ by half the convergence of the meridians, 0.0004 degree for 30 m at 70 degrees.
    """
    for lon1, lat1, lon2, lat2, metres, forward in pairs(30.0):
        east, north = geodesy.offset_m(lon1, lat1, lon2, lat2)
        got = geodesy.bearing_deg(east, north)
        _, _, back = WGS84.fwd(lon1 * 1e-7, lat1 * 1e-7, forward, metres / 2)
        assert 0.0 <= got < 360.0
        assert abs(math.remainder(got - (back + 180.0), 360.0)) < 0.001


def test_metres_per_degree_match_the_table() -> None:
    """METHODS.md section 3: metres per degree of latitude and longitude, to the printed millimetre."""
    table = {
        0.0: (110574.276, 111319.491),
        30.0: (110852.442, 96486.280),
        45.0: (111131.777, 78846.835),
        60.17: (111415.172, 55513.474),
        70.0: (111562.025, 38186.541),
    }
    for lat, (of_lat, of_lon) in table.items():
        east, north = geodesy.metres_per_degree(lat)
        assert (of_lon, of_lat) == (round(east, 3), round(north, 3))


def test_pair_at_helsinki_matches_the_table() -> None:
    """METHODS.md section 3: 60.17 24.94 to 60.171 24.945 is 299.0897 m, at 68.127 degrees."""
    east, north = geodesy.offset_m(249_400_000, 601_700_000, 249_450_000, 601_710_000)
    assert math.hypot(east, north) == pytest.approx(299.0897, abs=1e-4)
    middle = (68.127068 + (-111.868594 + 180.0)) / 2
    assert geodesy.bearing_deg(east, north) == pytest.approx(middle, abs=1e-4)


def test_library_gives_the_published_geodesics() -> None:
    """The library used as outside here reproduces the pair printed by GeographicLib: the check is checked."""
    azimuth, _, metres = WGS84.inv(174.81, -41.32, -5.50, 40.96)
    assert metres == pytest.approx(19959679.2674, abs=1e-4)
    assert azimuth == pytest.approx(161.067670, abs=1e-6)


@pytest.mark.parametrize(
    ("bearing_in", "bearing_out", "expected"),
    [
        (0, 90, 90),
        (0, 270, -90),
        (350, 10, 20),
        (10, 350, -20),
        (0, 180, 180),
        (180, 0, 180),
        (45, 226, -179),
        (359.5, 179.5, 180),
    ],
)
def test_turn_angle_matches_the_table(bearing_in: float, bearing_out: float, expected: float) -> None:
    """METHODS.md section 2: bearing out minus bearing in, wrapped into (-180, 180], right positive."""
    assert geodesy.turn_deg(bearing_in, bearing_out) == expected


def test_turn_angle_agrees_with_the_cross_product() -> None:
    """The sign of a turn is that of the cross product of both directions (textbook), its size their angle."""
    for b_in in np.arange(0.0, 360.0, 7.3):
        for b_out in np.arange(0.0, 360.0, 11.9):
            got = geodesy.turn_deg(b_in, b_out)
            x1, y1 = math.sin(math.radians(b_in)), math.cos(math.radians(b_in))
            x2, y2 = math.sin(math.radians(b_out)), math.cos(math.radians(b_out))
            expected = -math.degrees(math.atan2(x1 * y2 - y1 * x2, x1 * x2 + y1 * y2))
            assert math.remainder(got - expected, 360.0) == pytest.approx(0.0, abs=1e-9)
            assert -180.0 < got <= 180.0


def test_longitudes_wrap_at_180_degrees() -> None:
    """A step across the 180th meridian is the short one, and its sign says east or west."""
    assert geodesy.wrap_e7(-3_599_999_990) == 10
    assert geodesy.wrap_e7(3_599_999_990) == -10
    east, north = geodesy.offset_m(1_799_999_995, 0, -1_799_999_995, 0)
    assert (east, north) == (pytest.approx(10e-7 * 111319.491, abs=1e-6), 0.0)
    west, _ = geodesy.offset_m(-1_799_999_995, 0, 1_799_999_995, 0)
    assert west == pytest.approx(-east)
