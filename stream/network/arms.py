"""Arms and links: where each link leaves a junction, in which directions it is open, and how it lies.

Guarantee: every link has an arm at each end that is a junction; the arms of a junction are numbered
clockwise by bearing from north, so a number means the same as long as the roads there do.
"""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from stream.config import NetworkKeys
from stream.network.graph import Graph, bearings_kernel, place
from stream.network.junctions import Junctions
from stream.network.model import F32, F64, I8, I32, I64, NONE


@dataclass(frozen=True)
class Links:
    """L links, each a run of roads; they start at a junction unless both ends are dead.

    Attributes
    ----------
    start : int32[L + 1]; road : int32; against : int8    runs as in `graph.Chains`
    node_from, node_to : int32[L]
    length_m : float64[L]
    """

    start: I32
    road: I32
    against: I8
    node_from: I32
    node_to: I32
    length_m: F64

    @cached_property
    def _pairs(self) -> tuple[list[int], list[tuple[int, int]], list[tuple[int, int]]]:
        roads, turned = self.road.tolist(), self.against.tolist()
        there = list(zip(roads, turned, strict=True))
        return self.start.tolist(), there, [(road, 1 - against) for road, against in there]

    def run(self, link: int, from_end: bool) -> list[tuple[int, int]]:
        """Give a link's (road, against) pairs in order of travel from its start, or from its end."""
        start, there, back = self._pairs
        first, last = start[link], start[link + 1]
        return back[first:last][::-1] if from_end else there[first:last]


@dataclass(frozen=True)
class Arms:
    """A arms, in the order of their junctions and clockwise within one.

    Attributes
    ----------
    junction : int32[A]
    number : int32[A]             0.. within the junction
    link : int32[A]; at_end : bool[A]   the link, and whether the arm is at its end
    mouth : int32[A]              graph node
    out_edge : int32[A]           edge that leaves the junction at the mouth; its partner comes in
    main_road : int32[A]          road that holds most of the arm's first metres: its class and limit
    bearing_deg : float64[A]      away from the junction
    is_inbound, is_outbound : bool[A]
    in_kmh, out_kmh : float32[A]  cruise speed by limit or class default
    has_in_limit, has_out_limit : bool[A]
    way_id : int64[A]
    link_arm_from, link_arm_to : int32[L]   arms at the links' ends, -1 where dead
    """

    junction: I32
    number: I32
    link: I32
    at_end: NDArray[np.bool_]
    mouth: I32
    out_edge: I32
    main_road: I32
    bearing_deg: F64
    is_inbound: NDArray[np.bool_]
    is_outbound: NDArray[np.bool_]
    in_kmh: F32
    out_kmh: F32
    has_in_limit: NDArray[np.bool_]
    has_out_limit: NDArray[np.bool_]
    way_id: I64
    link_arm_from: I32
    link_arm_to: I32

    def first(self, n_junctions: int) -> I64:
        """Give the bounds of each junction's arms: first[j] .. first[j + 1]."""
        return np.searchsorted(self.junction, np.arange(n_junctions + 1))


def build_links(junctions: Junctions) -> Links:
    """Take the chains outside junctions as links, turned so that a dead end is at their end."""
    chains = junctions.chains
    starts, roads, against, ends, lengths = [0], [], [], [], []
    for c in np.flatnonzero(junctions.chain_junction == NONE).tolist():
        span = slice(chains.start[c], chains.start[c + 1])
        road, turned = chains.item[span], chains.against[span]
        a, b = int(junctions.chain_from[c]), int(junctions.chain_to[c])
        if junctions.node_junction[a] == NONE and junctions.node_junction[b] != NONE:
            road, turned, a, b = road[::-1], 1 - turned[::-1], b, a
        roads.append(road)
        against.append(turned)
        starts.append(starts[-1] + len(road))
        ends.append((a, b))
        lengths.append(junctions.chain_length_m[c])
    none = [np.empty(0, np.int32)]
    return Links(
        np.array(starts, np.int32),
        np.concatenate(roads or none).astype(np.int32),
        np.concatenate(against or none).astype(np.int8),
        np.array([e[0] for e in ends], np.int32),
        np.array([e[1] for e in ends], np.int32),
        np.array(lengths, np.float64),
    )


def point_along(links: Links, graph: Graph, link: int, from_end: bool, at_m: float) -> tuple[int, float]:
    """Give the road, and the chainage along its drawing, at a distance from an end of a link.

    A distance beyond the link gives its other end.
    """
    left = at_m
    run = links.run(link, from_end)
    for road, against in run:
        length = float(graph.road_length_m[road])
        if left < length or road == run[-1][0]:
            left = min(left, length)
            return road, length - left if against else left
        left -= length
    raise ValueError(f"link {link} has no roads")


