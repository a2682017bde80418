"""A plain reading of an OSM extract for cars, with lists and loops, from the OSM wiki's rules alone.

It shares no code with `stream`. Rules: wiki pages of the keys highway, oneway, junction, access, maxspeed,
restriction, traffic_signals, stop, give_way (as summed up in METHODS.md section 2); lengths are pyproj's.
"""

import itertools
from collections import defaultdict
from pathlib import Path
from typing import Any

import osmium
from pyproj import Geod

GEOD = Geod(ellps="WGS84")
ROADS = {
    *(
        "motorway",
        "trunk",
        "primary",
        "secondary",
        "tertiary",
        "unclassified",
        "residential",
        "living_street",
    ),
    *("motorway_link", "trunk_link", "primary_link", "secondary_link", "tertiary_link", "road"),
}

Place = tuple[int, int]


class PlainStreets(osmium.SimpleHandler):  # type: ignore[misc]
    """Ways that cars may use, as node ids, and what else the tests compare."""

    def __init__(self, path: Path) -> None:
        super().__init__()
        self.place: dict[int, Place] = {}
        self.node_tags: dict[int, dict[str, str]] = {}
        self.ways: dict[int, tuple[list[int], dict[str, str]]] = {}
        self.restrictions: list[tuple[dict[str, str], list[tuple[str, int, str]]]] = []
        self.apply_file(str(path))
        self.open = {w: directions(tags) for w, (_, tags) in self.ways.items()}
        self.ways = {w: way for w, way in self.ways.items() if self.open[w] != (False, False)}
        self.neighbours = self._neighbours()
        self.open_steps = self._steps_open()
        self.n_uses = self._uses()

    def node(self, n: Any) -> None:
        """Keep every location, and the tags of nodes that have some."""
        self.place[n.id] = (round(n.location.lon * 1e7), round(n.location.lat * 1e7))
        if len(n.tags):
            self.node_tags[n.id] = dict(n.tags)

    def way(self, w: Any) -> None:
        """Keep roads for cars."""
        tags = dict(w.tags)
        if tags.get("highway") in ROADS and tags.get("area") != "yes":
            self.ways[w.id] = ([n.ref for n in w.nodes], tags)

    def relation(self, r: Any) -> None:
        """Keep turn restrictions."""
        if r.tags.get("type") == "restriction":
            self.restrictions.append((dict(r.tags), [(m.type, m.ref, m.role) for m in r.members]))

    def steps(self) -> list[tuple[int, int, int]]:
        """Give (way, node, next node) for each step along each way whose two nodes are in the file."""
        return [
            (way, a, b)
            for way, (nodes, _) in self.ways.items()
            for a, b in itertools.pairwise(nodes)
            if a != b and a in self.place and b in self.place
        ]

    def _neighbours(self) -> dict[int, list[tuple[int, int]]]:
        """Give for each node its (neighbour, way), once for each step that touches it."""
        out: dict[int, list[tuple[int, int]]] = defaultdict(list)
        for way, a, b in self.steps():
            out[a].append((b, way))
            out[b].append((a, way))
        return dict(out)

    def _uses(self) -> dict[int, int]:
        """Give how many times road ways name each node."""
        out: dict[int, int] = defaultdict(int)
        for nodes, _ in self.ways.values():
            for node in nodes:
                out[node] += 1
        return dict(out)

    def length_m(self, a: int, b: int) -> float:
        """Give the geodesic's length between two nodes."""
        (x1, y1), (x2, y2) = self.place[a], self.place[b]
        return float(GEOD.inv(x1 / 1e7, y1 / 1e7, x2 / 1e7, y2 / 1e7)[2])

    def _steps_open(self) -> set[tuple[int, int]]:
        """Give (node, next node) for each step in a direction that cars may drive."""
        found = set()
        for way, a, b in self.steps():
            along, against = self.open[way]
            if along:
                found.add((a, b))
            if against:
                found.add((b, a))
        return found

    def may_go(self, run: list[int]) -> bool:
        """Tell whether a car may drive from node to node along a run."""
        return all(step in self.open_steps for step in itertools.pairwise(run))

    def meeting_nodes(self) -> set[int]:
        """Give the nodes where three or more road ends meet."""
        return {n for n, ends in self.neighbours.items() if len(ends) >= 3}

    def chain(self, start: int, towards: int, stop: set[int]) -> tuple[list[int], float]:
        """Walk from a node by way of a neighbour to the first node in `stop` or to a dead end."""
        run, length = [start, towards], self.length_m(start, towards)
        while run[-1] not in stop and len(self.neighbours[run[-1]]) == 2:
            ends = [n for n, _ in self.neighbours[run[-1]]]
            ends.remove(run[-2])
            if ends[0] == start:
                return [*run, start], length + self.length_m(run[-1], start)
            length += self.length_m(run[-1], ends[0])
            run.append(ends[0])
        return run, length


