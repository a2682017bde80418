"""Turn restrictions laid onto edges: pairs of edges, and longer runs where they go over ways.

An `only_` restriction becomes the prohibition of every other exit. What can't be laid out without
guessing (members outside the extract, a way that passes through the node) is left out and counted.
"""

from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np

from stream.network.graph import Graph, edge_ends
from stream.network.model import I32, U8
from stream.network.raw import Restriction

Run = tuple[int, ...]
LONGEST_VIA = 50  # roads along the via ways of one restriction


@dataclass(frozen=True)
class Forbidden:
    """Runs of two or more edges that no car may drive in full: always, or at times."""

    always: set[Run] = field(default_factory=set)
    timed: set[Run] = field(default_factory=set)
    report: Counter[str] = field(default_factory=Counter)

    def pairs(self, succ_start: I32, succ_edge: I32) -> U8:
        """Mark the successors that a restriction via one node always forbids."""
        out = np.zeros(len(succ_edge), np.uint8)
        for run in self.always:
            if len(run) == 2:
                span = slice(succ_start[run[0]], succ_start[run[0] + 1])
                out[span] |= succ_edge[span] == run[1]
        return out


class _Layout:
    """Edges by the ways at their ends, for the ways that restrictions name."""

    def __init__(self, graph: Graph, restrictions: list[Restriction]) -> None:
        self.start, self.end = (ends.tolist() for ends in edge_ends(graph.road_from, graph.road_to))
        self.is_open = graph.edge_open.tolist()
        named = {w for r in restrictions for w in (*r.from_way_ids, *r.via_way_ids, *r.to_way_ids)}
        ids = np.array(sorted(named), np.int64)
        self.leaving: dict[int, list[int]] = {}  # way id: edges that start on that way, at a graph node
        for edges, way in ((0, graph.road_way_first), (1, graph.road_way_last)):
            for road in np.flatnonzero(np.isin(way, ids)).tolist():
                self.leaving.setdefault(int(way[road]), []).append(2 * road + edges)
        self.node_ix = {int(n): ix for ix, n in enumerate(graph.node_id.tolist())} if restrictions else {}

    def out_of(self, way: int, node: int) -> list[int]:
        """Give the open edges that leave a node on a way."""
        return [e for e in self.leaving.get(way, ()) if self.start[e] == node and self.is_open[e]]

    def into(self, way: int, node: int) -> list[int]:
        """Give the open edges that reach a node on a way."""
        return [e ^ 1 for e in self.leaving.get(way, ()) if self.start[e] == node and self.is_open[e ^ 1]]

    def ends_of(self, way: int) -> set[int]:
        """Give the graph nodes at which roads of a way end."""
        return {self.start[e] for e in self.leaving.get(way, ())}


def _tos(layout: _Layout, restriction: Restriction, arriving: int, node: int) -> list[int] | None:
    """Give the edges meant by the to-ways for a driver on an arriving edge; None where unclear."""
    found = []
    for way in restriction.to_way_ids:
        edges = layout.out_of(way, node)
        if restriction.is_reversal and arriving ^ 1 in edges:
            edges = [arriving ^ 1]
        elif len(edges) > 1 or edges == [arriving ^ 1]:
            edges = [e for e in edges if e != arriving ^ 1]
            if len(edges) != 1:
                return None
        found.extend(edges)
    return found


def _froms(layout: _Layout, restriction: Restriction, node: int) -> list[int] | None:
    """Give the edges meant by the from-ways at a node; None where a way passes through it."""
    found = []
    for way in restriction.from_way_ids:
        edges = layout.into(way, node)
        is_turning_back = restriction.is_reversal and way in restriction.to_way_ids
        if len(edges) > 1 and not is_turning_back:
            return None
        found.extend(edges)
    return found


def _along_via(layout: _Layout, restriction: Restriction) -> Iterator[tuple[int, Run, int]]:
    """Give (edge of the from-way, edges along the via ways, node where the to-way begins)."""
    via = {e for way in restriction.via_way_ids for e in layout.leaving.get(way, ())}
    via |= {e ^ 1 for e in via}
    goals = {n for way in restriction.to_way_ids for n in layout.ends_of(way)}
    for way in restriction.from_way_ids:
        for node in sorted(layout.ends_of(way)):
            begins = sorted(e for e in via if layout.start[e] == node and layout.is_open[e])
            for arriving in layout.into(way, node):
                for run in _paths(layout, begins, via, goals):
                    yield arriving, run, layout.end[run[-1]]


def _paths(layout: _Layout, begins: list[int], via: set[int], goals: set[int]) -> Iterator[Run]:
    """Give the run along via edges from each beginning to the first goal node, using each road once."""
    for begin in begins:
        run = [begin]
        while layout.end[run[-1]] not in goals and len(run) < LONGEST_VIA:
            node, seen = layout.end[run[-1]], {e >> 1 for e in run}
            ahead = [e for e in via if layout.start[e] == node and layout.is_open[e] and e >> 1 not in seen]
            if len(ahead) != 1:
                break
            run.append(ahead[0])
        if layout.end[run[-1]] in goals:
            yield tuple(run)


def _spread(
    layout: _Layout, restriction: Restriction, run: Run, node: int, exits: list[int]
) -> tuple[list[Run], str]:
    """Give the forbidden runs that begin with `run`, or the reason for leaving the restriction out."""
    tos = _tos(layout, restriction, run[-1], node)
    if tos is None:
        return [], "ambiguous"
    if not tos:
        return [], "members_missing"
    if restriction.is_only:
        tos = [e for e in exits if e not in tos]
    return [(*run, e) for e in tos], ""


def _lay(layout: _Layout, restriction: Restriction, exits: dict[int, list[int]]) -> tuple[list[Run], str]:
    """Lay one restriction onto edges."""
    begun: list[tuple[Run, int]] = []
    if restriction.via_node_id is not None:
        node = layout.node_ix.get(restriction.via_node_id)
        if node is None:
            return [], "members_missing"
        froms = _froms(layout, restriction, node)
        if froms is None:
            return [], "ambiguous"
        begun = [((edge,), node) for edge in froms]
    else:
        begun = [((edge, *run), node) for edge, run, node in _along_via(layout, restriction)]
    if not begun:
        known = all(w in layout.leaving for w in (*restriction.from_way_ids, *restriction.via_way_ids))
        return [], "not_connected" if known else "members_missing"
    laid: list[Run] = []
    reason = ""
    for run, node in begun:
        runs, why = _spread(layout, restriction, run, node, exits.get(node, []))
        laid.extend(runs)
        reason = reason or why
    return laid, "" if laid or not reason else reason


def lay_restrictions(graph: Graph, restrictions: list[Restriction]) -> Forbidden:
    """Lay all restrictions onto edges.

    Source: OSM wiki page of the restriction relation, METHODS.md section 2.
    """
    forbidden = Forbidden()
    layout = _Layout(graph, restrictions)
    via = {n for r in restrictions for w in r.via_way_ids + r.from_way_ids for n in layout.ends_of(w)}
    exits: dict[int, list[int]] = {node: [] for node in via}
    for edge in np.flatnonzero(graph.edge_open).tolist() if restrictions else ():
        if layout.start[edge] in exits:
            exits[layout.start[edge]].append(edge)
    for restriction in restrictions:
        runs, reason = _lay(layout, restriction, exits)
        if reason:
            forbidden.report[f"left_out_{reason}"] += 1
            continue
        forbidden.report["timed" if restriction.is_timed else "built"] += 1
        (forbidden.timed if restriction.is_timed else forbidden.always).update(runs)
    forbidden.always.discard(())
    return forbidden
