"""Road ways into a graph: roads split where roads meet or change, and edges with their successors.

Guarantee: every metre of every way lies on exactly one road; a node of degree two stands between two
roads only where class, limit, direction or ring change, or where a turn restriction has its node.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stream.geodesy import bearing_deg, metres_per_degree, offset_m, turn_deg
from stream.kernel import kernel
from stream.network import raw
from stream.network.model import F32, F64, I8, I32, I64, NONE, U8

TURN_LOOK_M = 15.0  # a turn at a node is measured over this much of either road
SHORTEST_ROAD_M = 0.01  # the grid of coordinates; two nodes at one place still make a road


@dataclass(frozen=True)
class Graph:
    """Roads between graph nodes; names as in `model.Streets`, and what the builder needs on top.

    Attributes
    ----------
    node_degree : int32[N]        road ends at the node
    road_way_first, road_way_last : int64[R]   way ids at the drawn start and end of a road
    road_ring : uint8[R]          raw.RING_*
    point_at_m : float64[P]       chainage of each shape point along the drawing
    point_sign : uint8[P]         sign bits, directions relative to the road's drawing; graph nodes at
                                  either end of a road carry theirs without direction
    edge_limit_kmh : float32[2R]  NaN where there is no usable limit
    """

    node_id: I64
    node_lon_e7: I32
    node_lat_e7: I32
    node_degree: I32
    node_sign: U8
    road_from: I32
    road_to: I32
    road_length_m: F64
    road_class: U8
    road_ring: U8
    road_way_first: I64
    road_way_last: I64
    point_start: I32
    point_lon_e7: I32
    point_lat_e7: I32
    point_at_m: F64
    point_sign: U8
    edge_open: U8
    edge_limit_kmh: F32


@dataclass(frozen=True)
class Chains:
    """Runs of items joined end to end; chain c holds item[start[c] .. start[c + 1]] in order of travel.

    `against` is 1 where an item is passed against its drawing.
    """

    start: I32
    item: I32
    against: I8


@dataclass(frozen=True)
class _Pieces:
    """Ways cut at breaks: piece p runs over references first[p] .. last[p], both included."""

    first: I64
    last: I64
    way: I32
    tail: I32
    head: I32


@kernel
def chainage_kernel(start: I32, lon_e7: I32, lat_e7: I32, at_out: F64) -> None:
    """Write the chainage, in metres, of each shape point along its road."""
    for r in range(start.shape[0] - 1):
        at = 0.0
        for p in range(start[r], start[r + 1]):
            if p > start[r]:
                dx, dy = offset_m(int(lon_e7[p - 1]), int(lat_e7[p - 1]), int(lon_e7[p]), int(lat_e7[p]))
                at += math.sqrt(dx * dx + dy * dy)
            at_out[p] = at


@kernel
def place_kernel(
    start: I32, lon_e7: I32, lat_e7: I32, point_at: F64, road: I32, at_m: F64, lon_out: F64, lat_out: F64
) -> None:
    """Write longitude and latitude, in degrees, of points given by road and chainage along its drawing.

    A chainage beyond either end of a road gives that end.
    """
    for i in range(road.shape[0]):
        p = start[road[i]]
        last = start[road[i] + 1] - 2
        while p < last and point_at[p + 1] < at_m[i]:
            p += 1
        step = point_at[p + 1] - point_at[p]
        share = (at_m[i] - point_at[p]) / step if step > 0.0 else 0.0
        share = min(max(share, 0.0), 1.0)
        d_lon = np.int64(lon_e7[p + 1]) - lon_e7[p]
        if d_lon > 1_800_000_000:
            d_lon -= 3_600_000_000
        elif d_lon < -1_800_000_000:
            d_lon += 3_600_000_000
        lon = (lon_e7[p] + share * d_lon) * 1e-7
        if lon >= 180.0:
            lon -= 360.0
        elif lon < -180.0:
            lon += 360.0
        lon_out[i] = lon
        lat_out[i] = (lat_e7[p] + share * (lat_e7[p + 1] - lat_e7[p])) * 1e-7


@kernel
def bearings_kernel(lon1: F64, lat1: F64, lon2: F64, lat2: F64, bearing_out: F64) -> None:
    """Write the bearings, in degrees, from points 1 to points 2 (degrees)."""
    for i in range(lon1.shape[0]):
        k_lon, k_lat = metres_per_degree(0.5 * (lat1[i] + lat2[i]))
        d_lon = lon2[i] - lon1[i]
        if d_lon >= 180.0:
            d_lon -= 360.0
        elif d_lon < -180.0:
            d_lon += 360.0
        bearing_out[i] = bearing_deg(d_lon * k_lon, (lat2[i] - lat1[i]) * k_lat)


@kernel
def turns_kernel(bearing_in: F64, bearing_out: F64, turn_out: F32) -> None:
    """Write turn angles from bearings of arrival and of departure."""
    for i in range(bearing_in.shape[0]):
        turn_out[i] = turn_deg(bearing_in[i], bearing_out[i])


def place(graph: Graph, road: I32, at_m: F64) -> tuple[F64, F64]:
    """Give longitudes and latitudes, in degrees, of points by road and chainage along the drawing."""
    lon, lat = np.empty(len(road)), np.empty(len(road))
    shape = (graph.point_start, graph.point_lon_e7, graph.point_lat_e7, graph.point_at_m)
    place_kernel(*shape, road.astype(np.int32), at_m.astype(np.float64), lon, lat)
    return lon, lat


def join(tail: I32, head: I32, joinable: NDArray[np.bool_], n_nodes: int) -> Chains:
    """Join items end to end over joinable nodes.

    Parameters
    ----------
    tail, head
        Nodes at the drawn start and end of each item.
    joinable
        By node; True only where exactly two item ends meet.
    n_nodes
        How many nodes there are.

    Returns
    -------
    Chains in the order of their lowest item, which is passed along its drawing. A closed run of
    joinable nodes begins at its lowest item.
    """
    n = len(tail)
    at_node = np.full((n_nodes, 2), NONE, np.int64)
    ends = np.concatenate([tail, head])
    end_of = np.concatenate([2 * np.arange(n), 2 * np.arange(n) + 1])
    rows = joinable[ends]
    order = np.argsort(ends[rows], kind="stable")
    nodes, codes = ends[rows][order], end_of[rows][order]
    at_node[nodes[0::2], 0], at_node[nodes[1::2], 1] = codes[0::2], codes[1::2]
    partner = np.full(2 * n, NONE, np.int64)
    first, second = codes[0::2], codes[1::2]
    partner[first], partner[second] = second, first
    return _walk(partner.tolist(), n)


def _walk(partner: Sequence[int], n: int) -> Chains:
    """Follow partners (item ends that meet) from each item not yet taken, back and then on."""
    taken = bytearray(n)
    start, item, against = [0], [], []
    for i in range(n):
        if taken[i]:
            continue
        back: list[int] = []  # ends through which items before i are left
        end = partner[2 * i]
        while end != NONE and end >> 1 != i:
            back.append(end)
            end = partner[end ^ 1]
        is_closed = end != NONE
        ahead = [2 * i + 1]
        if is_closed:
            back = []
        end = partner[2 * i + 1]
        while end != NONE and end >> 1 != i:
            ahead.append(end ^ 1)
            end = partner[end ^ 1]
        run = [*reversed(back), *ahead]
        for leaving in run:
            taken[leaving >> 1] = 1
            item.append(leaving >> 1)
            against.append(1 - (leaving & 1))
        start.append(len(item))
    return Chains(np.array(start, np.int32), np.array(item, np.int32), np.array(against, np.int8))


def _split(roads: raw.RawRoads, degree: I64, forced: NDArray[np.bool_]) -> _Pieces:
    """Cut ways at their ends, at nodes of a degree other than two, and at forced nodes."""
    ref, start = roads.ref_node, roads.ref_start
    breaks = (degree[ref] != 2) | forced[ref]
    breaks[start[:-1]] = True
    breaks[start[1:] - 1] = True
    at = np.flatnonzero(breaks)
    way = np.searchsorted(start, at, side="right") - 1
    within = way[:-1] == way[1:]
    first, last = at[:-1][within], at[1:][within]
    return _Pieces(first, last, way[:-1][within].astype(np.int32), ref[first], ref[last])


def _attributes(roads: raw.RawRoads, way: I32) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Number what makes pieces alike, as seen along and against their drawing."""

    def key(opened: U8, one: F32, other: F32) -> NDArray[np.float64]:
        columns = (roads.way_class, roads.way_ring, opened, np.nan_to_num(one), np.nan_to_num(other))
        return np.stack([np.asarray(c)[way].astype(np.float64) for c in columns], axis=1)

    swapped = ((roads.way_open & 1) << 1) | (roads.way_open >> 1)
    along = key(roads.way_open, roads.way_limit_along_kmh, roads.way_limit_against_kmh)
    against = key(swapped.astype(np.uint8), roads.way_limit_against_kmh, roads.way_limit_along_kmh)
    _, number = np.unique(np.concatenate([along, against]), axis=0, return_inverse=True)
    number = number.reshape(-1)
    return number[: len(way)], number[len(way) :]


