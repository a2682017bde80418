"""Zones from GeoJSON: which zone holds a point, what it says of itself, and what bad files are told."""

import itertools
import json
import re
from datetime import UTC, datetime
from importlib import resources
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np
import pytest

from stream.config import load_settings
from stream.errors import InputError
from stream.network.zones import read_zones, time_zone_at

SETTINGS = load_settings()


def ring(lon: float, lat: float, size: float = 1.0) -> list[list[float]]:
    """Give the outline of a square, anticlockwise from its south-west corner."""
    return [[lon, lat], [lon + size, lat], [lon + size, lat + size], [lon, lat + size], [lon, lat]]


def feature(properties: dict[str, Any], rings: Any, kind: str = "Polygon") -> dict[str, Any]:
    """Give one GeoJSON feature."""
    geometry = {"type": kind, "coordinates": rings}
    return {"type": "Feature", "properties": properties, "geometry": geometry}


def written(folder: Path, *features: Any, **more: Any) -> Path:
    """Write features as a file of zones."""
    path = folder / "zones.geojson"
    path.write_text(json.dumps({"type": "FeatureCollection", "features": list(features), **more}))
    return path


def test_first_zone_that_holds_the_point_wins(tmp_path: Path) -> None:
    """Where zones overlap the earlier feature is the zone; outside all it is -1."""
    inner, outer = feature({"zone": "core"}, [ring(1, 1)]), feature({"name": "ring"}, [ring(0, 0, 3)])
    zones = read_zones(written(tmp_path, inner, outer), SETTINGS)
    got = zones.place(np.array([1.5, 0.5, 9.0, 2.5]), np.array([1.5, 0.5, 9.0, 2.5]))
    assert zones.names == ("core", "ring")
    assert (got.dtype, got.tolist()) == (np.int32, [0, 1, -1, 1])
    turned = read_zones(written(tmp_path, outer, inner), SETTINGS)
    assert turned.place(np.array([1.5]), np.array([1.5])).tolist() == [0]


def test_border_belongs_to_the_first_zone_on_it(tmp_path: Path) -> None:
    """A point on a shared border is in exactly one zone, the earlier."""
    left, right = feature({"zone": "w"}, [ring(0, 0)]), feature({"zone": "e"}, [ring(1, 0)])
    zones = read_zones(written(tmp_path, left, right), SETTINGS)
    assert zones.place(np.array([1.0, 2.0]), np.array([0.5, 0.5])).tolist() == [0, 1]


def test_hole_and_second_part_of_a_multipolygon(tmp_path: Path) -> None:
    """A hole is outside, each part of a MultiPolygon is inside (RFC 7946 sections 3.1.6 and 3.1.7)."""
    parts = [[ring(0, 0, 3), ring(1, 1)], [ring(10, 10)]]
    zones = read_zones(written(tmp_path, feature({"zone": "z"}, parts, "MultiPolygon")), SETTINGS)
    lon = np.array([0.5, 1.5, 10.5, 5.0])
    assert zones.place(lon, lon).tolist() == [0, -1, 0, -1]


def test_parts_on_both_sides_of_the_180th_meridian(tmp_path: Path) -> None:
    """A zone cut at the 180th meridian holds points on either side (RFC 7946 section 3.1.9)."""
    parts = [[ring(179, -18)], [ring(-180, -18)]]
    zones = read_zones(written(tmp_path, feature({"zone": "z"}, parts, "MultiPolygon")), SETTINGS)
    lon = np.array([179.9, -179.9, 180.0, -180.0, 0.0])
    assert zones.place(lon, np.full(5, -17.5)).tolist() == [0, 0, 0, 0, -1]


def test_no_point_gives_no_index(tmp_path: Path) -> None:
    """Placing nothing gives an empty array."""
    zones = read_zones(written(tmp_path, feature({"zone": "z"}, [ring(0, 0)])), SETTINGS)
    assert zones.place(np.empty(0), np.empty(0)).shape == (0,)


def test_place_agrees_with_ray_casting(tmp_path: Path) -> None:
    """Random points in a random star lie where the crossing-number rule (from memory) puts them."""
    rng = np.random.default_rng(20240612)
    angle = np.sort(rng.uniform(0, 2 * np.pi, 25))
    reach = rng.uniform(0.2, 1.0, 25)
    star = np.column_stack([24.9 + reach * np.cos(angle), 60.2 + reach * np.sin(angle)])
    outline = [*star.tolist(), star[0].tolist()]
    zones = read_zones(written(tmp_path, feature({"zone": "z"}, [outline])), SETTINGS)
    lon, lat = rng.uniform(23.9, 25.9, 500), rng.uniform(59.2, 61.2, 500)
    expected = []
    for x, y in zip(lon, lat, strict=True):
        inside = False
        for (x1, y1), (x2, y2) in itertools.pairwise(outline):
            if (y1 > y) != (y2 > y) and x < x1 + (y - y1) / (y2 - y1) * (x2 - x1):
                inside = not inside
        expected.append(0 if inside else -1)
    assert expected == zones.place(lon, lat).tolist()
    assert 50 < expected.count(0) < 450


