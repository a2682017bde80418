"""What drivers of the town obey: the plan's signals, signs and right of way as rules at edge ends.

Fixed-time signals in two phases; other traffic as Poisson streams with the critical gaps of the Highway
Capacity Manual 2000 (METHODS.md section 7). Which road lies across is seen from the drawn plan alone.
"""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stream.demo.holds import (
    BACK_M,
    CYCLE_S,
    FLOW,
    FOLLOW_S,
    GAP_S,
    GIVE_WAY,
    GREEN_S,
    HEADWAY_S,
    NO_RULE,
    OFFSET_S,
    QUEUE,
    SIGNAL,
    SIGNAL_YIELD,
    STOP,
)
from stream.demo.plan import LINE_M, WAY_ID, Plan
from stream.demo.roads import Roads, chainages, metres_per_degree

F64 = NDArray[np.float64]

LOST_S = 5.0  # s between the greens of two phases
CYCLES_S = (60.0, 72.0, 80.0, 90.0)
# s: critical gap and follow-up by turn from a minor road: near side, through, far side; HCM 2000, from memory
MINOR = ((6.2, 3.3), (6.5, 4.0), (7.1, 3.5))
MAJOR_FAR = (4.1, 2.2)  # far-side turn off a major road
SIGNAL_FAR = (4.87, 2.73)  # far-side turn on a full green, METHODS.md section 7
RING = (4.5, 3.2)  # entry to a roundabout; follow-up METHODS.md section 7, gap from memory
# vehicles per hour across, at level 1, by the class of the road across
ACROSS = {"primary": 520.0, "secondary": 420.0, "tertiary": 300.0, "motorway_link": 200.0}
DEFAULT_KMH = {"unclassified": 50.0}
# strength of the other traffic by hour of the local clock
LEVEL = np.interp(
    np.arange(24) + 0.5,
    [0, 4, 6, 7.5, 9, 11, 15, 16.5, 18, 24],
    [0.1, 0.05, 0.4, 1, 0.7, 0.6, 0.7, 1, 0.8, 0.1],
)


@dataclass(frozen=True)
class _Edges:
    """Directed steps of the plan: node keys, index of the way, bearing in degrees (as mirrored)."""

    start: list[str]
    end: list[str]
    way: list[int]
    bearing_deg: F64
    length_m: F64


def _edges(plan: Plan) -> _Edges:
    start: list[str] = []
    end: list[str] = []
    ways: list[int] = []
    for w, way in enumerate(plan.ways):
        one_way = way.tags.get("oneway") == "yes" or way.tags.get("junction") == "roundabout"
        for a, b in zip(way.nodes, way.nodes[1:], strict=False):
            for p, q in ((a, b),) if one_way else ((a, b), (b, a)):
                start.append(p)
                end.append(q)
                ways.append(w)
    lon1, lat1 = np.array([plan.degrees(k) for k in start]).T
    lon2, lat2 = np.array([plan.degrees(k) for k in end]).T
    k_lon, k_lat = metres_per_degree((lat1 + lat2) / 2.0)
    x, y = (lon2 - lon1) * k_lon, (lat2 - lat1) * k_lat
    return _Edges(start, end, ways, np.degrees(np.arctan2(x, y)) % 360.0, np.hypot(x, y))


def _is_banned(plan: Plan, before: str, via: str, after: str) -> bool:
    for (a, j, b), value in plan.banned.items():
        if j == via and plan.next_to(j, a) == before:
            is_it = plan.next_to(j, b) == after
            if is_it == value.startswith("no_"):
                return True
    return False


