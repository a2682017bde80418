"""A street plan in metres round a place, and how it is written: OSM XML and zones as GeoJSON.

Guarantee: what is written and what drivers drive on are the same numbers, coordinates rounded to 1e-7
degree first. Mirrored for left-hand traffic the plan keeps its sense: east and west change places.
"""

import json
import math
from dataclasses import dataclass, field
from pathlib import Path
from xml.sax.saxutils import quoteattr

import numpy as np

from stream.demo.roads import metres_per_degree

LINE_M = 12.0  # m from a junction's node to its stop lines

Tags = dict[str, str]


@dataclass
class Way:
    """A way: keys of its nodes in the order drawn, and its tags."""

    nodes: list[str]
    tags: Tags


@dataclass
class Plan:
    """Nodes by key in metres east and north of the place, ways, and what rules at junctions.

    holds : (key before, junction) -> "stop" or "give_way", for each approach that must yield
    signals : junction -> name of its signal group; nodes of one group switch together
    banned : (key before, junction, key after) -> OSM restriction value, as for right-hand traffic
    """

    lon: float
    lat: float
    turn_deg: float
    is_left: bool
    at: dict[str, tuple[float, float]] = field(default_factory=dict)
    tags: dict[str, Tags] = field(default_factory=dict)
    ways: list[Way] = field(default_factory=list)
    holds: dict[tuple[str, str], str] = field(default_factory=dict)
    signals: dict[str, str] = field(default_factory=dict)
    banned: dict[tuple[str, str, str], str] = field(default_factory=dict)
    zones: list[tuple[str, list[tuple[float, float]]]] = field(default_factory=list)

    def node(self, key: str, east_m: float, north_m: float, **tags: str) -> str:
        """Put a node."""
        self.at[key] = (east_m, north_m)
        if tags:
            self.tags.setdefault(key, {}).update(tags)
        return key

    def way(self, nodes: list[str], highway: str, kmh: int | None = None, **tags: str) -> None:
        """Lay a way; without kmh it carries no limit."""
        limit = {} if kmh is None else {"maxspeed": str(kmh)}
        self.ways.append(Way(list(nodes), {"highway": highway, **limit, **tags}))

    def bent(self, a: str, b: str, off_m: float) -> list[str]:
        """Give the keys of a curve from a to b that swings off_m to the right, with its shape nodes."""
        (xa, ya), (xb, yb) = self.at[a], self.at[b]
        length = math.hypot(xb - xa, yb - ya)
        right = ((yb - ya) / length, -(xb - xa) / length)
        keys = [a]
        steps = max(4, round(length / 40.0))
        for i in range(1, steps):
            f = i / steps
            swing = off_m * math.sin(math.pi * f)
            x, y = xa + f * (xb - xa) + right[0] * swing, ya + f * (yb - ya) + right[1] * swing
            keys.append(self.node(f"{a}~{b}~{i}", x, y))
        return [*keys, b]

    def line(self, before: str, junction: str, highway: str) -> None:
        """Put a node LINE_M before a junction on the approach from `before`: a stop line with its tag.

        `stop` and `give_way` make that approach yield; `traffic_signals` only show where it is held.
        """
        key = f"{junction}<{before}"
        before = self.next_to(junction, before)
        (x0, y0), (x1, y1) = self.at[junction], self.at[before]
        f = LINE_M / math.hypot(x1 - x0, y1 - y0)
        self.node(key, x0 + f * (x1 - x0), y0 + f * (y1 - y0))
        for way in self.ways:
            for i, (a, b) in enumerate(zip(way.nodes, way.nodes[1:], strict=False)):
                if {a, b} == {before, junction}:
                    way.nodes.insert(i + 1, key)
                    towards = "forward" if b == junction else "backward"
                    name = "traffic_signals:direction" if highway == "traffic_signals" else "direction"
                    self.tags[key] = {"highway": highway, name: towards}
                    if highway != "traffic_signals":
                        self.holds[key, junction] = highway
                    return
        raise ValueError(f"no way joins {before} and {junction}")

    def approaches(self, junction: str) -> list[tuple[str, str]]:
        """Give (key before, junction) of each step that traffic takes towards a junction."""
        out = []
        for way in self.ways:
            both = way.tags.get("oneway") != "yes" and way.tags.get("junction") != "roundabout"
            for a, b in zip(way.nodes, way.nodes[1:], strict=False):
                if b == junction:
                    out.append((a, b))
                if a == junction and both:
                    out.append((b, a))
        return out

    def degrees(self, key: str) -> tuple[float, float]:
        """Give a node's longitude and latitude, rounded to 1e-7 degree."""
        return self.place(*self.at[key])

    def place(self, east_m: float, north_m: float) -> tuple[float, float]:
        """Turn metres round the place into degrees, after the plan's turn and its mirror."""
        a = math.radians(self.turn_deg)
        x = east_m * math.cos(a) - north_m * math.sin(a)
        y = east_m * math.sin(a) + north_m * math.cos(a)
        x = -x if self.is_left else x
        k_lon, k_lat = metres_per_degree(np.array([self.lat]))
        return round(self.lon + x / float(k_lon[0]), 7), round(self.lat + y / float(k_lat[0]), 7)

    def split(self) -> None:
        """Cut ways at the nodes that restrictions go through, so that their members end there."""
        via = {j for _, j, _ in self.banned}
        out: list[Way] = []
        for way in self.ways:
            run = [way.nodes[0]]
            for i, key in enumerate(way.nodes[1:], 1):
                run.append(key)
                if key in via or i == len(way.nodes) - 1:
                    out.append(Way(run, way.tags))
                    run = [key]
        self.ways = out

    def node_ids(self) -> dict[str, int]:
        """Give each node used by a way its id, in the order of use."""
        keys = dict.fromkeys(key for way in self.ways for key in way.nodes)
        return {key: 1001 + i for i, key in enumerate(keys)}

    def next_to(self, junction: str, other: str) -> str:
        """Give the node next to a junction on the road to `other`: the stop line, where there is one."""
        for key in (f"{junction}<{other}", f"{other}<{junction}"):
            if key in self.at:
                return key
        return other

    def way_of(self, a: str, b: str) -> int:
        """Give the index of the way that holds the step from a to b, in either order."""
        for w, way in enumerate(self.ways):
            if any({a, b} == {p, q} for p, q in zip(way.nodes, way.nodes[1:], strict=False)):
                return w
        raise ValueError(f"no way joins {a} and {b}")


