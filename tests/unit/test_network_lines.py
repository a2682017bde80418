"""Road lines of the user's own, from GeoJSON and GeoParquet: what becomes a way, and where ways meet."""

import json
import math
import struct
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
import shapely
from pyproj import CRS

from stream.errors import InputError, NetworkError
from stream.network import raw
from stream.network.lines import read_lines

CLASSES = ("primary", "residential")
A, B, C, D = [24.94, 60.17], [24.95, 60.17], [24.95, 60.18], [24.96, 60.17]


def feature(properties: dict[str, Any], coordinates: Any, kind: str = "LineString") -> dict[str, Any]:
    """Give one GeoJSON feature."""
    geometry = {"type": kind, "coordinates": coordinates}
    return {"type": "Feature", "properties": properties, "geometry": geometry}


def written(folder: Path, *features: Any) -> Path:
    """Write features as a GeoJSON file."""
    path = folder / "roads.geojson"
    path.write_text(json.dumps({"type": "FeatureCollection", "features": list(features)}))
    return path


def read(folder: Path, *features: Any) -> raw.RawRoads:
    """Write features, read them as roads, and hold the result to the guarantee of every reader."""
    roads = read_lines(written(folder, *features), CLASSES)
    roads.check()
    return roads


def drawn(roads: raw.RawRoads, way: int) -> list[list[float]]:
    """Give the coordinates of one way."""
    refs = roads.ref_node[roads.ref_start[way] : roads.ref_start[way + 1]]
    return [[float(roads.node_lon_e7[n]) / 1e7, float(roads.node_lat_e7[n]) / 1e7] for n in refs]


def test_lines_meet_at_common_vertices_only(tmp_path: Path) -> None:
    """An end on another line's vertex joins them; lines that cross without a vertex don't meet."""
    roads = read(
        tmp_path,
        feature({"class": "primary"}, [A, B, D]),
        feature({"class": "residential"}, [C, B]),
        feature({"class": "residential"}, [[24.945, 60.16], [24.945, 60.18]]),
    )
    assert roads.way_id.tolist() == [1, 2, 3]
    assert roads.way_class.tolist() == [0, 1, 1]
    assert roads.ref_start[1:].tolist() == [3, 5, 7]
    assert drawn(roads, 0) == [A, B, D]
    assert len(roads.node_id) == 6
    assert roads.ref_node[1] == roads.ref_node[4]


@pytest.mark.parametrize(
    ("properties", "expected"),
    [
        ({}, raw.ALONG | raw.AGAINST),
        ({"direction": "forward"}, raw.ALONG),
        ({"direction": "backward"}, raw.AGAINST),
        ({"direction": "both"}, raw.ALONG | raw.AGAINST),
        ({"oneway": "yes"}, raw.ALONG),
        ({"oneway": True}, raw.ALONG),
        ({"oneway": 1}, raw.ALONG),
        ({"oneway": -1}, raw.AGAINST),
        ({"oneway": False}, raw.ALONG | raw.AGAINST),
        ({"oneway": None}, raw.ALONG | raw.AGAINST),
        ({"oneway": "yes", "direction": "both"}, raw.ALONG | raw.AGAINST),
        ({"junction": "roundabout"}, raw.ALONG),
        ({"junction": "circular"}, raw.ALONG | raw.AGAINST),
    ],
)
def test_direction_of_a_line(properties: dict[str, Any], expected: int, tmp_path: Path) -> None:
    """`direction` comes first, then `oneway` as in OSM (wiki page of the key), else both ways are open."""
    roads = read(tmp_path, feature({"class": "primary", **properties}, [A, B]))
    assert [expected] == roads.way_open.tolist()