def _alike(pieces: _Pieces, roads: raw.RawRoads, degree: I64, barred: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Find the nodes over which two pieces can be joined: degree two, and the same road on both sides."""
    along, against = _attributes(roads, pieces.way)
    n_nodes = len(degree)
    # What a driver who leaves the node sees: along the drawing at a tail, against it at a head.
    nodes = np.concatenate([pieces.tail, pieces.head])
    leaving = np.concatenate([along, against])
    arriving = np.concatenate([against, along])
    order = np.argsort(nodes, kind="stable")
    nodes = nodes[order]
    n_ends = np.bincount(nodes, minlength=n_nodes)
    first = np.searchsorted(nodes, np.arange(n_nodes))
    two = np.flatnonzero((n_ends == 2) & (degree == 2) & ~barred)
    same = leaving[order][first[two]] == arriving[order][first[two] + 1]
    out = np.zeros(n_nodes, np.bool_)
    out[two[same]] = True
    return out


def _barred_nodes(roads: raw.RawRoads) -> NDArray[np.bool_]:
    """Find the nodes where roads must stay apart: those of restrictions, and the ends of their via ways."""
    out = np.zeros(len(roads.node_id), np.bool_)
    nodes = [r.via_node_id for r in roads.restrictions if r.via_node_id is not None]
    out[np.isin(roads.node_id, np.array(nodes, np.int64))] = True
    ways = {w for r in roads.restrictions if r.via_way_ids for w in r.via_way_ids}
    rows = np.flatnonzero(np.isin(roads.way_id, np.array(sorted(ways), np.int64)))
    out[roads.ref_node[roads.ref_start[rows]]] = True
    out[roads.ref_node[roads.ref_start[rows + 1] - 1]] = True
    return out


def _swap_signs(sign: U8) -> U8:
    """Turn the two direction bits round."""
    along, against = sign & raw.GOVERNS_ALONG, sign & raw.GOVERNS_AGAINST
    rest = sign & ~np.uint8(raw.GOVERNS_ALONG | raw.GOVERNS_AGAINST)
    return (rest | (along << 1) | (against >> 1)).astype(np.uint8)


def _shape(roads: raw.RawRoads, pieces: _Pieces, chains: Chains) -> tuple[I32, I32, U8]:
    """Lay the shape points of the joined pieces end to end: starts, node of each point, its sign."""
    starts, nodes, signs = [0], [], []
    total = 0
    items, turned = chains.item.tolist(), chains.against.tolist()
    for c in range(len(chains.start) - 1):
        for k in range(chains.start[c], chains.start[c + 1]):
            run = roads.ref_node[pieces.first[items[k]] : pieces.last[items[k]] + 1]
            sign = roads.node_sign[run]
            if turned[k]:
                run, sign = run[::-1], _swap_signs(sign[::-1])
            skip = 1 if k > chains.start[c] else 0
            nodes.append(run[skip:])
            signs.append(sign[skip:])
            total += len(run) - skip
        starts.append(total)
    return np.array(starts, np.int32), np.concatenate(nodes).astype(np.int32), np.concatenate(signs)


def build_graph(roads: raw.RawRoads) -> Graph:
    """Split ways into roads and join what a change of way id alone keeps apart."""
    ends = np.concatenate([roads.ref_start[:-1], roads.ref_start[1:] - 1])
    n_nodes = len(roads.node_id)
    degree = 2 * np.bincount(roads.ref_node, minlength=n_nodes)
    degree -= np.bincount(roads.ref_node[ends], minlength=n_nodes)
    barred = _barred_nodes(roads)
    pieces = _split(roads, degree, barred)
    chains = join(pieces.tail, pieces.head, _alike(pieces, roads, degree, barred), n_nodes)
    start, point_node, point_sign = _shape(roads, pieces, chains)
    lon, lat = roads.node_lon_e7[point_node], roads.node_lat_e7[point_node]
    at = np.empty(len(point_node))
    chainage_kernel(start, lon, lat, at)
    lead, trail = chains.start[:-1], chains.start[1:] - 1
    way = pieces.way[chains.item[lead]]
    turned = chains.against[lead] == 1
    along = np.where(turned, roads.way_limit_against_kmh[way], roads.way_limit_along_kmh[way])
    against = np.where(turned, roads.way_limit_along_kmh[way], roads.way_limit_against_kmh[way])
    opened = roads.way_open[way]
    opened = np.where(turned, ((opened & 1) << 1) | (opened >> 1), opened)
    ends_at = np.concatenate([point_node[start[:-1]], point_node[start[1:] - 1]])
    used, index = np.unique(ends_at, return_inverse=True)
    n = len(way)
    return Graph(
        roads.node_id[used],
        roads.node_lon_e7[used],
        roads.node_lat_e7[used],
        np.bincount(index, minlength=len(used)).astype(np.int32),
        roads.node_sign[used],
        index[:n].astype(np.int32),
        index[n:].astype(np.int32),
        np.maximum(at[start[1:] - 1], SHORTEST_ROAD_M),
        roads.way_class[way],
        roads.way_ring[way],
        roads.way_id[way],
        roads.way_id[pieces.way[chains.item[trail]]],
        start,
        lon,
        lat,
        at,
        point_sign,
        np.stack([opened & 1, opened >> 1], axis=1).reshape(-1).astype(np.uint8),
        np.stack([along, against], axis=1).reshape(-1).astype(np.float32),
    )


def edge_ends(road_from: I32, road_to: I32) -> tuple[I32, I32]:
    """Give the nodes where each edge starts and ends."""
    start = np.stack([road_from, road_to], axis=1).reshape(-1)
    end = np.stack([road_to, road_from], axis=1).reshape(-1)
    return start.astype(np.int32), end.astype(np.int32)


def successors(graph: Graph) -> tuple[I32, I32, F32]:
    """Give for each edge the open edges that start where it ends, ascending, with their turn angles.

    Returns
    -------
    succ_start : int32[2R + 1]; succ_edge : int32[S]; succ_turn_deg : float32[S]
    """
    start, end = edge_ends(graph.road_from, graph.road_to)
    open_edge = np.flatnonzero(graph.edge_open)
    order = open_edge[np.lexsort((open_edge, start[open_edge]))]
    n_out = np.bincount(start[open_edge], minlength=len(graph.node_id))
    first_out = np.concatenate([[0], np.cumsum(n_out)])
    counts = n_out[end]
    succ_start = np.concatenate([[0], np.cumsum(counts)])
    places = np.arange(succ_start[-1]) - np.repeat(succ_start[:-1] - first_out[end], counts)
    succ = order[places].astype(np.int32)
    leaving = _leaving_bearings(graph)
    source = np.repeat(np.arange(len(end)), counts)
    turn = np.empty(len(succ), np.float32)
    turns_kernel((leaving[source ^ 1] + 180.0) % 360.0, leaving[succ], turn)
    turn[succ == (source ^ 1)] = 180.0
    return succ_start.astype(np.int32), succ, turn


def _leaving_bearings(graph: Graph) -> F64:
    """Give the bearing of each edge where it starts, over its first metres."""
    road = np.repeat(np.arange(len(graph.road_from), dtype=np.int32), 2)
    length = graph.road_length_m[road]
    look = np.minimum(TURN_LOOK_M, length)
    is_against = np.arange(len(road)) & 1 == 1
    lon1, lat1 = place(graph, road, np.where(is_against, length, 0.0))
    lon2, lat2 = place(graph, road, np.where(is_against, length - look, look))
    bearing = np.empty(len(road))
    bearings_kernel(lon1, lat1, lon2, lat2, bearing)
    return bearing
