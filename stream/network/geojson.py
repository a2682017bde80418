"""GeoJSON features (RFC 7946) with every position checked, or one error that says where and how to mend."""

import json
import math
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stream.errors import InputError

# Names under which files from before RFC 7946 say that they hold WGS 84 longitude and latitude.
_WGS84 = ("CRS84", "EPSG:4326", "EPSG::4326")


@dataclass(frozen=True)
class Feature:
    """One feature; `kind` is the type of its geometry, "null" where it has none.

    An `id` that stands beside the properties is one of them here, unless they have their own.
    """

    where: str
    properties: dict[str, Any]
    kind: str
    coordinates: Any


def read_features(path: Path) -> list[Feature]:
    """Read the features of a FeatureCollection, or the one of a lone Feature, in the order of the file.

    Parameters
    ----------
    path
        UTF-8 text, with or without a byte order mark.

    Raises
    ------
    InputError
        The file can't be read, is no JSON, no GeoJSON of features, or isn't in WGS 84 degrees.

    Source: RFC 7946 sections 3.2, 3.3 and 4.
    """
    data = _load(path)
    kind = data.get("type") if isinstance(data, dict) else None
    if kind == "Feature":
        raw = [data]
    elif kind == "FeatureCollection" and isinstance(data.get("features"), list):
        raw = data["features"]
    else:
        seen = f"type {kind!r}" if isinstance(data, dict) else f"a JSON {type(data).__name__}"
        raise InputError(
            f"{path}: is {seen}, not a GeoJSON FeatureCollection with features (RFC 7946 section 3.3); "
            "export it again as GeoJSON features"
        )
    _refuse_crs(path, data)
    return [_feature(path, number, entry) for number, entry in enumerate(raw, start=1)]


def positions(feature: Feature, raw: Any, least: int) -> NDArray[np.float64]:
    """Check a list of positions and give it as float64[n, 2], longitude and latitude in degrees.

    Parameters
    ----------
    feature
        The feature that it belongs to, for messages.
    raw
        What stands in the file, or float64[n, 2]; a height after the two degrees is left aside.
    least
        Smallest number of positions (2 for a line, 4 for a ring).

    Raises
    ------
    InputError
        No list of numbers, too few, not finite, swapped, or no degrees.
    """
    if not isinstance(raw, list | np.ndarray) or len(raw) < least:
        n = len(raw) if isinstance(raw, list | np.ndarray) else 0
        raise InputError(f"{feature.where}: holds {n} positions where {least} are needed; mend or remove it")
    if isinstance(raw, list):
        for number, entry in enumerate(raw, start=1):
            if not isinstance(entry, list) or len(entry) < 2 or not all(_is_number(v) for v in entry[:2]):
                raise InputError(
                    f"{feature.where}, position {number}: {json.dumps(entry)[:60]} is no pair of "
                    "longitude and latitude; mend it"
                )
        raw = [entry[:2] for entry in raw]
    out = np.array(raw, dtype=np.float64)
    with np.errstate(invalid="ignore"):
        bad = ~((np.abs(out[:, 0]) <= 180.0) & (np.abs(out[:, 1]) <= 90.0))
    if bad.any():
        at = int(np.argmax(bad))
        raise InputError(f"{feature.where}, position {at + 1}: {_fault(*out[at].tolist())}")
    return out


def _fault(lon: float, lat: float) -> str:
    if not (math.isfinite(lon) and math.isfinite(lat)):
        return f"({lon}, {lat}) is not finite; mend it"
    if abs(lon) <= 90.0 and abs(lat) <= 180.0:
        return (
            f"latitude {lat:g} lies beyond 90 degrees: longitude and latitude look swapped; "
            "GeoJSON writes longitude first (RFC 7946 section 3.1.1)"
        )
    if abs(lon) <= 360.0 and abs(lat) <= 90.0:
        return (
            f"longitude {lon:g} lies beyond 180 degrees; "
            "cut the feature in two at the 180th meridian (RFC 7946 section 3.1.9)"
        )
    return f"({lon:g}, {lat:g}) is no degrees; project it to WGS 84 longitude and latitude"


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool)


def _load(path: Path) -> Any:
    try:
        text = path.read_text(encoding="utf-8-sig")
    except FileNotFoundError as err:
        raise InputError(f"{path}: no such file; check the name") from err
    except UnicodeDecodeError as err:
        raise InputError(f"{path}: is not UTF-8 text, so no GeoJSON; export it again as GeoJSON") from err
    except OSError as err:
        raise InputError(f"{path}: can't be read ({err.strerror}); check the name and the rights") from err
    try:
        return json.loads(text)
    except json.JSONDecodeError as err:
        raise InputError(
            f"{path} line {err.lineno}: is not JSON ({err.msg}); export it again as GeoJSON"
        ) from err
    except RecursionError as err:
        raise InputError(f"{path}: is nested too deep to be GeoJSON; export it again as GeoJSON") from err


def _feature(path: Path, number: int, entry: Any) -> Feature:
    where = f"{path} feature {number}"
    if not isinstance(entry, dict) or entry.get("type") != "Feature":
        raise InputError(f"{where}: is no GeoJSON Feature (RFC 7946 section 3.2); mend or remove it")
    geometry = entry.get("geometry")
    shape = geometry if isinstance(geometry, dict) else {}
    properties = entry.get("properties")
    own = {"id": entry["id"]} if "id" in entry else {}
    return Feature(
        where,
        own | (properties if isinstance(properties, dict) else {}),
        str(shape.get("type", "null")),
        shape.get("coordinates"),
    )


def _names(value: Any) -> Iterator[str]:
    for inner in value.values() if isinstance(value, dict) else ():
        if isinstance(inner, str):
            yield inner
        else:
            yield from _names(inner)


def _refuse_crs(path: Path, data: dict[str, Any]) -> None:
    told = [name for name in _names(data.get("crs")) if name not in ("name", "link")]
    if told and not any(name.endswith(_WGS84) for name in told):
        raise InputError(
            f"{path}: its crs is {told[0]!r}; GeoJSON is WGS 84 longitude and latitude "
            "(RFC 7946 section 4): export it again in EPSG:4326"
        )