def test_limits_of_a_line(tmp_path: Path) -> None:
    """A limit in km/h or as an OSM value with its unit; 30 mph is 48.280 km/h (METHODS.md section 2)."""
    roads = read(
        tmp_path,
        feature({"class": "primary", "limit_kmh": 60}, [A, B]),
        feature({"highway": "primary", "maxspeed": "30 mph"}, [B, C]),
        feature({"class": "primary", "maxspeed:forward": 40, "maxspeed": "50"}, [B, D]),
        feature({"class": "primary"}, [C, D]),
    )
    assert np.array([60, 48.28032, 40, np.nan]) == pytest.approx(
        roads.way_limit_along_kmh, rel=1e-6, nan_ok=True
    )
    assert np.array([60, 48.28032, 50, np.nan]) == pytest.approx(
        roads.way_limit_against_kmh, rel=1e-6, nan_ok=True
    )


def test_rings_are_known(tmp_path: Path) -> None:
    """`junction` marks the ring of a roundabout and that of a circle without right of way."""
    ring = [A, B, C, A]
    roads = read(
        tmp_path,
        feature({"class": "primary", "junction": "roundabout"}, ring),
        feature({"class": "primary", "junction": "circular"}, ring),
        feature({"class": "primary"}, [A, D]),
    )
    assert roads.way_ring.tolist() == [raw.RING_ROUNDABOUT, raw.RING_CIRCULAR, raw.RING_NONE]
    assert roads.ref_node[0] == roads.ref_node[3]


def test_what_is_left_out_is_counted(tmp_path: Path) -> None:
    """Other classes, closed roads, changing directions, empty or short shapes are counted."""
    empty = {"type": "Feature", "properties": {"class": "primary"}, "geometry": None}
    roads = read(
        tmp_path,
        feature({"class": "primary"}, [A, B]),
        feature({"class": "towpath"}, [A, C]),
        feature({"class": "primary", "access": "private"}, [A, C]),
        feature({"class": "primary", "oneway": "reversible"}, [A, C]),
        empty,
        feature({"class": "primary"}, [C, C]),
    )
    expected = {"class": 1, "access": 1, "direction_changes": 1, "no_geometry": 1, "no_length": 1}
    assert expected == roads.report["ways_left_out"]
    assert roads.report["ways"]["taken"] == 1
    assert len(roads.node_id) == 2


def test_ids_of_ways_are_taken_and_sorted(tmp_path: Path) -> None:
    """Whole-number ids become way ids, ascending, whether beside or among the properties."""
    second = {**feature({"class": "residential"}, [B, C]), "id": 7}
    roads = read(tmp_path, feature({"class": "primary", "id": "20"}, [A, B]), second)
    assert (roads.way_id.tolist(), roads.way_class.tolist()) == ([7, 20], [1, 0])
    assert drawn(roads, 0) == [B, C]
    assert roads.report["ways"]["numbered_by_position"] == 0


def test_ids_that_are_no_numbers_give_way_to_feature_numbers(tmp_path: Path) -> None:
    """If any way lacks a whole number, all are numbered by their place in the file, and it is told."""
    roads = read(
        tmp_path,
        feature({"class": "towpath", "id": 3}, [A, B]),
        feature({"class": "primary", "id": 9}, [A, B]),
        feature({"class": "primary", "id": "Main St"}, [B, C]),
    )
    assert roads.way_id.tolist() == [2, 3]
    assert roads.report["ways"]["numbered_by_position"] == 2


def test_parts_of_a_multiline_share_their_id(tmp_path: Path) -> None:
    """Each part of a MultiLineString is a row of its own under one id."""
    roads = read(tmp_path, feature({"class": "primary", "id": 5}, [[A, B], [C, D]], "MultiLineString"))
    assert roads.way_id.tolist() == [5, 5]
    assert (drawn(roads, 0), drawn(roads, 1)) == ([A, B], [C, D])
    assert roads.report["ways"]["taken"] == 1


def test_noise_of_the_last_digit_parts_no_roads(tmp_path: Path) -> None:
    """Vertices that differ by less than 1e-7 degree, on either side of a rounding limit, are one node."""
    first, second = [24.95000004999, 60.17000004999], [24.95000005001, 60.17000005001]
    roads = read(
        tmp_path, feature({"class": "primary"}, [A, first]), feature({"class": "primary"}, [second, C])
    )
    assert len(roads.node_id) == 3
    assert roads.ref_node[1] == roads.ref_node[2]
    apart = [24.95 + 3e-7, 60.17]
    roads = read(tmp_path, feature({"class": "primary"}, [A, B]), feature({"class": "primary"}, [apart, C]))
    assert len(roads.node_id) == 4


