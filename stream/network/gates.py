"""Gates: how far from the mouth, on which edge, and their lines across the arm.

Guarantee: a gate lies at most half of its link from its mouth, so on each link and in each direction
the exit gate behind comes before the entry gate ahead; a gate exists only where a car can drive from it
to the mouth, or from the mouth to it; a line stays on its side of halfway to the next road.
"""

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import shapely
from numpy.typing import NDArray

from stream.config import Settings, by_class
from stream.geodesy import metres_per_degree
from stream.network.arms import Arms, Links
from stream.network.graph import Graph, bearings_kernel, place
from stream.network.model import F64, I32, NONE

HALF_LINE_M = 15.0  # a gate's line reaches no further than this to either side
APART_M = 0.05  # each of two gates that meet at half of a link keeps this far from the middle
GATES_AT_ONCE = 20_000  # lines laid together: bounds memory, changes no result
OWN_ROAD_M = 1.0  # the arm's own road this near to the gate is the gate's place, not a neighbour


@dataclass(frozen=True)
class Gates:
    """Gates by arm (A) and by edge (2R); distance 0 and edge -1 where there is none.

    Attributes
    ----------
    entry_m, exit_m : float64[A]          distance from the mouth
    entry_edge, exit_edge : int32[A]      inbound and outbound edge that holds it
    edge_entry_arm, edge_exit_arm : int32[2R]
    edge_entry_at_m, edge_exit_at_m : float64[2R]   chainage on the edge
    entry_line, exit_line : float64[A, 4]  lon and lat of the left end, then of the right end as driven;
                                           NaN where there is no gate
    report : dict                         gates built, and missing by reason
    """

    entry_m: F64
    exit_m: F64
    entry_edge: I32
    exit_edge: I32
    edge_entry_arm: I32
    edge_entry_at_m: F64
    edge_exit_arm: I32
    edge_exit_at_m: F64
    entry_line: F64
    exit_line: F64
    report: dict[str, int]


def _reach(graph: Graph, run: Sequence[tuple[int, int]], gate_m: float, is_entry: bool) -> tuple[int, float]:
    """Give the edge that holds a gate and its chainage there, or -1 where the way to it is closed.

    Parameters
    ----------
    run
        Roads of the link away from the mouth, each with 1 where passed against its drawing.
    """
    before = 0.0
    for road, against in run:
        outbound = 2 * road + against
        edge = outbound ^ 1 if is_entry else outbound
        if not graph.edge_open[edge]:
            return NONE, 0.0
        length = float(graph.road_length_m[road])
        if gate_m <= before + length or road == run[-1][0]:
            at = min(gate_m - before, length)
            return edge, length - at if is_entry else at
        before += length
    return NONE, 0.0


def _lacks_gates(links: Links, arms: Arms, arm: int, dead_end_min_m: float) -> bool:
    """Tell whether an arm is a dead end too short for gates."""
    link = arms.link[arm]
    other = arms.link_arm_from[link] if arms.at_end[arm] else arms.link_arm_to[link]
    return bool(other == NONE and links.length_m[link] < dead_end_min_m)


def build_gates(graph: Graph, links: Links, arms: Arms, settings: Settings) -> Gates:
    """Set the gates of all arms.

    Source: DESIGN sections 4 and 5; distances by class METHODS section 6.
    """
    n_arms, n_edges = len(arms.link), len(graph.edge_open)
    report: Counter[str] = Counter()
    gate_m = np.zeros((2, n_arms))
    gate_edge = np.full((2, n_arms), NONE, np.int32)
    edge_arm = np.full((2, n_edges), NONE, np.int32)
    edge_at = np.zeros((2, n_edges))
    wanted = (settings.gates.entry_m, settings.gates.exit_m)
    for arm in range(n_arms):
        link = int(arms.link[arm])
        run = links.run(link, bool(arms.at_end[arm]))
        half_m = _half_m(float(links.length_m[link]))
        name = settings.network.classes[graph.road_class[arms.main_road[arm]]]
        for side, is_open in enumerate((arms.is_inbound[arm], arms.is_outbound[arm])):
            what = "exit" if side else "entry"
            if not is_open:
                report[f"{what}_missing_one_way"] += 1
                continue
            if _lacks_gates(links, arms, arm, settings.network.dead_end_min_m):
                report[f"{what}_missing_short_dead_end"] += 1
                continue
            metres = min(by_class(wanted[side], name), half_m)
            edge, at = _reach(graph, run, metres, side == 0)
            if edge == NONE:
                report[f"{what}_missing_direction_changes"] += 1
                continue
            report[f"{what}_built"] += 1
            report[f"{what}_shortened"] += int(metres == half_m)
            gate_m[side, arm], gate_edge[side, arm] = metres, edge
            edge_arm[side, edge], edge_at[side, edge] = arm, at
    neighbours = _Neighbours(graph, links)
    lines = [_lines(neighbours, graph, arms, gate_edge[side], edge_at[side]) for side in (0, 1)]
    return Gates(
        gate_m[0],
        gate_m[1],
        gate_edge[0],
        gate_edge[1],
        edge_arm[0],
        edge_at[0],
        edge_arm[1],
        edge_at[1],
        lines[0],
        lines[1],
        dict(sorted(report.items())),
    )