class _Rulebook:
    """Makes the rule of one turn: from edge e to edge f."""

    def __init__(self, plan: Plan, edges: _Edges) -> None:
        self.plan, self.edges = plan, edges
        self.sense = -1.0 if plan.is_left else 1.0
        self.neighbours: dict[str, set[str]] = {}
        for a, b in zip(edges.start, edges.end, strict=True):
            self.neighbours.setdefault(a, set()).add(b)
            self.neighbours.setdefault(b, set()).add(a)
        self.signed = {junction for _, junction in plan.holds}
        self.group = {name: i for i, name in enumerate(dict.fromkeys(plan.signals.values()))}
        self.across: dict[str, float] = {}
        for a, b, w in zip(edges.start, edges.end, edges.way, strict=True):
            if (a, b) not in plan.holds:
                flow = ACROSS.get(plan.ways[w].tags["highway"], 150.0)
                self.across[b] = max(self.across.get(b, 0.0), flow)

    def turn_deg(self, e: int, f: int) -> float:
        """Give the turn from e to f, near side positive whichever side is driven on."""
        d = self.edges.bearing_deg[f] - self.edges.bearing_deg[e]
        return self.sense * float(d - 360.0 * math.ceil((d - 180.0) / 360.0))

    def rule(self, e: int, f: int) -> tuple[int, F64]:
        """Give kind and row of the rule for turning from e into f (see `holds`)."""
        plan, before, node = self.plan, self.edges.start[e], self.edges.end[e]
        row = np.zeros(8)
        at_line = f"{node}<" in before
        row[BACK_M] = self.edges.length_m[e] if at_line else min(8.0, 0.5 * self.edges.length_m[e])
        tags = plan.ways[self.edges.way[e]].tags
        after = plan.ways[self.edges.way[f]].tags
        turn = self.turn_deg(e, f)
        if node in plan.signals:
            inside = plan.signals.get(before) == plan.signals[node]
            return (NO_RULE, row) if inside else self._signal(e, turn, row)
        if (before, node) in plan.holds:
            gap = MINOR[0] if turn > 45.0 else MINOR[2] if turn < -45.0 else MINOR[1]
            share = 0.5 if turn > 45.0 else 1.0
            kind = STOP if plan.holds[before, node] == "stop" else GIVE_WAY
            return self._gap(kind, row, self.across.get(node, 150.0) * share, gap, 0.2)
        on_ring = after.get("junction") == "roundabout"
        if on_ring and tags.get("junction") != "roundabout":
            row[BACK_M] = 3.0
            return self._gap(GIVE_WAY, row, 380.0, RING, 0.2)
        if plan.tags.get(node, {}).get("highway") == "mini_roundabout":
            return self._gap(GIVE_WAY, row, 260.0, RING, 0.1)
        if node in self.signed:
            far = turn < -45.0
            return (
                self._gap(GIVE_WAY, row, 0.5 * self.across.get(node, 150.0), MAJOR_FAR, 0.0)
                if far
                else (NO_RULE, row)
            )
        if tags["highway"] == "residential" and len(self.neighbours[node]) > 2:
            return self._gap(GIVE_WAY, row, 90.0, MINOR[0], 0.0)
        return NO_RULE, row

    def _gap(
        self, kind: int, row: F64, per_hour: float, gap: tuple[float, float], queue: float
    ) -> tuple[int, F64]:
        row[FLOW], row[GAP_S], row[FOLLOW_S], row[QUEUE] = per_hour / 3600.0, gap[0], gap[1], queue
        return kind, row

    def _signal(self, e: int, turn: float, row: F64) -> tuple[int, F64]:
        """Two phases by the axis of the approach in the drawn plan; others fill 50 to 85 % of the green."""
        (x0, y0), (x1, y1) = self.plan.at[self.edges.start[e]], self.plan.at[self.edges.end[e]]
        first = abs(y1 - y0) > abs(x1 - x0)
        i = self.group[self.plan.signals[self.edges.end[e]]]
        cycle = CYCLES_S[i % 4]
        greens = (cycle - 2.0 * LOST_S) * np.array([0.42 + 0.04 * (i % 5), 0.58 - 0.04 * (i % 5)])
        row[CYCLE_S], row[GREEN_S] = cycle, greens[0 if first else 1]
        row[OFFSET_S] = (17.0 * i) % cycle + (0.0 if first else greens[0] + LOST_S)
        fill = 0.5 + 0.05 * ((e * 7) % 8)
        row[QUEUE] = fill * row[GREEN_S] / cycle / HEADWAY_S
        if turn < -45.0:
            row[FLOW], row[GAP_S], row[FOLLOW_S] = 0.6 * row[QUEUE], *SIGNAL_FAR
            return SIGNAL_YIELD, row
        return SIGNAL, row


def town_roads(plan: Plan) -> Roads:
    """Turn the plan into roads with rules; node and way ids are those that `write_osm` writes."""
    edges = _edges(plan)
    book = _Rulebook(plan, edges)
    leaving: dict[str, list[int]] = {}
    for e, key in enumerate(edges.start):
        leaving.setdefault(key, []).append(e)
    succ_start, succ, turns, kinds, rows = [0], [], [], [], []
    for e, (before, node) in enumerate(zip(edges.start, edges.end, strict=True)):
        for f in leaving.get(node, []):
            after = edges.end[f]
            turns_back = after == before and len(book.neighbours[node]) > 1
            if turns_back or _is_banned(plan, before, node, after):
                continue
            kind, row = book.rule(e, f)
            succ.append(f)
            turns.append(book.sense * book.turn_deg(e, f))
            kinds.append(kind)
            rows.append(row)
        succ_start.append(len(succ))
    ids = plan.node_ids()
    index = {key: i for i, key in enumerate(ids)}
    tags = [plan.ways[w].tags for w in edges.way]
    kmh = np.array([float(t.get("maxspeed", DEFAULT_KMH.get(t["highway"], 50.0))) for t in tags])
    ends = [(index[a], index[b]) for a, b in zip(edges.start, edges.end, strict=True)]
    node_lon, node_lat = np.array([plan.degrees(k) for k in ids]).T
    pairs = np.array(ends, np.int32)
    shape = np.arange(0, 2 * len(ends) + 1, 2, dtype=np.int64)
    lon, lat = node_lon[pairs].ravel(), node_lat[pairs].ravel()
    is_open = (edges.length_m > 2.5 * LINE_M) & np.array([t.get("junction") != "roundabout" for t in tags])
    return Roads(
        node_id=np.array(list(ids.values()), np.int64),
        node_lon=node_lon,
        node_lat=node_lat,
        edge_from=pairs[:, 0].copy(),
        edge_to=pairs[:, 1].copy(),
        edge_m=edges.length_m,
        edge_mps=kmh / 3.6,
        edge_way=np.array(edges.way, np.int64) + WAY_ID,
        is_open=is_open.astype(np.uint8),
        point_start=shape,
        point_lon=lon,
        point_lat=lat,
        point_m=chainages(shape, lon, lat, edges.length_m),
        succ_start=np.array(succ_start, np.int32),
        succ_edge=np.array(succ, np.int32),
        succ_turn_deg=np.array(turns),
        kind=np.array(kinds, np.int8),
        rule=np.array(rows),
    )