def test_lines_cut_at_the_180th_meridian_meet_there(tmp_path: Path) -> None:
    """180 degrees east and west are one node (RFC 7946 section 3.1.9 has lines cut there)."""
    roads = read(
        tmp_path,
        feature({"class": "primary"}, [[179.99, -17], [180.0, -17]]),
        feature({"class": "primary"}, [[-180.0, -17], [-179.99, -17]]),
    )
    assert len(roads.node_id) == 3
    assert roads.ref_node[1] == roads.ref_node[2]


def test_node_ids_last_when_the_file_grows_or_is_turned(tmp_path: Path) -> None:
    """A vertex keeps its id whatever else stands in the file; ids are negative and distinct."""
    one = feature({"class": "primary"}, [A, B])
    first = read(tmp_path, one)
    more = read(tmp_path, feature({"class": "primary"}, [C, D]), one)
    place = {(x, y): n for n, x, y in zip(more.node_id, more.node_lon_e7, more.node_lat_e7, strict=True)}
    for node, x, y in zip(first.node_id, first.node_lon_e7, first.node_lat_e7, strict=True):
        assert node == place[(x, y)]
        assert node < 0


def test_extreme_places_keep_their_coordinates(tmp_path: Path) -> None:
    """The corners of the coordinate range survive the way into node ids and back."""
    corners = [[-180.0, -90.0], [179.9999999, 90.0], [0.0, 0.0], [-179.9999999, 89.9999999]]
    roads = read(tmp_path, feature({"class": "primary"}, corners))
    assert corners == drawn(roads, 0)
    assert len(set(roads.node_id.tolist())) == 4


def test_points_with_a_control_set_signs(tmp_path: Path) -> None:
    """A sign stands on the vertex at its place; off the roads it is counted; no direction on shared nodes."""
    roads = read(
        tmp_path,
        feature({"class": "primary"}, [A, B, D]),
        feature({"class": "primary"}, [B, C]),
        feature({"control": "signals", "direction": "forward"}, B, "Point"),
        feature({"control": "give_way", "direction": "backward"}, C, "Point"),
        feature({"control": "stop"}, [24.0, 60.0], "Point"),
        feature({"control": "mini_roundabout", "direction": "clockwise"}, D, "Point"),
    )
    sign = {
        (x / 1e7, y / 1e7): int(s)
        for x, y, s in zip(roads.node_lon_e7, roads.node_lat_e7, roads.node_sign, strict=True)
    }
    assert sign[tuple(A)] == 0
    assert sign[tuple(B)] == raw.SIGNALS
    assert sign[tuple(C)] == raw.GIVE_WAY | raw.GOVERNS_AGAINST
    assert sign[tuple(D)] == raw.MINI_ROUNDABOUT | raw.MINI_CLOCKWISE
    assert roads.report["signs_left_out"] == {"off_the_roads": 1}


BAD = {
    "no class": (
        feature({"name": "x"}, [A, B]),
        "has neither property `class` nor `highway`; add",
    ),
    "direction": (
        feature({"class": "primary", "direction": "north"}, [A, B]),
        "direction 'north' is neither forward, backward nor both; write",
    ),
    "oneway": (
        feature({"class": "primary", "oneway": "F"}, [A, B]),
        "oneway 'F' is neither yes, no nor -1; write",
    ),
    "limit": (
        feature({"class": "primary", "limit_kmh": "50"}, [A, B]),
        "limit_kmh '50' is no speed in km/h; write",
    ),
    "limit 0": (feature({"class": "primary", "limit_kmh": 0}, [A, B]), "limit_kmh 0 is no speed in km/h"),
    "polygon": (
        feature({"class": "primary"}, [[A, B, C, A]], "Polygon"),
        "geometry is Polygon, no LineString",
    ),
    "one point": (feature({"class": "primary"}, [A]), "holds 1 positions where 2 are needed"),
    "no lines": (feature({"class": "primary"}, [], "MultiLineString"), "MultiLineString without lines"),
    "swapped": (feature({"class": "primary"}, [[-41.2, 174.7], [-41.3, 174.7]]), "look swapped"),
    "control": (
        feature({"control": "police"}, A, "Point"),
        "control 'police' of a Point is none of signals, stop",
    ),
    "sign direction": (
        feature({"control": "stop", "direction": "N"}, A, "Point"),
        "direction 'N' of a sign is neither forward",
    ),
}