def _half_m(length_m: float) -> float:
    """Give the greatest gate distance on a link: a hair below half of it."""
    return 0.5 * length_m - min(APART_M, 0.05 * length_m)


class _Neighbours:
    """All roads as lines in degrees, with an index to find those near a gate."""

    def __init__(self, graph: Graph, links: Links) -> None:
        self._base = float(graph.point_lon_e7[0]) * 1e-7
        east = self.east(graph.point_lon_e7.astype(np.float64) * 1e-7)
        points = np.stack([east, graph.point_lat_e7 * 1e-7], axis=1)
        road = np.repeat(np.arange(len(graph.point_start) - 1), np.diff(graph.point_start))
        self._roads = np.asarray(shapely.linestrings(points, indices=road), np.object_)
        self._tree = shapely.STRtree(self._roads)
        self._link = np.full(len(self._roads), NONE, np.int32)
        self._link[links.road] = np.repeat(np.arange(len(links.length_m)), np.diff(links.start))

    def east(self, lon: F64) -> F64:
        """Give longitudes as degrees east of the first point: lines then go on across 180 degrees."""
        return (lon - self._base + 180.0) % 360.0 - 180.0

    def free_m(self, rays: NDArray[np.object_], link: I32) -> F64:
        """Give how far each ray goes before it meets another road, at most its own length.

        Parameters
        ----------
        rays
            Lines of 2 HALF_LINE_M from a gate, in degrees.
        link
            The gates' links: their own roads right at the gate don't count.
        """
        free = np.full(len(rays), 2.0 * HALF_LINE_M)
        ray_ix, road_ix = self._tree.query(rays, predicate="intersects")
        met = shapely.intersection(rays[ray_ix], self._roads[road_ix])
        points, of = shapely.get_coordinates(met, return_index=True)
        start = shapely.get_coordinates(rays)[0::2][ray_ix[of]]
        whole = shapely.get_coordinates(rays)[1::2][ray_ix[of]] - start
        share = np.sum((points - start) * whole, axis=1) / np.sum(whole * whole, axis=1)
        metres = share * 2.0 * HALF_LINE_M
        is_own = (self._link[road_ix[of]] == link[ray_ix[of]]) & (metres < OWN_ROAD_M)
        np.minimum.at(free, ray_ix[of][~is_own], metres[~is_own])
        return free


def _across(graph: Graph, edge: I32, at_m: F64) -> tuple[F64, F64, F64, F64]:
    """Give places of gates, and the step in degrees that is one metre to the right of the travel there."""
    road, against = edge >> 1, (edge & 1) == 1
    length = graph.road_length_m[road]
    along = np.where(against, length - at_m, at_m)
    lon, lat = place(graph, road, along)
    behind, ahead = np.clip(along - 0.5, 0.0, length), np.clip(along + 0.5, 0.0, length)
    first, second = place(graph, road, behind), place(graph, road, ahead)
    bearing = np.empty(len(edge))
    bearings_kernel(first[0], first[1], second[0], second[1], bearing)
    right = np.radians(bearing + np.where(against, 270.0, 90.0))
    scale = np.array([metres_per_degree(float(x)) for x in lat]).reshape(-1, 2)
    return lon, lat, np.sin(right) / scale[:, 0], np.cos(right) / scale[:, 1]


def _lines(neighbours: _Neighbours, graph: Graph, arms: Arms, edge: I32, edge_at: F64) -> F64:
    """Lay the lines of all gates of one kind."""
    out = np.full((len(edge), 4), np.nan)
    every = np.flatnonzero(edge >= 0)
    for rows in np.split(every, range(GATES_AT_ONCE, len(every), GATES_AT_ONCE)):
        lon, lat, step_lon, step_lat = _across(graph, edge[rows], edge_at[edge[rows]])
        for side, sign in ((0, -1.0), (2, 1.0)):
            # Look twice as far as a line may reach: the line goes halfway to what is met.
            far = 2.0 * HALF_LINE_M * sign
            east = neighbours.east(lon)
            ends = np.stack([east + far * step_lon, lat + far * step_lat], axis=1)
            rays = shapely.linestrings(np.stack([np.stack([east, lat], axis=1), ends], axis=1))
            free_m = neighbours.free_m(np.asarray(rays, np.object_), arms.link[rows])
            reach = 0.5 * free_m * sign
            out[rows, side], out[rows, side + 1] = lon + reach * step_lon, lat + reach * step_lat
    out[:, 0::2] = (out[:, 0::2] + 180.0) % 360.0 - 180.0
    return np.round(out, 7)
