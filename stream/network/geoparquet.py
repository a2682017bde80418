"""GeoParquet features (versions 1.0 and 1.1), as GeoJSON's reader gives them, in WGS 84 degrees."""

import json
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import shapely
from pyproj import CRS
from pyproj.exceptions import CRSError

from stream.errors import InputError
from stream.network.geojson import Feature

_NATIVE = {"point": "Point", "linestring": "LineString", "multilinestring": "MultiLineString"}
_KINDS = {0: "Point", 1: "LineString", 3: "Polygon", 5: "MultiLineString", 6: "MultiPolygon"}


def read_features(path: Path, keys: Sequence[str]) -> list[Feature]:
    """Read the features of a GeoParquet file, with those of the named columns that it has.

    Parameters
    ----------
    path
        A Parquet file with the file key `geo`.
    keys
        Columns taken as properties.

    Returns
    -------
    list of Feature
        In the order of the rows; coordinates are float64[n, 2] for a line, a list of those for many.

    Raises
    ------
    InputError
        No Parquet, no `geo` key, an encoding or reference system that isn't known, a broken geometry.

    Source: GeoParquet 1.1.0, metadata of file and column.
    """
    try:
        parquet = pq.ParquetFile(path)
        names = parquet.schema_arrow.names
        column, encoding = _geometry_column(path, parquet.schema_arrow.metadata or {})
        if column not in names:
            raise InputError(
                f"{path}: its `geo` key names a column {column!r} that isn't there; write it anew"
            )
        table = parquet.read(columns=[column, *(k for k in keys if k in names and k != column)])
    except FileNotFoundError as err:
        raise InputError(f"{path}: no such file; check the name") from err
    except (pa.ArrowException, OSError) as err:
        raise InputError(f"{path}: can't be read as Parquet ({err}); write it again as GeoParquet") from err
    shapes = table.column(column)
    if encoding == "WKB":
        geometries = _from_wkb(path, shapes)
    else:
        kind = _NATIVE[encoding]
        geometries = [("null", None) if s is None else (kind, _native(s)) for s in shapes.to_pylist()]
    rows = table.drop_columns([column]).to_pylist()
    return [
        Feature(f"{path} row {number}", row, kind, coordinates)
        for number, (row, (kind, coordinates)) in enumerate(zip(rows, geometries, strict=True), start=1)
    ]


def _geometry_column(path: Path, metadata: dict[bytes, bytes]) -> tuple[str, str]:
    """Give name and encoding of the primary geometry column, once its reference system is known good."""
    try:
        geo = json.loads(metadata[b"geo"])
        name = geo["primary_column"]
        column = geo["columns"][name]
        encoding = column["encoding"]
    except (KeyError, ValueError, TypeError) as err:
        raise InputError(
            f"{path}: has no usable file key `geo`, so it is no GeoParquet; write it again as GeoParquet"
        ) from err
    if encoding != "WKB" and encoding not in _NATIVE:
        raise InputError(f"{path}: geometry is encoded as {encoding!r}; write it as WKB or linestring")
    if "crs" in column and not _is_wgs84(column["crs"]):
        told = column["crs"].get("name", "?") if isinstance(column["crs"], dict) else column["crs"]
        raise InputError(
            f"{path}: its reference system is {told!r}; project it to WGS 84 longitude and latitude"
        )
    return str(name), str(encoding)


def _is_wgs84(crs: Any) -> bool:
    """Tell whether a PROJJSON object is WGS 84 in degrees; order of axes is always longitude first here."""
    if not isinstance(crs, dict):
        return False
    try:
        return bool(CRS.from_json_dict(crs).equals(CRS("OGC:CRS84"), ignore_axis_order=True))
    except CRSError:
        return False


def _from_wkb(path: Path, shapes: Any) -> list[tuple[str, Any]]:
    out: list[tuple[str, Any]] = []
    for number, value in enumerate(shapes.to_pylist(), start=1):
        if value is None:
            out.append(("null", None))
            continue
        try:
            with np.errstate(invalid="ignore"):  # not-a-number is told by position later, not warned of
                shape = shapely.from_wkb(value)
        except (shapely.errors.ShapelyError, TypeError) as err:
            raise InputError(f"{path} row {number}: geometry is no WKB ({err}); write it again") from err
        kind = _KINDS.get(int(shapely.get_type_id(shape)), str(shape.geom_type))
        parts = [shapely.get_coordinates(part) for part in shapely.get_parts(shape)]
        out.append((kind, parts if kind.startswith("Multi") else parts[0]))
    return out


def _native(shape: Any) -> Any:
    """Turn nested lists of x and y into arrays, one for each line; a point into an array of one row."""
    if isinstance(shape, dict):
        return np.array([[shape["x"], shape["y"]]])
    if not shape or isinstance(shape[0], dict):
        return np.array([[p["x"], p["y"]] for p in shape]).reshape(-1, 2)
    return [_native(part) for part in shape]
