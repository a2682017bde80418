"""The user's own road lines as road ways: lines meet where they share a vertex, and nowhere else.

One feature is one way. Its properties are read as the OSM keys of the same name (`highway`, `oneway`,
`maxspeed`, `junction`, access keys), with three plain names beside them:

* `class` for `highway`: a value of the configured `network.classes`;
* `direction` for `oneway`: forward (as drawn), backward or both;
* `limit_kmh` for `maxspeed`.

`id` (a whole number) is the way's id in every result; without it the feature's number is. A Point with
`control` (signals, stop, give_way, crossing_signals, mini_roundabout) sets a sign on a vertex.
A node's id is made from its place, so it stays the same when the file grows.
"""

from collections import Counter
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stream.errors import InputError, NetworkError
from stream.network import geojson, geoparquet, raw
from stream.network.geojson import Feature, positions
from stream.network.model import I32, I64, U8
from stream.network.tags import CHANGING, NO, OPPOSITE, VEHICLES, YES, Way, read_sign, read_way

ENDINGS = (".geojson", ".json", ".parquet", ".geoparquet")
_OWN = ("class", "direction", "limit_kmh", "id", "control")
_OSM = ("highway", "oneway", "maxspeed", "maxspeed:forward", "maxspeed:backward", "junction", "area")
KEYS = (*_OWN, *_OSM, *VEHICLES)
_DIRECTION = {"forward": "yes", "backward": "-1", "both": "no"}
_CONTROL = {
    "signals": {"highway": "traffic_signals"},
    "stop": {"highway": "stop"},
    "give_way": {"highway": "give_way"},
    "crossing_signals": {"highway": "crossing", "crossing": "traffic_signals"},
    "mini_roundabout": {"highway": "mini_roundabout"},
}
# A place as one integer: longitude in steps of this, latitude within. Below 6.49e18.
_STRIDE = 1_800_000_003


def read_lines(path: Path, classes: tuple[str, ...]) -> raw.RawRoads:
    """Read road lines from GeoJSON or GeoParquet, by the ending of the name.

    Parameters
    ----------
    path
        `.geojson`, `.json`, `.parquet` or `.geoparquet`; WGS 84 degrees, longitude first.
    classes
        Values of `class` (or `highway`) taken as roads, widest first.

    Raises
    ------
    InputError
        No such format, a shape that is no line, a value that isn't known, an id that stands twice.
    NetworkError
        The file holds no road of these classes that a car may use.

    Source: RFC 7946; GeoParquet 1.1.0; OSM wiki pages of the keys (METHODS.md section 2).
    """
    if path.suffix.lower() in (".parquet", ".geoparquet"):
        features = geoparquet.read_features(path, KEYS)
    else:
        features = geojson.read_features(path)
    lines = _Lines(frozenset(classes))
    for number, feature in enumerate(features, start=1):
        if feature.kind == "Point":
            lines.take_sign(feature)
        elif feature.kind in ("LineString", "MultiLineString"):
            lines.take_way(number, feature)
        elif feature.kind == "null":
            lines.left_out["no_geometry"] += 1
        else:
            raise InputError(
                f"{feature.where}: geometry is {feature.kind}, no LineString or MultiLineString; remove it"
            )
    roads = lines.roads(classes) if lines.parts else None
    if roads is None or not len(roads.way_id):
        raise NetworkError(
            f"{path}: holds no road for cars ({lines.why_none()}); take other lines or set network.classes"
        )
    return roads


