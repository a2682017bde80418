"""Graph nodes into junctions, and the chains of roads between them into links.

Guarantee: each road lies either inside one junction or on exactly one link; nodes joined by less than
`cluster_m` are one junction unless that would grow past `cluster_max_m`; a ring is one junction with
what lies within `cluster_m` of it, two rings never melt into one. The result depends on ids and places,
not on the order of the file.
"""

from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stream.config import NetworkKeys
from stream.geodesy import offset_m
from stream.network import raw
from stream.network.graph import Chains, Graph, join
from stream.network.model import I32, I64, NONE

KINDS = ("node", "cluster", "roundabout", "circular", "mini_roundabout")


@dataclass(frozen=True)
class Junctions:
    """J junctions and C chains of roads between them.

    Attributes
    ----------
    node_junction : int32[N]      junction of each graph node, -1 along links and at dead ends
    junction_id : int64[J]        smallest id of its meeting nodes; ascending
    nodes : list of int64 arrays  graph node indices where roads meet, by junction, in order of id
    kind : list of str            one of KINDS
    chain_junction : int32[C]     junction a chain lies inside, -1 for a link
    chain_from, chain_to : int32[C]   graph nodes at its ends
    chain_length_m : float64[C]
    report : dict                 counts
    """

    node_junction: I32
    junction_id: I64
    nodes: list[I64]
    kind: list[str]
    chains: Chains
    chain_junction: I32
    chain_from: I32
    chain_to: I32
    chain_length_m: NDArray[np.float64]
    report: dict[str, int]


class _Groups:
    """Sets of nodes that grow by joining, each with its widest distance kept below a limit."""

    def __init__(self, graph: Graph) -> None:
        self._lon, self._lat = graph.node_lon_e7.tolist(), graph.node_lat_e7.tolist()
        self._of = list(range(len(self._lon)))
        self._members: dict[int, list[int]] = {}
        self.ring_width_m: dict[int, float] = {}

    def find(self, node: int) -> int:
        """Give the group of a node: the index of one of its members."""
        while self._of[node] != node:
            self._of[node] = self._of[self._of[node]]
            node = self._of[node]
        return node

    def members(self, group: int) -> list[int]:
        """Give the nodes of a group."""
        return self._members.get(group, [group])

    def distance_m(self, a: int, b: int) -> float:
        """Give the distance of two nodes."""
        east, north = offset_m(self._lon[a], self._lat[a], self._lon[b], self._lat[b])
        return float((east * east + north * north) ** 0.5)

    def width_m(self, nodes: list[int], others: list[int]) -> float:
        """Give the greatest distance between a node of one list and one of the other."""
        return max(self.distance_m(a, b) for a in nodes for b in others)

    def merge(self, a: int, b: int) -> int:
        """Join two groups whatever their width; give the group that results."""
        a, b = self.find(a), self.find(b)
        if a == b:
            return a
        if len(self.members(a)) < len(self.members(b)):
            a, b = b, a
        self._members[a] = self.members(a) + self.members(b)
        self._members.pop(b, None)
        self._of[b] = a
        if b in self.ring_width_m:
            self.ring_width_m[a] = self.ring_width_m.pop(b)
        return a

    def try_merge(self, a: int, b: int, max_m: float, beside_ring_m: float) -> bool:
        """Join two groups if neither limit is broken; tell whether they are one now."""
        a, b = self.find(a), self.find(b)
        if a == b:
            return True
        ring_a, ring_b = self.ring_width_m.get(a), self.ring_width_m.get(b)
        if ring_a is not None and ring_b is not None:
            return False
        ring = ring_a if ring_a is not None else ring_b
        limit = max_m if ring is None else max(max_m, ring + 2 * beside_ring_m)
        if self.width_m(self.members(a), self.members(b)) > limit:
            return False
        self.merge(a, b)
        return True


