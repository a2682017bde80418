"""Road ways as read, before any splitting: what every reader of roads hands to the builder.

Guarantee of a reader: nodes are distinct, each way has at least two references, every reference points
to a node with a location, and a way that no car may use in either direction is not in here.
"""

from dataclasses import dataclass, field

import numpy as np

from stream.network.model import F32, I32, I64, U8

# way_open: the directions in which a car may use a way, relative to its drawing.
ALONG = 1
AGAINST = 2

# way_ring
RING_NONE = 0
RING_ROUNDABOUT = 1
RING_CIRCULAR = 2

# node_sign: bits. The two GOVERNS bits are relative to the drawing of the one way that holds the node;
# a reader sets them only on nodes of exactly one way.
SIGNALS = 1
STOP = 2
GIVE_WAY = 4
CROSSING_SIGNALS = 8
MINI_ROUNDABOUT = 16
MINI_CLOCKWISE = 32
GOVERNS_ALONG = 64
GOVERNS_AGAINST = 128


@dataclass(frozen=True)
class Restriction:
    """One turn restriction that holds for cars, by the ids of its members.

    Attributes
    ----------
    is_only
        True: every other exit of the from-way is forbidden; False: the named movement is.
    is_reversal
        True for the u_turn kinds.
    is_timed
        True where a condition says when it holds.
    via_node_id
        None where it goes over ways.
    via_way_ids
        In the order of the relation; empty where it goes over one node.
    """

    relation_id: int
    is_only: bool
    is_reversal: bool
    is_timed: bool
    from_way_ids: tuple[int, ...]
    via_node_id: int | None
    via_way_ids: tuple[int, ...]
    to_way_ids: tuple[int, ...]


@dataclass(frozen=True)
class RawRoads:
    """Ways of one extract; W ways, F references to N nodes.

    Attributes
    ----------
    class_names : tuple of str    `network.classes` of the settings, in that order
    way_id : int64[W]             distinct, ascending unless a way was cut at the edge of the extract
    way_class : uint8[W]          index into `class_names`
    way_open : uint8[W]           ALONG | AGAINST, never 0
    way_ring : uint8[W]           RING_NONE, RING_ROUNDABOUT, RING_CIRCULAR
    way_limit_along_kmh, way_limit_against_kmh : float32[W]   NaN where there is no usable limit
    ref_start : int64[W + 1]      references of way w: ref_start[w] .. ref_start[w + 1], at least two
    ref_node : int32[F]           node index, in the order of the drawing
    node_id : int64[N]            distinct; negative for made-up nodes
    node_lon_e7, node_lat_e7 : int32[N]   1e-7 degree
    node_sign : uint8[N]          the bits above
    restrictions : list of Restriction
    report : dict                 counts: what was taken and what was left out, by reason
    """

    class_names: tuple[str, ...]
    way_id: I64
    way_class: U8
    way_open: U8
    way_ring: U8
    way_limit_along_kmh: F32
    way_limit_against_kmh: F32
    ref_start: I64
    ref_node: I32
    node_id: I64
    node_lon_e7: I32
    node_lat_e7: I32
    node_sign: U8
    restrictions: list[Restriction] = field(default_factory=list)
    report: dict[str, dict[str, int]] = field(default_factory=dict)

    def check(self) -> None:
        """Hold a reader to the guarantee of this module; a fault is a bug of the reader."""
        n_ways, n_nodes = len(self.way_id), len(self.node_id)
        columns = (self.way_class, self.way_open, self.way_ring)
        limits = (self.way_limit_along_kmh, self.way_limit_against_kmh)
        if any(len(c) != n_ways for c in (*columns, *limits)) or len(self.ref_start) != n_ways + 1:
            raise ValueError("columns of ways differ in length")
        if any(len(c) != n_nodes for c in (self.node_lon_e7, self.node_lat_e7, self.node_sign)):
            raise ValueError("columns of nodes differ in length")
        if len(np.unique(self.node_id)) != n_nodes:
            raise ValueError("a node id stands twice")
        if n_ways and (np.diff(self.ref_start).min() < 2 or self.way_open.min() < 1):
            raise ValueError("a way has fewer than two references or is open in no direction")
        if len(self.ref_node) and (self.ref_node.min() < 0 or self.ref_node.max() >= n_nodes):
            raise ValueError("a reference points to no node")