WAY_ID = 500_001


def _restriction(plan: Plan, value: str) -> str:
    if not plan.is_left:
        return value
    swap = {"left": "right", "right": "left"}
    return "_".join(swap.get(part, part) for part in value.split("_"))


def write_osm(plan: Plan, path: Path) -> None:
    """Write the plan as OSM XML 0.6 (nodes, ways, restriction relations, each in order of id)."""
    ids = plan.node_ids()
    lines = ['<?xml version="1.0" encoding="UTF-8"?>', '<osm version="0.6" generator="turntally demo">']

    def tagged(tags: Tags) -> list[str]:
        return [f"    <tag k={quoteattr(k)} v={quoteattr(v)}/>" for k, v in tags.items()]

    for key, ident in ids.items():
        lon, lat = plan.degrees(key)
        lines.append(f'  <node id="{ident}" version="1" lat="{lat:.7f}" lon="{lon:.7f}">')
        lines += [*tagged(plan.tags.get(key, {})), "  </node>"]
    for w, way in enumerate(plan.ways):
        lines.append(f'  <way id="{WAY_ID + w}" version="1">')
        lines += [f'    <nd ref="{ids[key]}"/>' for key in way.nodes]
        lines += [*tagged(way.tags), "  </way>"]
    for r, ((before, via, after), value) in enumerate(plan.banned.items()):
        lines.append(f'  <relation id="{900_001 + r}" version="1">')
        came = WAY_ID + plan.way_of(plan.next_to(via, before), via)
        goes = WAY_ID + plan.way_of(via, plan.next_to(via, after))
        lines.append(f'    <member type="way" ref="{came}" role="from"/>')
        lines.append(f'    <member type="node" ref="{ids[via]}" role="via"/>')
        lines.append(f'    <member type="way" ref="{goes}" role="to"/>')
        lines += tagged({"type": "restriction", "restriction": _restriction(plan, value)})
        lines.append("  </relation>")
    lines.append("</osm>")
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")


def write_zones(plan: Plan, path: Path, time_zone: str) -> None:
    """Write the zones as GeoJSON (RFC 7946): rings closed and anticlockwise, the innermost zone first."""
    features = []
    for name, corners in plan.zones:
        ring = [plan.place(x, y) for x, y in corners]
        ring = ring[::-1] if plan.is_left else ring
        properties = {
            "zone": name,
            "time_zone": time_zone,
            "driving_side": "left" if plan.is_left else "right",
        }
        geometry = {"type": "Polygon", "coordinates": [[list(p) for p in [*ring, ring[0]]]]}
        features.append({"type": "Feature", "properties": properties, "geometry": geometry})
    path.write_text(json.dumps({"type": "FeatureCollection", "features": features}) + "\n", encoding="utf-8")