def _rings(graph: Graph) -> Iterator[tuple[NDArray[np.int64], int]]:
    """Give connected sets of ring roads and whether they are a roundabout or circular."""
    rows = np.flatnonzero(graph.road_ring)
    parent: dict[int, int] = {}

    def find(node: int) -> int:
        parent.setdefault(node, node)
        while parent[node] != node:
            parent[node] = parent[parent[node]]
            node = parent[node]
        return node

    for a, b in zip(graph.road_from[rows].tolist(), graph.road_to[rows].tolist(), strict=True):
        parent[find(a)] = find(b)
    groups: dict[int, list[int]] = {}
    for road in rows.tolist():
        groups.setdefault(find(int(graph.road_from[road])), []).append(road)
    for roads in groups.values():
        found = np.array(roads, np.int64)
        yield found, int(graph.road_ring[found].min())


def _join_rings(graph: Graph, groups: _Groups, keys: NetworkKeys, report: Counter[str]) -> dict[int, int]:
    """Make each ring that is not too wide one group; give a node of each ring and the ring's kind."""
    kinds: dict[int, int] = {}
    for roads, kind in _rings(graph):
        ends = np.unique(np.concatenate([graph.road_from[roads], graph.road_to[roads]])).tolist()
        points = np.concatenate([np.arange(graph.point_start[r], graph.point_start[r + 1]) for r in roads])
        width = _extent_m(graph, points)
        if not any(graph.node_degree[n] >= 3 for n in ends):
            report["ring_without_arms"] += 1
            continue
        if width > keys.roundabout_max_m:
            report["ring_too_wide"] += 1
            continue
        if len(ends) > 1 and not _is_closed(graph, roads):
            report["ring_not_closed"] += 1
        for node in ends[1:]:
            groups.merge(ends[0], node)
        group = groups.find(ends[0])
        groups.ring_width_m[group] = width
        kinds[ends[0]] = kind
    return kinds


def _is_closed(graph: Graph, roads: NDArray[np.int64]) -> bool:
    """Tell whether each node of a set of ring roads has at least two ends of them."""
    ends = np.concatenate([graph.road_from[roads], graph.road_to[roads]])
    return bool(np.unique(ends, return_counts=True)[1].min() >= 2)


def _extent_m(graph: Graph, points: NDArray[np.int64]) -> float:
    """Give the greatest distance between shape points (of a ring; a few dozen)."""
    lon, lat = graph.point_lon_e7[points].tolist(), graph.point_lat_e7[points].tolist()
    widest = 0.0
    for i in range(len(lon)):
        for j in range(i):
            east, north = offset_m(lon[i], lat[i], lon[j], lat[j])
            widest = max(widest, (east * east + north * north) ** 0.5)
    return float(widest)


def _cluster(
    graph: Graph,
    groups: _Groups,
    ends: tuple[I32, I32],
    length_m: NDArray[np.float64],
    keys: NetworkKeys,
    report: Counter[str],
) -> None:
    """Join meeting nodes over short chains, the shortest first."""
    meets = graph.node_degree >= 3
    chain_from, chain_to = ends
    short = np.flatnonzero(
        (length_m < keys.cluster_m) & (chain_from != chain_to) & meets[chain_from] & meets[chain_to]
    )
    ids = graph.node_id
    low = np.minimum(ids[chain_from[short]], ids[chain_to[short]])
    high = np.maximum(ids[chain_from[short]], ids[chain_to[short]])
    for c in short[np.lexsort((high, low, np.round(length_m[short], 3)))].tolist():
        a, b = int(chain_from[c]), int(chain_to[c])
        if not groups.try_merge(a, b, keys.cluster_max_m, keys.cluster_m):
            report["cluster_at_its_limit"] += 1


def _link_chains(graph: Graph, ring_nodes: NDArray[np.bool_]) -> Chains:
    """Join roads over nodes of degree two, but never through a ring's node."""
    joinable = (graph.node_degree == 2) & ~ring_nodes
    return join(graph.road_from, graph.road_to, joinable, len(graph.node_id))


