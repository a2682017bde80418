"""Tables of the network: one row per junction, arm, link, movement and zone, with lasting ids."""

from dataclasses import dataclass

import numpy as np
import polars as pl

from stream.config import NetworkKeys
from stream.network.arms import Arms, Links, default_kmh, point_along
from stream.network.gates import Gates
from stream.network.graph import Graph, place
from stream.network.junctions import Junctions
from stream.network.model import F64, I32, NONE
from stream.network.movements import Movements
from stream.network.zones import Zones, time_zone_at

LIMIT_DIGITS = 3  # decimals of a speed in km/h: limits in miles are kept as 32-bit floats


@dataclass(frozen=True)
class Parts:
    """All parts of a network that tables are made from."""

    graph: Graph
    junctions: Junctions
    links: Links
    arms: Arms
    gates: Gates
    movements: Movements
    controls: list[str]
    side: str


def _middle(graph: Graph, junctions: Junctions) -> tuple[F64, F64]:
    """Give the mean place of each junction's nodes, whole also across the 180th meridian."""
    lon, lat = np.empty(len(junctions.kind)), np.empty(len(junctions.kind))
    for j, nodes in enumerate(junctions.nodes):
        east = graph.node_lon_e7[nodes].astype(np.int64) - int(graph.node_lon_e7[nodes[0]])
        east = (east + 1_800_000_000) % 3_600_000_000 - 1_800_000_000
        lon[j] = int(graph.node_lon_e7[nodes[0]]) + float(np.mean(east))
        lat[j] = float(np.mean(graph.node_lat_e7[nodes]))
    lon = (lon + 1_800_000_000) % 3_600_000_000 - 1_800_000_000
    return np.round(lon * 1e-7, 7), np.round(lat * 1e-7, 7)


def _widest(graph: Graph, junctions: Junctions, arms: Arms) -> I32:
    """Give each junction's widest class: of its arms, else of the roads inside it."""
    widest = np.full(len(junctions.kind), 255, np.int32)
    np.minimum.at(widest, arms.junction, graph.road_class[arms.main_road].astype(np.int32))
    chains = junctions.chains
    lead = graph.road_class[chains.item[chains.start[:-1]]].astype(np.int32)
    for j in np.flatnonzero(widest == 255):
        widest[j] = lead[junctions.chain_junction == j].min()
    return widest


def side_of(keys: NetworkKeys, seen_side: str) -> str:
    """Give the driving side of a whole network: as configured, else as seen."""
    return seen_side if keys.driving_side == "auto" else keys.driving_side


def zone_columns(
    lon: F64, lat: F64, zones: Zones | None, side: str, keys: NetworkKeys
) -> tuple[list[str], list[str], list[str]]:
    """Give zone name, driving side and time zone of each place."""
    placed = zones.place(lon, lat).tolist() if zones is not None else [NONE] * len(lon)
    names, sides, times = [], [], []
    for at, x, y in zip(placed, lon.tolist(), lat.tolist(), strict=True):
        if zones is not None and at != NONE:
            names.append(zones.names[at])
            sides.append(zones.driving_sides[at] or side)
            times.append(zones.time_zones[at])
        else:
            names.append("")
            sides.append(side)
            times.append(time_zone_at(x, y) if keys.time_zone == "auto" else keys.time_zone)
    return names, sides, times


def junction_table(parts: Parts, zones: Zones | None, keys: NetworkKeys) -> pl.DataFrame:
    """Make the table of junctions."""
    graph, junctions = parts.graph, parts.junctions
    lon, lat = _middle(graph, junctions)
    names, sides, times = zone_columns(lon, lat, zones, parts.side, keys)
    n = len(junctions.kind)
    return pl.DataFrame(
        {
            "junction_ix": np.arange(n, dtype=np.int32),
            "junction_id": junctions.junction_id,
            "lon": lon,
            "lat": lat,
            "n_nodes": np.array([len(nodes) for nodes in junctions.nodes], np.int32),
            "node_ids": pl.Series(
                [graph.node_id[nodes].tolist() for nodes in junctions.nodes], dtype=pl.List(pl.Int64)
            ),
            "kind": pl.Series(junctions.kind, dtype=pl.String),
            "control": pl.Series(parts.controls, dtype=pl.String),
            "zone": pl.Series(names, dtype=pl.String),
            "driving_side": pl.Series(sides, dtype=pl.String),
            "time_zone": pl.Series(times, dtype=pl.String),
            "class": pl.Series(
                [keys.classes[c] for c in _widest(graph, junctions, parts.arms).tolist()], dtype=pl.String
            ),
            "n_arms": np.bincount(parts.arms.junction, minlength=n).astype(np.int32),
        }
    )