class _Lines:
    """Ways and signs as they are read."""

    def __init__(self, classes: frozenset[str]) -> None:
        self.classes = classes
        self.parts: list[NDArray[np.float64]] = []
        self.part_way: list[int] = []  # row in the three lists below
        self.way_class: list[str] = []
        self.ways: list[Way] = []
        self.number: list[int] = []
        self.own_id: list[int | None] = []
        self.id_at: dict[int, str] = {}
        self.signs: list[tuple[NDArray[np.float64], int]] = []
        self.left_out: Counter[str] = Counter()
        self.other_classes: set[str] = set()

    def take_way(self, number: int, feature: Feature) -> None:
        """Take one line feature, or count why it is left out."""
        tags = _way_tags(feature)
        way = read_way(tags, self.classes)
        if way.reason:
            self.left_out[way.reason] += 1
            if way.reason == "class":
                self.other_classes.add(tags["highway"])
            return
        many = feature.kind == "MultiLineString"
        raw_parts = feature.coordinates if many else [feature.coordinates]
        if not isinstance(raw_parts, list) or not raw_parts:
            raise InputError(f"{feature.where}: {feature.kind} without lines; draw or remove it")
        self.parts += [positions(feature, part, 2) for part in raw_parts]
        self.part_way += [len(self.ways)] * len(raw_parts)
        self.ways.append(way)
        self.way_class.append(tags["highway"])
        self.number.append(number)
        own = _whole(feature.properties.get("id"))
        self.own_id.append(own)
        if own is not None:
            if own in self.id_at:
                raise InputError(
                    f"{feature.where}: id {own} stands already at {self.id_at[own]}; "
                    "make ids distinct, or leave `id` out and features are numbered"
                )
            self.id_at[own] = feature.where

    def take_sign(self, feature: Feature) -> None:
        """Take one point feature with a control."""
        told = feature.properties.get("control")
        if told not in _CONTROL:
            raise InputError(
                f"{feature.where}: control {told!r} of a Point is none of {', '.join(_CONTROL)}; "
                "write one of them or remove the point"
            )
        tags = dict(_CONTROL[told])
        direction = feature.properties.get("direction")
        if direction is not None:
            if direction not in ("forward", "backward", "clockwise", "anticlockwise"):
                raise InputError(
                    f"{feature.where}: direction {direction!r} of a sign is neither forward, backward, "
                    "clockwise nor anticlockwise; write one of them or leave it out"
                )
            tags["direction"] = direction
        flat = feature.coordinates if isinstance(feature.coordinates, np.ndarray) else [feature.coordinates]
        self.signs.append((positions(feature, flat, 1), read_sign(tags)))

    def why_none(self) -> str:
        """Tell why no way is left: counts by reason, and the classes seen."""
        why = ", ".join(f"{k} {n}" for k, n in sorted(self.left_out.items())) or "it has no lines"
        seen = ", ".join(sorted(self.other_classes)[:8])
        return f"{why}; classes there: {seen}" if seen else why

    def roads(self, classes: tuple[str, ...]) -> raw.RawRoads:
        """Join the lines at their common vertices."""
        has_ids = all(own is not None for own in self.own_id)
        ids = np.array([o or 0 for o in self.own_id] if has_ids else self.number, np.int64)
        part_way = np.array(self.part_way)
        order = np.argsort(ids[part_way], kind="stable")
        lengths = np.array([len(self.parts[i]) for i in order])
        index, places = _join(np.concatenate([self.parts[i] for i in order]))
        part = np.repeat(np.arange(len(order)), lengths)
        fresh = np.ones(len(index), np.bool_)
        fresh[1:] = (index[1:] != index[:-1]) | (part[1:] != part[:-1])
        sizes = np.bincount(part[fresh], minlength=len(order))
        whole = sizes >= 2
        if not whole.all():
            self.left_out["no_length"] += int((~whole).sum())
        used, inverse = np.unique(index[fresh & whole[part]], return_inverse=True)
        refs = inverse.astype(np.int32)
        rows = part_way[order][whole]
        code = {name: i for i, name in enumerate(classes)}
        sign, off_the_roads = self._signs(places[used], refs)
        return raw.RawRoads(
            classes,
            ids[rows],
            np.array([code[self.way_class[i]] for i in rows], np.uint8),
            np.array([self.ways[i].open for i in rows], np.uint8),
            np.array([self.ways[i].ring for i in rows], np.uint8),
            np.array([self.ways[i].limit_along_kmh for i in rows], np.float32),
            np.array([self.ways[i].limit_against_kmh for i in rows], np.float32),
            np.concatenate([[0], np.cumsum(sizes[whole])]).astype(np.int64),
            refs,
            -1 - places[used],
            (places[used] // _STRIDE - 1_800_000_000).astype(np.int32),
            (places[used] % _STRIDE - 900_000_000).astype(np.int32),
            sign,
            [],
            self._report(len(np.unique(rows)), has_ids, off_the_roads),
        )

    def _signs(self, places: I64, refs: I32) -> tuple[U8, int]:
        """Set signs on the vertices where their points stand; also count those that stand on none."""
        sign, off = np.zeros(len(places), np.uint8), 0
        uses = np.bincount(refs, minlength=len(places))
        directed = raw.GOVERNS_ALONG | raw.GOVERNS_AGAINST
        for point, bits in self.signs:
            near = np.isin(places, _around(int(_place(point)[0])))
            at = np.flatnonzero(near)
            if not len(at):
                off += 1
                continue
            sign[at[0]] |= bits if uses[at[0]] == 1 else bits & ~directed
        return sign, off

    def _report(self, n_ways: int, has_ids: bool, off_the_roads: int) -> dict[str, dict[str, int]]:
        noted = {
            "taken": n_ways,
            "limited_access": sum(w.is_limited for w in self.ways),
            "limit_no_number": sum(w.has_unread_limit for w in self.ways),
            "numbered_by_position": 0 if has_ids else n_ways,
        }
        return {
            "ways": noted,
            "ways_left_out": dict(sorted(self.left_out.items())),
            "restrictions_left_out": {},
            "signs_left_out": {"off_the_roads": off_the_roads} if off_the_roads else {},
        }


def _text(value: Any) -> str:
    """Write a property as the text that a tag would hold."""
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float) and value.is_integer():
        return str(int(value))
    return str(value).strip()


