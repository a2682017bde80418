"""Little street plans in metres, written as OSM XML: for tests of one rule at a time."""

import math
from pathlib import Path

from pyproj import Geod

from stream.config import Settings, load_settings
from stream.network import Built, build_network

GEOD = Geod(ellps="WGS84")
HOME = {"highway": "residential"}


class Sketch:
    """A plan around an origin; places are metres east and north of it, along geodesics."""

    def __init__(self, lon: float = 24.94, lat: float = 60.17) -> None:
        self.origin = (lon, lat)
        self.place: dict[int, tuple[float, float]] = {}
        self._node: dict[int, str] = {}
        self._way: dict[int, str] = {}
        self._relation: dict[int, str] = {}

    def node(self, node_id: int, east_m: float, north_m: float, tags: dict[str, str] | None = None) -> None:
        """Add a node."""
        azimuth = math.degrees(math.atan2(east_m, north_m))
        lon, lat, _ = GEOD.fwd(*self.origin, azimuth, math.hypot(east_m, north_m))
        self.place[node_id] = (lon, lat)
        head = f"<node id='{node_id}' version='1' lon='{lon:.7f}' lat='{lat:.7f}'>"
        self._node[node_id] = head + _tags(tags or {}) + "</node>"

    def nodes(self, places: dict[int, tuple[float, float]]) -> None:
        """Add nodes without tags."""
        for node_id, (east_m, north_m) in places.items():
            self.node(node_id, east_m, north_m)

    def way(self, way_id: int, nodes: list[int], tags: dict[str, str] | None = None, **more: str) -> None:
        """Add a way; a residential street unless tags say otherwise."""
        refs = "".join(f"<nd ref='{n}'/>" for n in nodes)
        tags = {**(HOME if tags is None else tags), **more}
        self._way[way_id] = f"<way id='{way_id}' version='1'>{refs}{_tags(tags)}</way>"

    def turn(
        self,
        relation_id: int,
        value: str,
        members: list[tuple[str, str, int]],
        tags: dict[str, str] | None = None,
    ) -> None:
        """Add a restriction; members are (role, n or w, id); an empty value sets no `restriction` tag."""
        kinds = {"n": "node", "w": "way"}
        inner = "".join(f"<member type='{kinds[t]}' ref='{i}' role='{r}'/>" for r, t, i in members)
        all_tags = {"type": "restriction", **({"restriction": value} if value else {}), **(tags or {})}
        head = f"<relation id='{relation_id}' version='1'>"
        self._relation[relation_id] = head + inner + _tags(all_tags) + "</relation>"

    def xml(self, backwards: bool = False) -> str:
        """Write the plan; backwards turns the order of things of each kind round."""
        parts = []
        for things in (self._node, self._way, self._relation):
            lines = [things[k] for k in sorted(things, reverse=backwards)]
            parts.extend(lines)
        return "<?xml version='1.0' encoding='UTF-8'?>\n<osm version='0.6'>" + "\n".join(parts) + "</osm>\n"

    def write(self, folder: Path, backwards: bool = False) -> Path:
        """Write the plan to a file."""
        path = folder / "sketch.osm"
        path.write_text(self.xml(backwards), encoding="utf-8")
        return path

    def build(self, folder: Path, settings: Settings | None = None, backwards: bool = False) -> Built:
        """Write the plan and build it."""
        return build_network(self.write(folder, backwards), None, settings or load_settings())


def _tags(tags: dict[str, str]) -> str:
    return "".join(f"<tag k='{k}' v='{v}'/>" for k, v in tags.items())


def cross(arm_m: float = 200.0, lon: float = 24.94, lat: float = 60.17) -> Sketch:
    """Give four streets that meet at node 1: ways 12 to the north, 13 east, 14 south, 15 west."""
    sketch = Sketch(lon, lat)
    sketch.nodes({1: (0, 0), 2: (0, arm_m), 3: (arm_m, 0), 4: (0, -arm_m), 5: (-arm_m, 0)})
    for end in (2, 3, 4, 5):
        sketch.way(10 + end, [1, end])
    return sketch
