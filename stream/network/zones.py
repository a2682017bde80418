"""Named areas of the user's: the first polygon in the file that holds a point is that point's zone."""

import difflib
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from zoneinfo import available_timezones

import numpy as np
import shapely
from numpy.typing import NDArray

from stream.config import Settings
from stream.errors import InputError
from stream.network.geojson import Feature, positions, read_features

NO_ZONE = -1


@dataclass(frozen=True)
class Zones:
    """Zones in the order of the file.

    Attributes
    ----------
    path : the file, for messages
    names : tuple of str          unique, never empty
    time_zones : tuple of str     IANA names
    driving_sides : tuple of str  "right", "left", or "" where neither file nor configuration says
    areas : polygons and multipolygons in degrees
    """

    path: Path
    names: tuple[str, ...]
    time_zones: tuple[str, ...]
    driving_sides: tuple[str, ...]
    areas: tuple[shapely.Geometry, ...]

    def place(self, lon: NDArray[np.float64], lat: NDArray[np.float64]) -> NDArray[np.int32]:
        """Give the zone index of each point, -1 outside all; a border belongs to the first zone on it.

        Parameters
        ----------
        lon, lat
            float64[n], degrees.

        Raises
        ------
        InputError
            No point lies in a zone, but some would with the zones' longitude and latitude swapped.
        """
        placed = self._first(lon, lat)
        if placed.size and (placed == NO_ZONE).all():
            n = int((self._first(lat, lon) != NO_ZONE).sum())
            if n:
                raise InputError(
                    f"{self.path}: none of {placed.size} places in the network lies in a zone, but {n} "
                    "would with longitude and latitude swapped; write longitude first (RFC 7946, 3.1.1)"
                )
        return placed

    def _first(self, lon: NDArray[np.float64], lat: NDArray[np.float64]) -> NDArray[np.int32]:
        degrees = np.column_stack([np.asarray(lon, np.float64), np.asarray(lat, np.float64)])
        points = np.asarray(shapely.points(degrees), dtype=np.object_)
        point_ix, zone_ix = shapely.STRtree(self.areas).query(points, predicate="intersects")
        first = np.full(points.size, len(self.names), np.int32)
        np.minimum.at(first, point_ix, zone_ix.astype(np.int32))
        first[first == len(self.names)] = NO_ZONE
        return first


def read_zones(path: Path, settings: Settings) -> Zones:
    """Read zones from GeoJSON polygons and multipolygons with a property `zone` or `name`.

    Optional properties: `time_zone` (IANA name) and `driving_side` (right or left). Where a feature says
    nothing, the configuration does; a time zone left at `auto` is that of a point inside the area.

    Raises
    ------
    InputError
        No GeoJSON, no polygon, a broken ring, swapped degrees, a name that is missing or there twice, a
        time zone that the IANA database doesn't know, another driving side than right or left.

    Source: RFC 7946 sections 3.1.6 and 3.1.7.
    """
    features = read_features(path)
    if not any(f.kind in ("Polygon", "MultiPolygon") for f in features):
        seen = ", ".join(sorted({f.kind for f in features})) or "nothing"
        raise InputError(f"{path}: holds {seen}, no Polygon or MultiPolygon; draw each zone as a polygon")
    names: dict[str, str] = {}
    areas, time_zones, sides = [], [], []
    for feature in features:
        name = _name(feature)
        if name in names:
            raise InputError(
                f"{feature.where}: zone {name!r} stands already at {names[name]}; "
                "rename one, or join them into one MultiPolygon"
            )
        names[name] = feature.where
        area = _area(feature)
        areas.append(area)
        time_zones.append(_time_zone(feature, area, settings))
        sides.append(_side(feature, settings))
    return Zones(path, tuple(names), tuple(time_zones), tuple(sides), tuple(areas))


def time_zone_at(lon: float, lat: float) -> str:
    """Give the IANA time zone at a place; at sea the whole-hour zone of its longitude.

    Source: time zone boundaries of the OpenStreetMap data, simplified, through tzfpy; within some
    hundred metres of a border it may name the neighbour.
    """
    from tzfpy import get_tz

    name = str(get_tz(float(lon), float(lat)))
    return name if name in known_time_zones() else "UTC"


@cache
def known_time_zones() -> frozenset[str]:
    """Give the names in the IANA database at hand."""
    return frozenset(available_timezones())


def _name(feature: Feature) -> str:
    for key in ("zone", "name"):
        value = feature.properties.get(key)
        if isinstance(value, str) and value.strip():
            return value.strip()
        if isinstance(value, int) and not isinstance(value, bool):
            return str(value)
        if value is not None:
            raise InputError(f"{feature.where}: {key} = {value!r} is no name; write text in it")
    raise InputError(f"{feature.where}: has neither property `zone` nor `name`; add one that names the zone")


def _area(feature: Feature) -> shapely.Geometry:
    if feature.kind not in ("Polygon", "MultiPolygon"):
        raise InputError(
            f"{feature.where}: geometry is {feature.kind}, no Polygon or MultiPolygon; draw or remove it"
        )
    parts = [feature.coordinates] if feature.kind == "Polygon" else feature.coordinates
    if not isinstance(parts, list) or not all(isinstance(p, list) and p for p in parts) or not parts:
        raise InputError(f"{feature.where}: {feature.kind} without rings; draw or remove it")
    polygons = []
    for part in parts:
        rings = [positions(feature, ring, 4) for ring in part]
        for ring in rings:
            if not (ring[0] == ring[-1]).all():
                lon, lat = ring[0]
                raise InputError(
                    f"{feature.where}: a ring doesn't end where it starts ({lon:g}, {lat:g}); "
                    "repeat the first position at its end (RFC 7946 section 3.1.6)"
                )
            _refuse_jump(feature, ring)
        polygons.append(shapely.Polygon(rings[0], rings[1:]))
    area = polygons[0] if feature.kind == "Polygon" else shapely.MultiPolygon(polygons)
    if not shapely.is_valid(area):
        raise InputError(
            f"{feature.where}: is no proper area ({shapely.is_valid_reason(area)}, longitude first); "
            "mend its outline there"
        )
    shapely.prepare(area)
    return area


def _refuse_jump(feature: Feature, ring: NDArray[np.float64]) -> None:
    steps = np.abs(np.diff(ring[:, 0]))
    if steps.max() > 180.0:
        at = int(np.argmax(steps))
        raise InputError(
            f"{feature.where}, position {at + 2}: longitude jumps from {ring[at, 0]:g} to "
            f"{ring[at + 1, 0]:g}; cut the area in two at the 180th meridian (RFC 7946 section 3.1.9)"
        )


def _time_zone(feature: Feature, area: shapely.Geometry, settings: Settings) -> str:
    given = feature.properties.get("time_zone")
    if given is None:
        if settings.network.time_zone != "auto":
            return settings.network.time_zone
        inside = shapely.point_on_surface(area)
        return time_zone_at(inside.x, inside.y)
    if isinstance(given, str) and given in known_time_zones():
        return given
    near = difflib.get_close_matches(str(given), sorted(known_time_zones()), 1, 0.6)
    mend = f"did you mean {near[0]}?" if near else "write a name such as Europe/Helsinki"
    raise InputError(f"{feature.where}: time_zone {given!r} is not in the IANA database; {mend}")


def _side(feature: Feature, settings: Settings) -> str:
    given = feature.properties.get("driving_side")
    if given is None:
        return "" if settings.network.driving_side == "auto" else settings.network.driving_side
    if given in ("right", "left"):
        return str(given)
    raise InputError(f"{feature.where}: driving_side {given!r} is neither right nor left; write one of them")