@pytest.mark.parametrize("case", BAD)
def test_bad_line_is_told_what_where_and_mend(case: str, tmp_path: Path) -> None:
    """Each fault of a feature gives one error with the file, the feature and the mend."""
    bad, message = BAD[case]
    with pytest.raises(InputError, match=r"roads\.geojson feature 1.*" + message):
        read(tmp_path, bad)


def test_id_that_stands_twice_is_refused(tmp_path: Path) -> None:
    """Two features of one id could not be told apart in the results."""
    one, two = feature({"class": "primary", "id": 4}, [A, B]), feature({"class": "primary", "id": 4}, [B, C])
    with pytest.raises(InputError, match=r"feature 2: id 4 stands already at .*feature 1; make ids distinct"):
        read(tmp_path, one, two)


def test_file_without_roads_says_why(tmp_path: Path) -> None:
    """Where nothing is left the error tells the counts and the classes that the file has."""
    with pytest.raises(
        NetworkError, match=r"no road for cars \(class 1; classes there: towpath\); take .*classes"
    ):
        read(tmp_path, feature({"class": "towpath"}, [A, B]))
    with pytest.raises(NetworkError, match=r"no road for cars \(it has no lines\)"):
        read(tmp_path)
    with pytest.raises(NetworkError, match=r"no road for cars \(no_length 1\)"):
        read(tmp_path, feature({"class": "primary"}, [A, A]))


def geo_parquet(path: Path, table: pa.Table, **column: Any) -> Path:
    """Write a table as GeoParquet by its specification: the file key `geo` beside the columns."""
    told = {"encoding": "WKB", "geometry_types": ["LineString"], **column}
    geo = {"version": "1.1.0", "primary_column": "geometry", "columns": {"geometry": told}}
    pq.write_table(table.replace_schema_metadata({"geo": json.dumps(geo)}), path)
    return path


ROWS = [
    ({"class": "primary", "direction": "forward", "limit_kmh": 50.0, "id": 3}, [A, B, D]),
    ({"class": "residential", "direction": None, "limit_kmh": None, "id": 1}, [B, C]),
]


def columns(**more: Any) -> dict[str, Any]:
    """Give the properties of ROWS as columns."""
    return {k: [p[k] for p, _ in ROWS] for k in ROWS[0][0]} | more


@pytest.mark.parametrize("encoding", ["WKB", "WKB with height", "linestring", "multilinestring", "WKB multi"])
def test_geoparquet_gives_the_same_roads_as_geojson(encoding: str, tmp_path: Path) -> None:
    """Whatever the door and the encoding (GeoParquet 1.1.0), the same lines give the same arrays."""
    expected = read(tmp_path, *(feature(p, c) for p, c in ROWS))
    if encoding.startswith("WKB"):
        shapes = [shapely.LineString([[*q, 8.0] for q in c] if "height" in encoding else c) for _, c in ROWS]
        if encoding == "WKB multi":
            shapes = [shapely.MultiLineString([s]) for s in shapes]
        geometry = [shapely.to_wkb(s) for s in shapes]
        table = pa.table(columns(geometry=geometry, note=["x", "y"]))
        path = geo_parquet(tmp_path / "roads.parquet", table)
    else:
        point = pa.struct([("x", pa.float64()), ("y", pa.float64())])
        line = pa.list_(point) if encoding == "linestring" else pa.list_(pa.list_(point))
        flat = [[{"x": x, "y": y} for x, y in c] for _, c in ROWS]
        geometry = pa.array(flat if encoding == "linestring" else [[c] for c in flat], line)
        path = geo_parquet(
            tmp_path / "roads.geoparquet", pa.table(columns(geometry=geometry)), encoding=encoding
        )
    got = read_lines(path, CLASSES)
    got.check()
    for name in expected.__dataclass_fields__:
        want, have = getattr(expected, name), getattr(got, name)
        if isinstance(want, np.ndarray):
            assert want.dtype == have.dtype, name
            np.testing.assert_array_equal(want, have, err_msg=name)
        else:
            assert want == have, name