def directions(tags: dict[str, str]) -> tuple[bool, bool]:
    """Tell whether a car may drive a way along its drawing, and against it."""
    for key in ("motorcar", "motor_vehicle", "vehicle", "access"):  # the most specific key decides
        if key in tags:
            if tags[key] in ("no", "private"):
                return False, False
            break
    oneway = tags.get("oneway")
    if oneway in ("yes", "true", "1"):
        return True, False
    if oneway in ("-1", "reverse"):
        return False, True
    if oneway in ("reversible", "alternating"):
        return False, False
    if oneway is None and (tags["highway"] == "motorway" or tags.get("junction") == "roundabout"):
        return True, False
    return True, True


def clusters(streets: PlainStreets, cluster_m: float) -> list[set[int]]:
    """Give the sets of meeting nodes that chains shorter than `cluster_m` join, whatever their width."""
    meeting = streets.meeting_nodes()
    group = {n: {n} for n in meeting}
    for node in meeting:
        for neighbour, _ in streets.neighbours[node]:
            run, length = streets.chain(node, neighbour, meeting)
            end = run[-1]
            if end in meeting and length < cluster_m and group[end] is not group[node]:
                merged = group[end] | group[node]
                for member in merged:
                    group[member] = merged
    return list({id(g): g for g in group.values()}.values())


def width_m(streets: PlainStreets, nodes: set[int]) -> float:
    """Give the greatest geodesic distance between two nodes."""
    return max((streets.length_m(a, b) for a in nodes for b in nodes if a < b), default=0.0)


def rings(streets: PlainStreets, value: str) -> list[set[int]]:
    """Give the node sets of connected ways with `junction=value`."""
    found: list[set[int]] = []
    for nodes, tags in streets.ways.values():
        if tags.get("junction") == value:
            new = set(nodes)
            for other in [ring for ring in found if ring & new]:
                new |= other
                found.remove(other)
            found.append(new)
    return found


def banned_turns(streets: PlainStreets) -> tuple[set[tuple[int, int, int]], int]:
    """Give the (node before, via, node after) that restrictions via one node forbid to cars, always.

    The second value counts restrictions that name more than one way in or out at their node, so that
    the movement meant can't be told.
    """
    out: set[tuple[int, int, int]] = set()
    n_unclear = 0
    for tags, members in streets.restrictions:
        value = tags.get("restriction", "")
        if {"motorcar", "motor_vehicle", "vehicle"} & set(tags.get("except", "").split(";")):
            continue
        if {"day_on", "day_off", "hour_on", "hour_off"} & set(
            tags
        ):  # holds at times: the older keys for that
            continue
        via = [ref for kind, ref, role in members if role == "via" and kind == "n"]
        ways = {
            role: [ref for kind, ref, r in members if r == role and kind == "w"] for role in ("from", "to")
        }
        if len(via) != 1 or not value.startswith(("no_", "only_")):
            continue
        ends = streets.neighbours.get(via[0], [])
        before = [n for n, way in ends if way in ways["from"] and streets.may_go([n, via[0]])]
        after = [n for n, way in ends if way in ways["to"] and streets.may_go([via[0], n])]
        if len(before) > 1 or len(after) > 1:
            n_unclear += 1
            continue
        if not before or not after:
            continue
        if value.startswith("only_"):
            exits = {n for n, _ in ends if streets.may_go([via[0], n])}
            out |= {(before[0], via[0], n) for n in exits - set(after)}
        else:
            out.add((before[0], via[0], after[0]))
    return out, n_unclear


def governed(streets: PlainStreets, values: set[str], junction: dict[int, int], reach_m: float) -> set[int]:
    """Give the junctions that nodes with these `highway` values govern.

    A node of a junction governs it. Elsewhere the node governs the junction ahead: by its direction key where
    it has one, by the way cars drive there where that is one way only, else the nearer of the two.
    """
    out: set[int] = set()
    stop = set(junction)
    for node, tags in streets.node_tags.items():
        if tags.get("highway") not in values or node not in streets.neighbours:
            continue
        if node in junction:
            out.add(junction[node])
            continue
        told = tags.get(f"{tags['highway']}:direction", tags.get("direction"))
        told = told if streets.n_uses[node] == 1 else None
        ahead = []  # (metres to the next junction, that junction, direction along the way that leads there)
        for neighbour, way in streets.neighbours[node]:
            run, metres = streets.chain(node, neighbour, stop)
            if not streets.may_go(run):
                continue
            nodes = streets.ways[way][0]
            side = "forward" if nodes.index(neighbour) > nodes.index(node) else "backward"
            ahead.append((metres, junction.get(run[-1]), side))
        ends = {end for _, end, _ in ahead}
        if told in ("forward", "backward"):
            ahead = [a for a in ahead if a[2] == told]
        elif len(ends) > 1:
            ahead = [min(ahead)]
        out |= {end for metres, end, _ in ahead if end is not None and metres <= reach_m}
    return out