def _way_tags(feature: Feature) -> Mapping[str, str]:
    """Give the properties as OSM tags, with the plain names turned into their keys."""
    given = {k: v for k in KEYS if (v := feature.properties.get(k)) is not None and v == v}
    tags = {k: _text(v) for k, v in given.items() if k not in _OWN}
    if "class" in given:
        tags["highway"] = _text(given["class"])
    if "highway" not in tags:
        raise InputError(f"{feature.where}: has neither property `class` nor `highway`; add the road's class")
    if "direction" in given:
        told = _text(given["direction"])
        if told not in _DIRECTION:
            raise InputError(
                f"{feature.where}: direction {told!r} is neither forward, backward nor both; write one"
            )
        tags["oneway"] = _DIRECTION[told]
    elif "oneway" in tags and tags["oneway"] not in YES | NO | OPPOSITE | CHANGING:
        raise InputError(
            f"{feature.where}: oneway {tags['oneway']!r} is neither yes, no nor -1; write one of them"
        )
    if "limit_kmh" in given:
        limit = given["limit_kmh"]
        if isinstance(limit, bool) or not isinstance(limit, int | float) or not 0 < limit <= 400:
            raise InputError(
                f"{feature.where}: limit_kmh {limit!r} is no speed in km/h; write a number or leave it out"
            )
        tags["maxspeed"] = _text(limit)
    return tags


def _whole(value: Any) -> int | None:
    """Give an id as a whole number that fits into 63 bits; None where it is none."""
    if isinstance(value, str) and value.strip().isascii() and value.strip().isdigit():
        value = int(value)
    if isinstance(value, float) and value.is_integer():
        value = int(value)
    fits = isinstance(value, int) and not isinstance(value, bool) and 0 <= value < 2**63
    return value if fits else None


def _place(degrees: NDArray[np.float64]) -> I64:
    """Give each position as one integer of 1e-7 degree; 180 degrees east is 180 degrees west."""
    lon_e7 = np.rint(degrees[:, 0] * 1e7).astype(np.int64)
    lat_e7 = np.rint(degrees[:, 1] * 1e7).astype(np.int64)
    lon_e7[lon_e7 == 1_800_000_000] = -1_800_000_000
    return (lon_e7 + 1_800_000_000) * _STRIDE + lat_e7 + 900_000_000


def _around(place: int) -> list[int]:
    return [place + east * _STRIDE + north for east in (-1, 0, 1) for north in (-1, 0, 1)]


def _join(degrees: NDArray[np.float64]) -> tuple[I32, I64]:
    """Make one node of positions within 1e-7 degree (1 cm), so that noise of the last digit parts no roads.

    Returns
    -------
    index : int32[n]   node of each position
    places : int64[m]  place of each node, ascending
    """
    places, index = np.unique(_place(degrees), return_inverse=True)
    root = np.arange(len(places))

    def top(at: int) -> int:
        while root[at] != at:
            at = int(root[at])
        return at

    for step in (1, _STRIDE - 1, _STRIDE, _STRIDE + 1):
        beside = np.searchsorted(places, places + step)
        beside[beside == len(places)] = 0
        for at in np.flatnonzero(places[beside] == places + step).tolist():
            one, other = sorted((top(at), top(int(beside[at]))))
            root[other] = one
    tops = np.array([top(at) for at in range(len(places))])
    kept, new = np.unique(tops, return_inverse=True)
    return new[index].astype(np.int32), places[kept]