@pytest.mark.parametrize("name", ["OGC:CRS84", "EPSG:4326"])
def test_geoparquet_in_wgs84_by_name_passes(name: str, tmp_path: Path) -> None:
    """A `crs` that is WGS 84 in PROJJSON passes; longitude is first whatever it says (specification)."""
    geometry = [shapely.to_wkb(shapely.LineString(c)) for _, c in ROWS]
    path = geo_parquet(
        tmp_path / "r.parquet", pa.table(columns(geometry=geometry)), crs=CRS(name).to_json_dict()
    )
    assert len(read_lines(path, CLASSES).node_id) == 4


@pytest.mark.parametrize(
    ("column", "message"),
    [
        ({"crs": CRS("EPSG:3067").to_json_dict()}, "its reference system is 'ETRS89 / TM35FIN.*project it"),
        ({"crs": None}, "its reference system is None; project it"),
        ({"crs": {"type": "Nonsense", "name": "x"}}, "its reference system is 'x'"),
        ({"encoding": "TWKB"}, "encoded as 'TWKB'; write it as WKB"),
    ],
)
def test_geoparquet_of_unknown_kind_is_refused(column: dict[str, Any], message: str, tmp_path: Path) -> None:
    """Another reference system or encoding is named, with the mend."""
    geometry = [shapely.to_wkb(shapely.LineString(c)) for _, c in ROWS]
    path = geo_parquet(tmp_path / "r.parquet", pa.table(columns(geometry=geometry)), **column)
    with pytest.raises(InputError, match=r"r\.parquet.*" + message):
        read_lines(path, CLASSES)


def test_parquet_that_is_no_geoparquet_is_told(tmp_path: Path) -> None:
    """Plain Parquet, a broken file, a broken geometry and a missing file each get their own words."""
    path = tmp_path / "r.parquet"
    with pytest.raises(InputError, match="no such file"):
        read_lines(path, CLASSES)
    pq.write_table(pa.table({"class": ["primary"]}), path)
    with pytest.raises(InputError, match="no usable file key `geo`"):
        read_lines(path, CLASSES)
    geo_parquet(path, pa.table(columns(shape=[b"", b""])))
    with pytest.raises(InputError, match="names a column 'geometry' that isn't there"):
        read_lines(path, CLASSES)
    geo_parquet(
        path, pa.table(columns(geometry=[shapely.to_wkb(shapely.LineString(ROWS[0][1])), b"\x01\x02"]))
    )
    with pytest.raises(InputError, match="row 2: geometry is no WKB"):
        read_lines(path, CLASSES)
    path.write_bytes(path.read_bytes()[:100])
    with pytest.raises(InputError, match="can't be read as Parquet"):
        read_lines(path, CLASSES)


def test_geoparquet_nulls_and_nan_coordinates(tmp_path: Path) -> None:
    """A null geometry is counted; a coordinate that is not finite is an error with its row."""
    good = shapely.to_wkb(shapely.LineString(ROWS[0][1]))
    path = geo_parquet(tmp_path / "r.parquet", pa.table(columns(geometry=[good, None])))
    assert read_lines(path, CLASSES).report["ways_left_out"] == {"no_geometry": 1}
    bad = struct.pack("<BII4d", 1, 2, 2, *A, math.nan, 60.0)  # little-endian LineString of two points
    geo_parquet(path, pa.table(columns(geometry=[good, bad])))
    with pytest.raises(InputError, match=r"row 2, position 2: .*not finite"):
        read_lines(path, CLASSES)
