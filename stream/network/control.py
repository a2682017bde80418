"""What governs a junction, and on which side of the road people drive.

A sign counts for a junction where it stands on one of its nodes or inside it, or up an inbound arm
within `signal_reach_m`: by its direction key where it has one, else for the nearer junction.
Source: OSM wiki pages of the keys, METHODS.md section 2.
"""

import math
from collections import Counter
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from stream.config import NetworkKeys
from stream.network import raw
from stream.network.arms import Arms, Links
from stream.network.graph import Graph
from stream.network.junctions import Junctions
from stream.network.model import NONE, U8

Side = Literal["right", "left"]


def _up_arm(graph: Graph, links: Links, arms: Arms, arm: int, reach_m: float) -> int:
    """Gather the signs up an inbound arm that govern its junction."""
    found = 0
    link = int(arms.link[arm])
    other = arms.link_arm_from[link] if arms.at_end[arm] else arms.link_arm_to[link]
    nearer_m = math.inf if other == NONE else 0.5 * float(links.length_m[link])
    at_m = 0.0
    for road, against in links.run(link, bool(arms.at_end[arm])):
        if at_m > reach_m or not graph.edge_open[(2 * road + against) ^ 1]:
            break
        toward = raw.GOVERNS_ALONG if against else raw.GOVERNS_AGAINST
        first, last = int(graph.point_start[road]), int(graph.point_start[road + 1])
        for p in np.flatnonzero(graph.point_sign[first:last]) + first:
            sign = int(graph.point_sign[p])
            gone = graph.point_at_m[last - 1] - graph.point_at_m[p] if against else graph.point_at_m[p]
            from_mouth = at_m + float(gone)
            directed = sign & (raw.GOVERNS_ALONG | raw.GOVERNS_AGAINST)
            is_ours = directed & toward if directed else from_mouth <= nearer_m
            if from_mouth <= reach_m and is_ours:
                found |= sign
        at_m += float(graph.road_length_m[road])
    return found


def _inside(graph: Graph, junctions: Junctions) -> NDArray[np.int64]:
    """Gather the signs on each junction's nodes and on the roads inside it."""
    found = np.zeros(len(junctions.kind), np.int64)
    for node in np.flatnonzero((junctions.node_junction >= 0) & (graph.node_sign > 0)):
        found[junctions.node_junction[node]] |= int(graph.node_sign[node])
    chains = junctions.chains
    for c in np.flatnonzero(junctions.chain_junction >= 0):
        for road in chains.item[chains.start[c] : chains.start[c + 1]]:
            signs: U8 = graph.point_sign[graph.point_start[road] : graph.point_start[road + 1]]
            found[junctions.chain_junction[c]] |= int(np.bitwise_or.reduce(signs))
    return found


def _name(sign: int, kind: str) -> str:
    if sign & raw.SIGNALS:
        return "signals"
    if kind in ("roundabout", "mini_roundabout"):
        return "roundabout"
    if sign & raw.STOP:
        return "stop"
    if sign & raw.GIVE_WAY:
        return "give_way"
    return "crossing_signals" if sign & raw.CROSSING_SIGNALS else "none"


def read_controls(
    graph: Graph, junctions: Junctions, links: Links, arms: Arms, keys: NetworkKeys
) -> list[str]:
    """Name each junction's control: signals, roundabout, stop, give_way, crossing_signals or none."""
    signs = _inside(graph, junctions)
    road_sign = np.bitwise_or.reduceat(graph.point_sign, graph.point_start[:-1])
    link_sign = np.zeros(len(links.length_m), np.uint8)
    np.bitwise_or.at(
        link_sign, np.repeat(np.arange(len(link_sign)), np.diff(links.start)), road_sign[links.road]
    )
    for arm in np.flatnonzero(arms.is_inbound & (link_sign[arms.link] > 0)).tolist():
        signs[arms.junction[arm]] |= _up_arm(graph, links, arms, arm, keys.signal_reach_m)
    return [_name(int(sign), kind) for sign, kind in zip(signs, junctions.kind, strict=True)]


def _ring_is_clockwise(graph: Graph, junctions: Junctions, junction: int) -> bool | None:
    """Tell which way a roundabout is driven; None where its roads don't say."""
    chains = junctions.chains
    twice_area = 0.0
    for c in np.flatnonzero(junctions.chain_junction == junction):
        for road in chains.item[chains.start[c] : chains.start[c + 1]]:
            one_way = int(graph.edge_open[2 * road]) - int(graph.edge_open[2 * road + 1])
            if graph.road_ring[road] != raw.RING_ROUNDABOUT or one_way == 0:
                continue
            span = slice(graph.point_start[road], graph.point_start[road + 1])
            node = junctions.nodes[junction][0]
            x = (graph.point_lon_e7[span] - int(graph.node_lon_e7[node])).astype(np.float64)
            y = (graph.point_lat_e7[span] - int(graph.node_lat_e7[node])).astype(np.float64)
            twice_area += one_way * float(np.sum(x[:-1] * y[1:] - x[1:] * y[:-1]))
    return None if twice_area == 0.0 else twice_area < 0.0


def infer_side(graph: Graph, junctions: Junctions) -> tuple[Side, dict[str, int]]:
    """Tell on which side people drive: as most rings are driven, else right.

    Mini-roundabouts speak by their direction only where no ring does: theirs is taken as anticlockwise
    when it is not given. Also returns the counts behind the answer.
    """
    seen: Counter[str] = Counter()
    for junction, kind in enumerate(junctions.kind):
        if kind == "roundabout":
            clockwise = _ring_is_clockwise(graph, junctions, junction)
            if clockwise is not None:
                seen["clockwise_rings" if clockwise else "anticlockwise_rings"] += 1
    mini = graph.node_sign[(graph.node_sign & raw.MINI_ROUNDABOUT > 0) & (junctions.node_junction != NONE)]
    n_clockwise = int(np.count_nonzero(mini & raw.MINI_CLOCKWISE))
    if len(mini):
        seen["clockwise_minis"], seen["anticlockwise_minis"] = n_clockwise, len(mini) - n_clockwise
    balance = seen["clockwise_rings"] - seen["anticlockwise_rings"]
    if balance == 0:
        balance = seen["clockwise_minis"] - seen["anticlockwise_minis"]
    return "left" if balance > 0 else "right", {k: n for k, n in sorted(seen.items()) if n}
