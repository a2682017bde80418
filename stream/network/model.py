"""The streets as frozen arrays: what detection shares, with no other library than numpy.

Words used here and in `detect` only:

* *road*: a polyline between two graph nodes, split where roads meet and where class, limit or
  one-way state change; never split by junction logic.
* *edge*: a road in one direction of travel; edge = 2 * road + direction (0 along the drawing,
  1 against it). ``edge ^ 1`` is the other direction, ``edge >> 1`` the road.
* chainage: metres from the start of an edge, in its direction of travel.

Coordinates are integers of 1e-7 degree, as in OpenStreetMap itself (about 1 cm).
"""

from dataclasses import dataclass, fields
from typing import Any

import numpy as np
from numpy.typing import NDArray

NONE = -1

I8 = NDArray[np.int8]
U8 = NDArray[np.uint8]
I32 = NDArray[np.int32]
I64 = NDArray[np.int64]
F32 = NDArray[np.float32]
F64 = NDArray[np.float64]


@dataclass(frozen=True)
class Streets:
    """Directed street graph with gates; N nodes, R roads, 2R edges, P shape points, A arms.

    Attributes
    ----------
    node_id : int64[N]            OSM node id (negative for made-up nodes)
    node_lon_e7, node_lat_e7 : int32[N]
    node_junction : int32[N]      junction index, or -1
    road_from, road_to : int32[R] node index at the drawn start and end
    road_length_m : float64[R]    on the ellipsoid, > 0
    road_class : uint8[R]         index into `class_names`
    road_inside : int32[R]        junction index where the road lies inside a junction, else -1
    road_way_id : int64[R]        OSM way id of the (first part of the) road
    point_start : int32[R + 1]    shape points of road r: point_start[r] .. point_start[r + 1]
    point_lon_e7, point_lat_e7 : int32[P]
    edge_open : uint8[2R]         1 where a car may drive this way
    edge_speed_mps : float32[2R]  speed limit, else class default
    edge_link : int32[2R]         link index (junction level), -1 inside junctions
    succ_start : int32[2R + 1]    successors of edge e: succ_start[e] .. succ_start[e + 1]
    succ_edge : int32[S]          an open edge that starts where e ends (e ^ 1 included), ascending
    succ_turn_deg : float32[S]    turn angle at the node, (-180, 180], right positive
    succ_banned : uint8[S]        1 where a restriction forbids it (via one node)
    entry_gate_arm : int32[2R]    arm index whose entry gate lies on this edge, else -1
    entry_gate_at_m : float64[2R] chainage of that gate (0 where none)
    exit_gate_arm : int32[2R]     arm index whose exit gate lies on this edge, else -1
    exit_gate_at_m : float64[2R]
    arm_junction : int32[A]       junction index of each arm
    arm_entry_gate_m, arm_exit_gate_m : float64[A]   gate distances from the mouth (0: no gate)
    arm_in_mps, arm_out_mps : float32[A]   cruise speed by limit or class, inbound and outbound
    class_names : tuple of str
    """

    node_id: I64
    node_lon_e7: I32
    node_lat_e7: I32
    node_junction: I32
    road_from: I32
    road_to: I32
    road_length_m: F64
    road_class: U8
    road_inside: I32
    road_way_id: I64
    point_start: I32
    point_lon_e7: I32
    point_lat_e7: I32
    edge_open: U8
    edge_speed_mps: F32
    edge_link: I32
    succ_start: I32
    succ_edge: I32
    succ_turn_deg: F32
    succ_banned: U8
    entry_gate_arm: I32
    entry_gate_at_m: F64
    exit_gate_arm: I32
    exit_gate_at_m: F64
    arm_junction: I32
    arm_entry_gate_m: F64
    arm_exit_gate_m: F64
    arm_in_mps: F32
    arm_out_mps: F32
    class_names: tuple[str, ...]

    def arrays(self) -> dict[str, NDArray[Any]]:
        """Give the numpy arrays by field name, in the order of the fields."""
        return {f.name: getattr(self, f.name) for f in fields(self) if f.name != "class_names"}