def test_zone_says_its_time_zone_and_driving_side(tmp_path: Path) -> None:
    """The properties of a feature come before what the configuration says."""
    given = feature({"zone": "a", "time_zone": "Asia/Tokyo", "driving_side": "left"}, [ring(0, 0)])
    plain = feature({"zone": "b"}, [ring(24.5, 60)])
    zones = read_zones(written(tmp_path, given, plain), SETTINGS)
    assert zones.time_zones == ("Asia/Tokyo", "Europe/Helsinki")
    assert zones.driving_sides == ("left", "")
    over = {"network": {"time_zone": "Africa/Lagos", "driving_side": "right"}}
    zones = read_zones(written(tmp_path, given, plain), load_settings(over=over))
    assert zones.time_zones == ("Asia/Tokyo", "Africa/Lagos")
    assert zones.driving_sides == ("left", "right")


def test_lone_feature_number_as_name_height_and_byte_order_mark(tmp_path: Path) -> None:
    """A single Feature, a numeric name, positions with a height and a byte order mark are all legal."""
    path = tmp_path / "zones.json"
    outline = [[*p, 12.5] for p in ring(0, 0)]
    path.write_bytes(b"\xef\xbb\xbf" + json.dumps(feature({"zone": 7}, [outline])).encode())
    assert read_zones(path, SETTINGS).names == ("7",)


SQUARE = [ring(0, 0)]
BAD = {
    "swapped": (
        feature({"zone": "z"}, [[[y, x] for x, y in ring(174, -41)]]),
        "feature 1, position 1: lat.*swapped",
    ),
    "projected": (
        feature({"zone": "z"}, [ring(385000, 6672000)]),
        "feature 1, position 1: .*no degrees; project",
    ),
    "beyond 180": (
        feature({"zone": "z"}, [ring(179.5, 0)]),
        "position 2: longitude 180.5 .*cut the feature in two",
    ),
    "across 180": (
        feature({"zone": "z"}, [[[179, 0], [-179, 0], [-179, 1], [179, 1], [179, 0]]]),
        "position 2: longitude jumps from 179 to -179; cut the area in two",
    ),
    "point": (feature({"zone": "z"}, [0, 0], "Point"), "holds Point, no Polygon or MultiPolygon; draw"),
    "no name": (feature({"label": "z"}, SQUARE), "feature 1: has neither property `zone` nor `name`; add"),
    "name no text": (feature({"zone": ["z"]}, SQUARE), r"feature 1: zone = \['z'\] is no name; write"),
    "empty name": (feature({"zone": " "}, SQUARE), "feature 1: zone = ' ' is no name; write"),
    "time zone": (
        feature({"zone": "z", "time_zone": "Europe/Helsinky"}, SQUARE),
        "feature 1: time_zone 'Europe/Helsinky' is not in the IANA database; did you mean Europe/Helsinki",
    ),
    "time zone no text": (
        feature({"zone": "z", "time_zone": [2]}, SQUARE),
        r"time_zone \[2\] is not in the IANA",
    ),
    "side": (
        feature({"zone": "z", "driving_side": "L"}, SQUARE),
        "driving_side 'L' is neither right nor left; write",
    ),
    "open ring": (
        feature({"zone": "z"}, [ring(0, 0)[:-1]]),
        r"feature 1: a ring doesn't end .*\(0, 0\); repeat",
    ),
    "short ring": (
        feature({"zone": "z"}, [ring(0, 0)[:3]]),
        "feature 1: holds 3 positions where 4 are needed",
    ),
    "no rings": (feature({"zone": "z"}, []), "feature 1: Polygon without rings; draw"),
    "bow": (
        feature({"zone": "z"}, [[[0, 0], [1, 1], [1, 0], [0, 1], [0, 0]]]),
        "no proper area .Self-intersection",
    ),
    "text": (feature({"zone": "z"}, [[["0", "0"], *ring(0, 0)]]), "position 1: .* is no pair"),
    "not finite": (feature({"zone": "z"}, [[[float("nan"), 0], *ring(0, 0)]]), "position 1: .*not finite"),
    "no feature": ({"type": "Polygon", "coordinates": SQUARE}, "feature 1: is no GeoJSON Feature .*; mend"),
}


@pytest.mark.parametrize("case", BAD)
def test_bad_feature_is_told_what_where_and_mend(case: str, tmp_path: Path) -> None:
    """Each fault of a feature gives one error with the file, the feature and the mend."""
    bad, message = BAD[case]
    with pytest.raises(InputError, match=r"zones\.geojson.*" + message):
        read_zones(written(tmp_path, bad), SETTINGS)


