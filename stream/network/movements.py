"""Ways through a junction: from each inbound arm to each outbound arm that an open path reaches.

Guarantee: a movement is banned only where every open path between its mouths breaks a restriction,
and timed where that is so only at times.
"""

import heapq
from array import array
from collections import Counter
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stream.config import Maneuver
from stream.geodesy import turn_deg
from stream.network.arms import Arms
from stream.network.graph import Graph
from stream.network.junctions import Junctions
from stream.network.model import F64, I32
from stream.network.turns import Forbidden, Run

Progress = tuple[tuple[Run, int], ...]


@dataclass(frozen=True)
class Movements:
    """M movements, by junction, arm in, arm out."""

    arm_in: I32
    arm_out: I32
    turn_deg: F64
    maneuver: list[str]
    inside_m: F64
    is_banned: NDArray[np.bool_]
    is_timed: NDArray[np.bool_]
    report: dict[str, int]


def maneuver_of(angle_deg: float, limits: Maneuver) -> str:
    """Name a turn angle by the values of the OSM key `turn`; on a limit it is the next class up."""
    size = abs(angle_deg)
    if size < limits.through_deg:
        return "through"
    if size >= limits.sharp_deg:
        return "reverse"
    side = "right" if angle_deg > 0 else "left"
    if size < limits.slight_deg:
        return f"slight_{side}"
    return side if size < limits.plain_deg else f"sharp_{side}"


class _Inside:
    """Shortest paths over the edges inside one junction."""

    def __init__(self, graph: Graph, succ: tuple[I32, I32], road_inside: I32, arms: Arms) -> None:
        self._start, self._edge = succ[0].tolist(), succ[1].tolist()
        self._length = graph.road_length_m.tolist()
        self._inside = road_inside.tolist()
        self._exit = {edge: arm for arm, edge in enumerate(arms.out_edge.tolist())}
        self._out_edge = arms.out_edge.tolist()
        self._junction = arms.junction.tolist()

    def reach(self, arm: int, runs: dict[int, list[Run]], round_first: bool) -> dict[int, float]:
        """Give the arms that an arm leads to, with metres between the mouths.

        Parameters
        ----------
        runs
            Forbidden runs of edges by their first edge; none of them is driven in full.
        round_first
            On a ring, turning back at the mouth itself counts only if there is no way round.
        """
        junction, begin = self._junction[arm], self._out_edge[arm] ^ 1
        found: dict[int, float] = {}
        turned_back = False
        heap: list[tuple[float, int, Progress]] = [
            (0.0, begin, tuple((run, 1) for run in runs.get(begin, ())))
        ]
        seen: set[tuple[int, Progress]] = set()
        while heap:
            metres, edge, active = heapq.heappop(heap)
            if (edge, active) in seen:
                continue
            seen.add((edge, active))
            for after in self._edge[self._start[edge] : self._start[edge + 1]]:
                going = _go_on(active, after, runs)
                if going is None:
                    continue
                out = self._exit.get(after)
                if out is not None and self._junction[out] == junction:
                    if after == edge ^ 1 and round_first:
                        turned_back = True
                    else:
                        found.setdefault(out, metres)
                elif self._inside[after >> 1] == junction and after != edge ^ 1:
                    heapq.heappush(heap, (metres + self._length[after >> 1], after, going))
        if turned_back:
            found.setdefault(arm, 0.0)
        return found


def _go_on(active: Progress, after: int, runs: dict[int, list[Run]]) -> Progress | None:
    """Carry forbidden runs under way on to the next edge; None where one would be driven in full."""
    if not active and not runs:
        return ()
    kept = []
    for run, at in active:
        if run[at] == after:
            if at == len(run) - 1:
                return None
            kept.append((run, at + 1))
    kept.extend((run, 1) for run in runs.get(after, ()))
    return tuple(kept)


def _by_first(runs: Iterable[Run]) -> dict[int, list[Run]]:
    out: dict[int, list[Run]] = {}
    for run in sorted(runs):
        out.setdefault(run[0], []).append(run)
    return out


def build_movements(
    graph: Graph,
    succ: tuple[I32, I32],
    junctions: Junctions,
    road_inside: I32,
    arms: Arms,
    forbidden: Forbidden,
    limits: Maneuver,
) -> Movements:
    """Find all movements, their angles and the paths between their mouths.

    Parameters
    ----------
    succ
        Starts and edges of the successors.
    """
    inside = _Inside(graph, succ, road_inside, arms)
    always, either = _by_first(forbidden.always), _by_first(forbidden.always | forbidden.timed)
    came, goes, turned, inside_m = array("i"), array("i"), array("d"), array("d")
    banned, timed = array("b"), array("b")
    for arm in np.flatnonzero(arms.is_inbound).tolist():
        on_ring = junctions.kind[arms.junction[arm]] in ("roundabout", "circular")
        every = inside.reach(arm, {}, on_ring)
        legal = inside.reach(arm, always, on_ring) if always else every
        untimed = inside.reach(arm, either, on_ring) if forbidden.timed else legal
        heading = (float(arms.bearing_deg[arm]) + 180.0) % 360.0
        for out in sorted(every):
            angle = 180.0 if out == arm else float(turn_deg(heading, float(arms.bearing_deg[out])))
            is_legal = out in legal
            came.append(arm)
            goes.append(out)
            turned.append(angle)
            inside_m.append(legal[out] if is_legal else every[out])
            banned.append(not is_legal)
            timed.append(is_legal and out not in untimed)
    names = [maneuver_of(angle, limits) for angle in turned]
    report = Counter(names)
    report.update(banned=sum(banned), timed=sum(timed))
    return Movements(
        np.array(came, np.int32),
        np.array(goes, np.int32),
        np.array(turned, np.float64),
        names,
        np.array(inside_m, np.float64),
        np.array(banned, np.bool_),
        np.array(timed, np.bool_),
        dict(sorted(report.items())),
    )