def _main_road(graph: Graph, run: list[tuple[int, int]], look_m: float) -> tuple[int, int]:
    """Give the (road, against) of a run that holds the most of its first metres."""
    best, most, at = run[0], -1.0, 0.0
    for pair in run:
        length = float(graph.road_length_m[pair[0]])
        share = min(length, look_m - at)
        if share > most:
            best, most = pair, share
        at += length
        if at >= look_m:
            break
    return best


def _bearings(graph: Graph, links: Links, keys: NetworkKeys) -> F64:
    """Give the bearings of both ends of all links (rows 2 * link + at_end), away from the junction."""
    ends = [(link, from_end) for link in range(len(links.length_m)) for from_end in (False, True)]
    lon_lat: list[F64] = []
    for reach in (keys.bearing_from_m, keys.bearing_to_m):
        found = [
            point_along(links, graph, link, from_end, _within(reach, keys, float(links.length_m[link])))
            for link, from_end in ends
        ]
        roads = np.array([f[0] for f in found], np.int32)
        lon_lat.extend(place(graph, roads, np.array([f[1] for f in found], np.float64)))
    bearing = np.empty(len(ends))
    bearings_kernel(lon_lat[0], lon_lat[1], lon_lat[2], lon_lat[3], bearing)
    return bearing


def _within(reach_m: float, keys: NetworkKeys, length_m: float) -> float:
    """Shrink a bearing's distances on a short link: the far one to the link's end, the near one to 0."""
    if reach_m == keys.bearing_to_m:
        return min(reach_m, length_m)
    return reach_m if reach_m < 0.5 * length_m else 0.0


def _cruise(graph: Graph, edge: int, default_kmh: float) -> tuple[float, bool]:
    limit = float(graph.edge_limit_kmh[edge])
    return (default_kmh, False) if limit != limit else (limit, True)


def default_kmh(keys: NetworkKeys, name: str) -> float:
    """Give the cruise speed of a class where a road has no usable limit."""
    return keys.default_kmh.get(name, keys.default_kmh["other"])


def build_arms(graph: Graph, junctions: Junctions, links: Links, keys: NetworkKeys) -> Arms:
    """Set an arm at each end of a link that is a junction.

    Source: DESIGN section 4: bearing along the arm from 5 m to 30 m beyond its mouth.
    """
    bearing = _bearings(graph, links, keys)
    rows = []
    for link in range(len(links.length_m)):
        for at_end in (False, True):
            mouth = int(links.node_to[link] if at_end else links.node_from[link])
            junction = int(junctions.node_junction[mouth])
            if junction == NONE:
                continue
            road, against = links.run(link, at_end)[0]
            way = int(graph.road_way_last[road] if against else graph.road_way_first[road])
            angle = float(bearing[2 * link + at_end])
            node = int(graph.node_id[mouth])
            rows.append(
                (junction, round(angle, 6), way, node, 2 * road + against, link, at_end, mouth, angle)
            )
    rows.sort(key=lambda row: row[:5])
    column = list(zip(*rows, strict=True)) if rows else [()] * 9
    junction_of = np.array(column[0], np.int32)
    link_of, at_end_of = np.array(column[5], np.int32), np.array(column[6], np.bool_)
    first = np.searchsorted(junction_of, junction_of)
    out_edge = np.array(column[4], np.int32)
    speeds = [
        _speeds(graph, links, int(link), bool(end), keys)
        for link, end in zip(link_of, at_end_of, strict=True)
    ]
    arm_at = np.full((len(links.length_m), 2), NONE, np.int32)
    arm_at[link_of, at_end_of.astype(np.int64)] = np.arange(len(rows))
    return Arms(
        junction_of,
        (np.arange(len(rows)) - first).astype(np.int32),
        link_of,
        at_end_of,
        np.array(column[7], np.int32),
        out_edge,
        np.array([s[0] for s in speeds], np.int32),
        np.array(column[8], np.float64),
        graph.edge_open[out_edge ^ 1] == 1,
        graph.edge_open[out_edge] == 1,
        np.array([s[1] for s in speeds], np.float32),
        np.array([s[3] for s in speeds], np.float32),
        np.array([s[2] for s in speeds], np.bool_),
        np.array([s[4] for s in speeds], np.bool_),
        np.array(column[2], np.int64),
        arm_at[:, 0].copy(),
        arm_at[:, 1].copy(),
    )


def _speeds(
    graph: Graph, links: Links, link: int, at_end: bool, keys: NetworkKeys
) -> tuple[int, float, bool, float, bool]:
    """Give an arm's main road, then cruise speed and whether it is a limit, inbound and outbound."""
    road, against = _main_road(graph, links.run(link, at_end), keys.bearing_to_m)
    default = default_kmh(keys, keys.classes[graph.road_class[road]])
    outbound = 2 * road + against
    return (road, *_cruise(graph, outbound ^ 1, default), *_cruise(graph, outbound, default))
