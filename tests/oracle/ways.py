"""Plain routes, matching and gates: Dijkstra, a Viterbi over the whole run, and the gates along its path.

Written from DESIGN.md section 5 and the papers (Dijkstra 1959; Newson & Krumm 2009); nothing is committed
before the run ends, nothing is cut into tiles. The limits that only tune (how many, how far) are the code's.
"""

import heapq
import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import chain, pairwise

from stream.config import Settings
from stream.detect.advance import AT_MOUTH_M
from stream.detect.candidates import MAX_ROADS
from stream.detect.carry import MAX_SURVIVORS
from stream.detect.follow import DETOUR_M, DETOUR_SHARE, FAST_MPS, FAST_SHARE, FAST_SLACK_S, SHORT_CHORD_M
from stream.detect.fused import MAX_WAIT
from stream.detect.search import SHORT_M, TURN_M
from stream.network.model import Streets
from tests.oracle.ground import Point, apart_m, nearest, roads_of

Fix = tuple[int, Point]
Spot = tuple[int, float]  # edge, chainage
Piece = tuple[int, float, float]  # edge, from, to
Route = tuple[float, float, int | None]  # metres between, log units, the edge before


@dataclass
class Ways:
    """The streets as lists, and the settings to follow them by."""

    streets: Streets
    settings: Settings

    def __post_init__(self) -> None:
        s, follow = self.streets, self.settings.follow
        self.lines = roads_of(s)
        self.length = [float(s.road_length_m[e // 2]) for e in range(2 * len(self.lines))]
        self.ahead: list[list[tuple[int, float]]] = []
        for e in range(len(self.length)):
            out = []
            for k in range(int(s.succ_start[e]), int(s.succ_start[e + 1])):
                f, angle = int(s.succ_edge[k]), abs(float(s.succ_turn_deg[k]))
                cost = follow.reverse_cost if f == e ^ 1 else follow.turn_cost * max(angle - 20.0, 0.0) / 70.0
                out.append((f, cost + follow.banned_cost * int(s.succ_banned[k])))
            self.ahead.append(out)
        self._found: dict[tuple[int, float], dict[int, Route]] = {}

    def routes(self, source: int, reach_m: float) -> dict[int, Route]:
        """Give the routes from the end of an edge to each edge that starts nearer than the reach."""
        if (source, reach_m) not in self._found:
            self._found[source, reach_m] = self._search(source, reach_m)
        return self._found[source, reach_m]

    def _search(self, source: int, reach_m: float) -> dict[int, Route]:
        done: dict[int, Route] = {}
        open_: list[tuple[float, int, float, float, int | None]] = []
        for edge, cost in self.ahead[source]:
            heapq.heappush(open_, (TURN_M * cost, edge, 0.0, cost, None))
        while open_:
            _, edge, metres, cost, before = heapq.heappop(open_)
            if edge in done:
                continue
            done[edge] = (metres, cost, before)
            further = metres + self.length[edge]
            if further < reach_m:
                for to, more in self.ahead[edge]:
                    total = cost + more
                    heapq.heappush(open_, (further + TURN_M * total, to, further, total, edge))
        return done

    def spots(self, point: Point) -> list[tuple[float, Spot]]:
        """Give the places where a ping may lie, with the cost of its offset; nearest first."""
        follow = self.settings.follow
        near = []
        for road, line in enumerate(self.lines):
            at, off = nearest(point, line)
            if off < follow.radius_m:
                near.append((off, road, at))
        near.sort()
        out = []
        for off, road, at in near[:MAX_ROADS]:
            cost = off * off / (2.0 * follow.sigma_m**2)
            if cost <= near[0][0] ** 2 / (2.0 * follow.sigma_m**2) + 2.0 * follow.prune:
                for e, m in ((2 * road, at), (2 * road + 1, self.length[2 * road] - at)):
                    if self.streets.edge_open[e]:
                        out.append((cost, (e, m)))
        return out

    def point(self, spot: Spot) -> Point:
        """Give the point of a place; roads have no bends here."""
        (a, b), share = self.lines[spot[0] // 2], spot[1] / self.length[spot[0]]
        share = 1.0 - share if spot[0] % 2 else share
        return a[0] + share * (b[0] - a[0]), a[1] + share * (b[1] - a[1])

    def step(self, a: Spot, b: Spot, chord_m: float, dt_us: int) -> tuple[float, str]:
        """Price the way from one place to another: log units, and same, turned or routed."""
        follow = self.settings.follow
        scale = follow.beta_m + follow.beta_share * chord_m
        if b[0] == a[0] and b[1] >= a[1] - follow.back_m:
            return abs(max(b[1] - a[1], 0.0) - chord_m) / scale, "same"
        ways = [(math.inf, "none")]
        left = self.length[a[0]] - a[1]
        if b[0] == a[0] ^ 1:
            ways.append((follow.reverse_cost + abs(abs(left - b[1]) - chord_m) / scale, "turned"))
        route = self.routes(a[0], self.reach_m(chord_m)).get(b[0])
        if route:
            metres = left + route[0] + b[1]
            limit = max(float(self.streets.edge_speed_mps[e]) for e in (a[0], b[0]))
            can = FAST_SHARE * max(FAST_MPS, limit) * (dt_us * 1e-6 + FAST_SLACK_S)
            if metres <= can and metres <= DETOUR_SHARE * chord_m + DETOUR_M:
                ways.append((route[1] + abs(metres - chord_m) / scale, "routed"))
        return min(ways)

    def reach_m(self, chord_m: float) -> float:
        """Give how far routes are searched for a step."""
        return SHORT_M if chord_m <= SHORT_CHORD_M else self.settings.follow.route_reach_m

    def anchors(self, fixes: Sequence[Fix]) -> list[tuple[Fix, int]]:
        """Give the pings that are matched, each with the time it was left: some metres apart, or after many
        kept ones, and the last kept.
        """
        follow = self.settings.follow
        kept: list[Fix] = []
        left_us: list[int] = []
        chosen: list[int] = []
        for fix in fixes:
            if kept and apart_m(kept[-1][1], fix[1]) < follow.keep_m:
                left_us[-1] = fix[0]
                continue
            kept.append(fix)
            left_us.append(fix[0])
            k = len(kept) - 1
            far = not chosen or apart_m(kept[chosen[-1]][1], fix[1]) >= follow.anchor_m
            if far or k - chosen[-1] >= MAX_WAIT:
                chosen.append(k)
        if chosen and chosen[-1] != len(kept) - 1:
            chosen.append(len(kept) - 1)
        return [(kept[k], left_us[k]) for k in chosen]

    def match(self, fixes: Sequence[Fix]) -> list[tuple[Fix, int, Spot]]:
        """Give the likeliest place of each anchor of a trip, those without a way left out."""
        follow = self.settings.follow
        columns: list[tuple[Fix, int, list[tuple[float, Spot, int]]]] = []
        for fix, left_us in self.anchors(fixes):
            priced = []
            for cost, spot in self.spots(fix[1]):
                if not columns:
                    priced.append((cost, spot, -1))
                    continue
                before, before_us, states = columns[-1]
                chord, dt_us = apart_m(before[1], fix[1]), fix[0] - before_us
                ways = [(s[0] + self.step(s[1], spot, chord, dt_us)[0], k) for k, s in enumerate(states)]
                best, k = min(ways)
                if best < math.inf:
                    priced.append((cost + best, spot, k))
            if not priced:
                continue
            least = min(p[0] for p in priced)
            kept = sorted((p for p in priced if p[0] <= least + follow.prune), key=lambda p: p[0])
            columns.append((fix, left_us, [(p[0] - least, p[1], p[2]) for p in kept[:MAX_SURVIVORS]]))
        out = []
        k = 0
        for fix, left_us, states in reversed(columns):
            out.append((fix, left_us, states[k][1]))
            k = states[k][2]
        return out[::-1]

    def path(self, places: Sequence[tuple[Fix, int, Spot]]) -> list[list[Piece]]:
        """Give the pieces of each step of the matched path; what was reached is never gone back on."""
        steps = []
        reach = places[0][2][1] if places else 0.0
        for (fix_a, left_us, a), (fix_b, _, b) in pairwise(places):
            chord = apart_m(fix_a[1], fix_b[1])
            kind, long = self.step(a, b, chord, fix_b[0] - left_us)[1], self.length[a[0]]
            if kind == "same":
                pieces = [(a[0], reach, max(reach, b[1]))]
            elif kind == "turned":
                turn = min(max(reach, long - b[1]), long)
                pieces = [(a[0], reach, turn), (b[0], long - turn, max(b[1], long - turn))]
            else:
                routes = self.routes(a[0], self.reach_m(chord))
                between: list[int] = []
                edge = routes[b[0]][2]
                while edge is not None:
                    between.insert(0, edge)
                    edge = routes[edge][2]
                pieces = [
                    (a[0], reach, long),
                    *((e, 0.0, self.length[e]) for e in between),
                    (b[0], 0.0, b[1]),
                ]
            reach = pieces[-1][2]
            steps.append(pieces)
        return steps

    def passages(
        self, steps: Sequence[Sequence[Piece]]
    ) -> tuple[list[tuple[int, int]], list[tuple[int, str]]]:
        """Give the passages as (arm in, arm out), and the unfinished ones as (arm in, reason)."""
        s = self.streets
        done: list[tuple[int, int]] = []
        left: list[tuple[int, str]] = []
        arm = -1
        met, before = False, (-1, 0.0, 0.0)
        for e, low, high in chain.from_iterable(steps):
            # Turned between nodes, it came to the junction if it turned within 15 m of it (one-road links).
            if e == before[0] ^ 1 and low > 0.0:
                met = met or self.length[e] - before[2] <= AT_MOUTH_M
            elif low == 0.0 and arm >= 0:
                tail = int(s.road_to[e // 2] if e % 2 else s.road_from[e // 2])
                met = met or int(s.node_junction[tail]) == int(s.arm_junction[arm])
            before = (e, low, high)
            out, into = int(s.exit_gate_arm[e]), int(s.entry_gate_arm[e])
            if arm >= 0 and out >= 0 and low < s.exit_gate_at_m[e] <= high:
                if s.arm_junction[out] != s.arm_junction[arm]:
                    left.append((arm, "break"))
                elif out == arm and not met:
                    left.append((arm, "turned_back"))
                else:
                    done.append((arm, out))
                arm = -1
            if into >= 0 and low < s.entry_gate_at_m[e] <= high:
                if arm >= 0:
                    left.append((arm, "turned_back"))
                arm, met = into, False
        if arm >= 0:
            left.append((arm, "close"))
        return done, left