def test_name_there_twice_names_both_places(tmp_path: Path) -> None:
    """Two features of one name are refused, and the message points at both."""
    path = written(tmp_path, feature({"zone": "a"}, SQUARE), feature({"name": "a"}, [ring(5, 5)]))
    with pytest.raises(InputError, match=r"feature 2: zone 'a' stands already at .* feature 1; rename"):
        read_zones(path, SETTINGS)


def test_other_shape_among_polygons_is_refused_not_skipped(tmp_path: Path) -> None:
    """A line between polygons is an error with its number: nothing is dropped unsaid."""
    path = written(
        tmp_path, feature({"zone": "a"}, SQUARE), feature({"zone": "b"}, [[0, 0], [1, 1]], "LineString")
    )
    with pytest.raises(InputError, match="feature 2: geometry is LineString, no Polygon"):
        read_zones(path, SETTINGS)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (b"lon;lat\n1;2\n", "line 1: is not JSON"),
        (b"[1, 2]", "is a JSON list, not a GeoJSON FeatureCollection"),
        (b'{"type": "Topology"}', "is type 'Topology', not a GeoJSON FeatureCollection"),
        (b'{"type": "FeatureCollection", "features": []}', "holds nothing, no Polygon"),
        (b"\xff\xfe\x00", "is not UTF-8 text"),
        (b"[" * 200_000, "nested too deep"),
    ],
)
def test_file_that_is_no_geojson_is_told(text: bytes, message: str, tmp_path: Path) -> None:
    """Other files than GeoJSON are refused by what they are."""
    path = tmp_path / "zones.geojson"
    path.write_bytes(text)
    with pytest.raises(InputError, match=r"zones\.geojson.*" + message):
        read_zones(path, SETTINGS)


def test_missing_file_and_folder_are_told(tmp_path: Path) -> None:
    """A name that leads nowhere or to a folder is an input error."""
    with pytest.raises(InputError, match="no such file; check the name"):
        read_zones(tmp_path / "none.geojson", SETTINGS)
    with pytest.raises(InputError, match="can't be read"):
        read_zones(tmp_path, SETTINGS)


def test_crs_of_older_files(tmp_path: Path) -> None:
    """A `crs` of WGS 84 passes, any other is refused by name (RFC 7946 section 4 has none)."""
    crs = {"type": "name", "properties": {"name": "urn:ogc:def:crs:OGC:1.3:CRS84"}}
    assert read_zones(written(tmp_path, feature({"zone": "a"}, SQUARE), crs=crs), SETTINGS).names == ("a",)
    crs["properties"] = {"name": "urn:ogc:def:crs:EPSG::3067"}
    with pytest.raises(InputError, match=r"its crs is 'urn:ogc:def:crs:EPSG::3067'.*export it again"):
        read_zones(written(tmp_path, feature({"zone": "a"}, SQUARE), crs=crs), SETTINGS)


def test_swapped_degrees_that_are_legal_are_found_by_the_junctions(tmp_path: Path) -> None:
    """Helsinki written latitude first lies elsewhere on earth: only the junctions show the swap."""
    path = written(tmp_path, feature({"zone": "z"}, [ring(60, 24.5)]))
    zones = read_zones(path, SETTINGS)
    lon, lat = np.array([24.94, 24.95, 29.0]), np.array([60.17, 60.18, 65.0])
    with pytest.raises(
        InputError, match=r"zones\.geojson.*none of 3 places .* but 2 would with longitude and lat.*swapped"
    ):
        zones.place(lon, lat)
    assert zones.place(lat, lon).tolist() == [0, 0, -1]
    assert zones.place(np.array([100.0]), np.array([10.0])).tolist() == [-1]


def test_time_zone_at_the_places_of_the_iana_table() -> None:
    """At each place of zone1970.tab (IANA database) the zone found keeps the clock of the zone named.

    Xinjiang is left out: the database itself notes two clocks in use there (Asia/Urumqi, Asia/Shanghai).
    """

    def degrees(text: str, whole: int) -> float:
        sign, digits = (-1 if text[0] == "-" else 1), text[1:]
        seconds = int(digits[whole + 2 :] or 0)
        return sign * (int(digits[:whole]) + int(digits[whole : whole + 2]) / 60 + seconds / 3600)

    def clock(name: str) -> list[object]:
        days = (datetime(2024, month, 1, tzinfo=UTC) for month in (1, 4, 7, 11))
        return [day.astimezone(ZoneInfo(name)).utcoffset() for day in days]

    table = resources.files("tzdata").joinpath("zoneinfo", "zone1970.tab").read_text(encoding="utf-8")
    rows = [line.split("\t") for line in table.splitlines() if not line.startswith("#")]
    assert len(rows) > 300
    for _, place, name, *_ in rows:
        if name == "Asia/Urumqi":
            continue
        lat, lon = re.fullmatch(r"([+-]\d+)([+-]\d+)", place).groups()  # type: ignore[union-attr]
        assert clock(name) == clock(time_zone_at(degrees(lon, 3), degrees(lat, 2))), name