def _chain_ends(graph: Graph, chains: Chains) -> tuple[I32, I32, NDArray[np.float64]]:
    """Give the graph nodes at the ends of chains, and their lengths."""
    lead, trail = chains.start[:-1], chains.start[1:] - 1
    first, last = chains.item[lead], chains.item[trail]
    tail = np.where(chains.against[lead] == 1, graph.road_to[first], graph.road_from[first])
    head = np.where(chains.against[trail] == 1, graph.road_from[last], graph.road_to[last])
    length = np.add.reduceat(graph.road_length_m[chains.item], lead)
    return tail.astype(np.int32), head.astype(np.int32), length


def _kind(graph: Graph, members: list[int], ring: int | None) -> str:
    if ring is not None:
        return "roundabout" if ring == raw.RING_ROUNDABOUT else "circular"
    if any(graph.node_sign[n] & raw.MINI_ROUNDABOUT for n in members):
        return "mini_roundabout"
    return "node" if len(members) == 1 else "cluster"


def build_junctions(graph: Graph, keys: NetworkKeys) -> Junctions:
    """Cluster the nodes where roads meet, and sort all roads into links and insides.

    Source: DESIGN section 4; METHODS section 2.
    """
    report: Counter[str] = Counter()
    groups = _Groups(graph)
    ring_kind = _join_rings(graph, groups, keys, report)
    ring_group = {groups.find(node) for node in ring_kind}
    on_ring = np.array([groups.find(n) in ring_group for n in range(len(graph.node_id))], np.bool_)
    chains = _link_chains(graph, on_ring)
    chain_from, chain_to, length_m = _chain_ends(graph, chains)
    _cluster(graph, groups, (chain_from, chain_to), length_m, keys, report)
    meeting = np.flatnonzero((graph.node_degree >= 3) | on_ring).tolist()
    by_group: dict[int, list[int]] = {}
    for node in meeting:
        by_group.setdefault(groups.find(node), []).append(node)
    kind_of = {groups.find(node): kind for node, kind in ring_kind.items()}
    ids = graph.node_id
    found = []
    for group, members in by_group.items():
        core = sorted((n for n in members if graph.node_degree[n] >= 3), key=lambda n: int(ids[n]))
        found.append((int(ids[core[0]]), core, members, _kind(graph, core, kind_of.get(group))))
    found.sort(key=lambda entry: entry[0])
    node_junction = np.full(len(ids), NONE, np.int32)
    for ix, (_, _, members, _) in enumerate(found):
        node_junction[members] = ix
    is_ring = (graph.road_ring[chains.item[chains.start[:-1]]] > 0) & on_ring[chain_from]
    at_from, at_to = node_junction[chain_from], node_junction[chain_to]
    inside = (at_from >= 0) & (at_from == at_to) & ((length_m <= keys.cluster_max_m) | is_ring)
    chain_junction = np.where(inside, at_from, NONE).astype(np.int32)
    for c in np.flatnonzero(chain_junction >= 0).tolist():
        _take_inside(graph, chains, c, int(chain_junction[c]), node_junction)
    report.update(Counter(kind for *_, kind in found))
    return Junctions(
        node_junction,
        np.array([entry[0] for entry in found], np.int64),
        [np.array(entry[1], np.int64) for entry in found],
        [entry[3] for entry in found],
        chains,
        chain_junction,
        chain_from,
        chain_to,
        length_m,
        dict(sorted(report.items())),
    )


def _take_inside(graph: Graph, chains: Chains, chain: int, junction: int, node_junction: I32) -> None:
    """Mark the nodes along an inside chain as of its junction."""
    for road in chains.item[chains.start[chain] : chains.start[chain + 1]]:
        node_junction[graph.road_from[road]] = junction
        node_junction[graph.road_to[road]] = junction