def arm_table(parts: Parts, keys: NetworkKeys) -> pl.DataFrame:
    """Make the table of arms."""
    graph, arms, gates = parts.graph, parts.arms, parts.gates
    in_kmh = np.round(arms.in_kmh.astype(np.float64), LIMIT_DIGITS)
    out_kmh = np.round(arms.out_kmh.astype(np.float64), LIMIT_DIGITS)
    columns: dict[str, object] = {
        "arm_ix": np.arange(len(arms.link), dtype=np.int32),
        "junction_ix": arms.junction,
        "junction_id": parts.junctions.junction_id[arms.junction],
        "arm": arms.number,
        "way_id": arms.way_id,
        "mouth_node_id": graph.node_id[arms.mouth],
        "bearing_deg": arms.bearing_deg,
        "is_inbound": arms.is_inbound,
        "is_outbound": arms.is_outbound,
        "class": pl.Series(
            [keys.classes[c] for c in graph.road_class[arms.main_road].tolist()], dtype=pl.String
        ),
        "limit_kmh": np.where(arms.is_inbound, in_kmh, out_kmh),
        "limit_in_kmh": pl.Series(np.where(arms.is_inbound, in_kmh, np.nan)).fill_nan(None),
        "limit_out_kmh": pl.Series(np.where(arms.is_outbound, out_kmh, np.nan)).fill_nan(None),
        "has_limit": np.where(arms.is_inbound, arms.has_in_limit, arms.has_out_limit),
        "link_ix": arms.link,
        "link_m": parts.links.length_m[arms.link],
        "entry_gate_m": gates.entry_m,
        "exit_gate_m": gates.exit_m,
    }
    for kind, line in (("entry", gates.entry_line), ("exit", gates.exit_line)):
        for at, name in enumerate(("lon1", "lat1", "lon2", "lat2")):
            columns[f"{kind}_{name}"] = pl.Series(line[:, at]).fill_nan(None)
    return pl.DataFrame(columns)


def _link_middles(parts: Parts) -> tuple[F64, F64]:
    """Give the place halfway along each link."""
    links = parts.links
    found = [
        point_along(links, parts.graph, link, False, 0.5 * float(links.length_m[link]))
        for link in range(len(links.length_m))
    ]
    return place(
        parts.graph, np.array([f[0] for f in found], np.int32), np.array([f[1] for f in found], np.float64)
    )


def _between_gates(parts: Parts, tail: I32, head: I32) -> pl.Series:
    """Give what is left of links between an exit gate at one end and an entry gate at the other."""
    has_both = (tail >= 0) & (head >= 0)
    exit_m, entry_m = parts.gates.exit_m[tail], parts.gates.entry_m[head]
    has_both &= (exit_m > 0) & (entry_m > 0)
    left = parts.links.length_m - exit_m - entry_m
    return pl.Series(np.where(has_both, left, np.nan)).fill_nan(None)


def link_table(parts: Parts, zones: Zones | None, keys: NetworkKeys) -> pl.DataFrame:
    """Make the table of links; class and limit are those of most of a link's metres."""
    graph, links, arms = parts.graph, parts.links, parts.arms
    n = len(links.length_m)
    classes, limits, opened = [], [], np.zeros((n, 2), np.bool_)
    for link in range(n):
        run = links.run(link, False)
        opened[link] = [all(graph.edge_open[2 * r + (a ^ d)] for r, a in run) for d in (0, 1)]
        road, against = max(run, key=lambda pair: float(graph.road_length_m[pair[0]]))
        name = keys.classes[graph.road_class[road]]
        drawn = 2 * road + against
        limit = float(graph.edge_limit_kmh[drawn if graph.edge_open[drawn] else drawn ^ 1])
        classes.append(name)
        limits.append(default_kmh(keys, name) if limit != limit else limit)
    lon, lat = _link_middles(parts)
    none = pl.Series([None] * n, dtype=pl.Float64)
    has_arms = len(arms.link) > 0
    return pl.DataFrame(
        {
            "link_ix": np.arange(n, dtype=np.int32),
            "arm_from_ix": arms.link_arm_from,
            "arm_to_ix": arms.link_arm_to,
            "length_m": links.length_m,
            "class": pl.Series(classes, dtype=pl.String),
            "limit_kmh": np.round(np.array(limits, np.float64), LIMIT_DIGITS),
            "middle_fwd_m": _between_gates(parts, arms.link_arm_from, arms.link_arm_to) if has_arms else none,
            "middle_back_m": _between_gates(parts, arms.link_arm_to, arms.link_arm_from)
            if has_arms
            else none,
            "is_open_fwd": opened[:, 0],
            "is_open_back": opened[:, 1],
            "lon": lon,
            "lat": lat,
            "zone": link_zones(lon, lat, zones),
        }
    )


def link_zones(lon: F64, lat: F64, zones: Zones | None) -> pl.Series:
    """Give the zone of each link, that of the place halfway along it."""
    placed = zones.place(lon, lat).tolist() if zones is not None else [NONE] * len(lon)
    return pl.Series([zones.names[z] if zones and z != NONE else "" for z in placed], dtype=pl.String)


def movement_table(parts: Parts) -> pl.DataFrame:
    """Make the table of movements."""
    moves, arms = parts.movements, parts.arms
    junction = arms.junction[moves.arm_in]
    return pl.DataFrame(
        {
            "junction_ix": junction,
            "junction_id": parts.junctions.junction_id[junction],
            "arm_in": arms.number[moves.arm_in],
            "arm_out": arms.number[moves.arm_out],
            "arm_in_ix": moves.arm_in,
            "arm_out_ix": moves.arm_out,
            "turn_deg": moves.turn_deg,
            "maneuver": pl.Series(moves.maneuver, dtype=pl.String),
            "inside_m": moves.inside_m,
            "is_banned": moves.is_banned,
            "is_timed": moves.is_timed,
        }
    )


def zone_table(zones: Zones | None, side: str) -> pl.DataFrame:
    """Make the table of zones."""
    names = list(zones.names) if zones else []
    return pl.DataFrame(
        {
            "zone_ix": np.arange(len(names), dtype=np.int32),
            "zone": pl.Series(names, dtype=pl.String),
            "time_zone": pl.Series(list(zones.time_zones) if zones else [], dtype=pl.String),
            "driving_side": pl.Series(
                [s or side for s in zones.driving_sides] if zones else [], dtype=pl.String
            ),
        }
    )
