"""The whole build: extract (or road lines) and zones in, frozen streets, tables, report and digest out."""

import hashlib
import io
import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl
from numpy.typing import NDArray

from stream.config import Settings
from stream.errors import InputError, NetworkError
from stream.network import raw
from stream.network.arms import Arms, Links, build_arms, build_links, default_kmh
from stream.network.control import infer_side, read_controls
from stream.network.gates import Gates, build_gates
from stream.network.graph import Graph, build_graph, successors
from stream.network.junctions import Junctions, build_junctions
from stream.network.lines import read_lines
from stream.network.model import F32, I32, NONE, U8, Streets
from stream.network.movements import build_movements
from stream.network.osm import ENDINGS, Progress, read_osm
from stream.network.tables import (
    Parts,
    arm_table,
    junction_table,
    link_table,
    movement_table,
    side_of,
    zone_table,
)
from stream.network.turns import Forbidden, lay_restrictions
from stream.network.zones import Zones, read_zones

LINE_ENDINGS = (".geojson", ".json", ".parquet", ".geoparquet")
BLOB_VERSION = 1
KMH = 3.6


@dataclass(frozen=True)
class Built:
    """A network as built.

    Attributes
    ----------
    streets
        What detection shares.
    tables
        junction, arm, link, movement, zone.
    report
        Counts of what was built and what was left out, by part and reason.
    digest
        SHA-256 over all arrays and tables.
    seen_side
        Driving side that the rings tell, else right; whatever is configured.
    """

    streets: Streets
    tables: dict[str, pl.DataFrame]
    report: dict[str, dict[str, int]]
    digest: str
    seen_side: str


def build_network(
    extract: Path, zones: Path | None, settings: Settings, progress: Progress | None = None
) -> Built:
    """Build a network from an OpenStreetMap extract, or from the user's own road lines.

    Parameters
    ----------
    extract
        `.osm.pbf`, `.osm`, `.osm.gz`, `.osm.bz2`; or `.geojson`, `.json`, `.parquet`, `.geoparquet`.
    zones
        GeoJSON polygons; None for none.
    progress
        Called with what is being read and how many were read so far.

    Raises
    ------
    InputError
        A file that is missing or can't be read.
    NetworkError
        No road for cars in it, or none that meets another.
    """
    areas = read_zones(zones, settings) if zones is not None else None
    roads = _read(extract, settings, progress)
    roads.check()
    built = assemble(roads, areas, settings)
    if not len(built.tables["junction"]):
        raise NetworkError(f"{extract}: no roads meet in it; take a larger extract or more network.classes")
    return built


def _read(extract: Path, settings: Settings, progress: Progress | None) -> raw.RawRoads:
    name = extract.name.lower()
    if name.endswith(ENDINGS):
        return read_osm(extract, settings.network.classes, progress)
    if name.endswith(LINE_ENDINGS):
        return read_lines(extract, settings.network.classes)
    known = ", ".join((*ENDINGS, *LINE_ENDINGS))
    raise InputError(f"{extract}: not a known kind of road file; its name must end in one of {known}")


def assemble(roads: raw.RawRoads, zones: Zones | None, settings: Settings) -> Built:
    """Build streets and tables from road ways, wherever they came from."""
    keys = settings.network
    graph = build_graph(roads)
    succ_start, succ_edge, succ_turn = successors(graph)
    forbidden = lay_restrictions(graph, roads.restrictions)
    junctions = build_junctions(graph, keys)
    links = build_links(junctions)
    arms = build_arms(graph, junctions, links, keys)
    gates = build_gates(graph, links, arms, settings)
    road_inside = _road_inside(graph, junctions)
    succ = (succ_start, succ_edge)
    moves = build_movements(graph, succ, junctions, road_inside, arms, forbidden, settings.maneuver)
    controls = read_controls(graph, junctions, links, arms, keys)
    seen_side, side_counts = infer_side(graph, junctions)
    side = side_of(keys, seen_side)
    banned = forbidden.pairs(succ_start, succ_edge)
    streets = _streets(
        graph, junctions, links, arms, gates, road_inside, (*succ, succ_turn, banned), settings
    )
    parts = Parts(graph, junctions, links, arms, gates, moves, controls, side)
    tables = {
        "junction": junction_table(parts, zones, keys),
        "arm": arm_table(parts, keys),
        "link": link_table(parts, zones, keys),
        "movement": movement_table(parts),
        "zone": zone_table(zones, side),
    }
    forbidden.report["over_links"] += _over_links(forbidden, road_inside)
    report = {
        **roads.report,
        "restrictions": dict(sorted(forbidden.report.items())),
        "graph": _graph_counts(graph),
        "junctions": {"built": len(junctions.kind), **junctions.report},
        "controls": _counts(controls),
        "driving_side": {**_counts(tables["junction"]["driving_side"].to_list()), **side_counts},
        "zones": {name or "outside": n for name, n in _counts(tables["junction"]["zone"].to_list()).items()},
        "gates": gates.report,
        "links": _link_counts(tables["link"]),
        "movements": {"built": len(moves.maneuver), **moves.report},
    }
    return Built(streets, tables, report, network_digest(streets, tables), seen_side)


def _counts(values: list[str]) -> dict[str, int]:
    names, n = np.unique(np.array(values, dtype=str), return_counts=True)
    return dict(zip(names.tolist(), n.tolist(), strict=True))


def _graph_counts(graph: Graph) -> dict[str, int]:
    return {
        "nodes": len(graph.node_id),
        "roads": len(graph.road_from),
        "open_edges": int(graph.edge_open.sum()),
        "metres": round(float(graph.road_length_m.sum())),
    }


def _link_counts(link: pl.DataFrame) -> dict[str, int]:
    dead = link["arm_to_ix"] == NONE
    apart = link["arm_from_ix"] == NONE
    return {"built": len(link), "dead_ends": int((dead & ~apart).sum()), "apart": int(apart.sum())}


def _over_links(forbidden: Forbidden, road_inside: I32) -> int:
    """Count forbidden runs over ways that leave the junction: no movement of one junction holds them."""
    runs = [run for run in forbidden.always | forbidden.timed if len(run) > 2]
    return sum(any(road_inside[edge >> 1] == NONE for edge in run[1:-1]) for run in runs)


def _road_inside(graph: Graph, junctions: Junctions) -> I32:
    chains = junctions.chains
    inside = np.full(len(graph.road_from), NONE, np.int32)
    inside[chains.item] = np.repeat(junctions.chain_junction, np.diff(chains.start))
    return inside


def _edge_speed(graph: Graph, settings: Settings) -> F32:
    keys = settings.network
    default = np.array([default_kmh(keys, name) for name in keys.classes])
    kmh = graph.edge_limit_kmh.astype(np.float64)
    kmh = np.where(np.isnan(kmh), default[graph.road_class].repeat(2), kmh)
    return (kmh / KMH).astype(np.float32)


def _streets(
    graph: Graph,
    junctions: Junctions,
    links: Links,
    arms: Arms,
    gates: Gates,
    road_inside: I32,
    succ: tuple[I32, I32, F32, U8],
    settings: Settings,
) -> Streets:
    """Lay out the arrays that detection shares."""
    road_link = np.full(len(graph.road_from), NONE, np.int32)
    road_link[links.road] = np.repeat(np.arange(len(links.length_m), dtype=np.int32), np.diff(links.start))
    return Streets(
        node_id=graph.node_id,
        node_lon_e7=graph.node_lon_e7,
        node_lat_e7=graph.node_lat_e7,
        node_junction=junctions.node_junction,
        road_from=graph.road_from,
        road_to=graph.road_to,
        road_length_m=graph.road_length_m,
        road_class=graph.road_class,
        road_inside=road_inside,
        road_way_id=graph.road_way_first,
        point_start=graph.point_start,
        point_lon_e7=graph.point_lon_e7,
        point_lat_e7=graph.point_lat_e7,
        edge_open=graph.edge_open,
        edge_speed_mps=_edge_speed(graph, settings),
        edge_link=road_link.repeat(2),
        succ_start=succ[0],
        succ_edge=succ[1],
        succ_turn_deg=succ[2],
        succ_banned=succ[3],
        entry_gate_arm=gates.edge_entry_arm,
        entry_gate_at_m=gates.edge_entry_at_m,
        exit_gate_arm=gates.edge_exit_arm,
        exit_gate_at_m=gates.edge_exit_at_m,
        arm_junction=arms.junction,
        arm_entry_gate_m=gates.entry_m,
        arm_exit_gate_m=gates.exit_m,
        arm_in_mps=(arms.in_kmh / KMH).astype(np.float32),
        arm_out_mps=(arms.out_kmh / KMH).astype(np.float32),
        class_names=settings.network.classes,
    )


def network_digest(streets: Streets, tables: dict[str, pl.DataFrame]) -> str:
    """Hash all arrays and tables: names, types and values."""
    total = hashlib.sha256(json.dumps([BLOB_VERSION, list(streets.class_names)]).encode())
    for name, array in streets.arrays().items():
        total.update(f"{name} {array.dtype.str} {len(array)}\n".encode())
        total.update(np.ascontiguousarray(array).tobytes())
    for name, table in tables.items():
        total.update(f"{name} {len(table)}\n".encode())
        for column in table:
            total.update(f"{column.name} {column.dtype}\n".encode())
            total.update(_column_bytes(column))
    return total.hexdigest()


def _column_bytes(column: pl.Series) -> bytes:
    """Give a column's values as bytes that don't depend on how the frame library stores them."""
    if isinstance(column.dtype, pl.List):
        return column.list.len().to_numpy().tobytes() + column.explode().to_numpy().tobytes()
    if column.dtype == pl.String:
        return json.dumps(column.to_list()).encode()
    if column.dtype == pl.Float64:
        return column.fill_null(float("nan")).to_numpy().tobytes()
    return column.to_numpy().tobytes()


def streets_to_blobs(streets: Streets) -> dict[str, bytes]:
    """Write streets as named byte strings, one per array, with a versioned head."""
    head = {"version": BLOB_VERSION, "class_names": list(streets.class_names)}
    blobs = {"head": json.dumps(head).encode()}
    for name, array in streets.arrays().items():
        file = io.BytesIO()
        np.save(file, array, allow_pickle=False)
        blobs[name] = file.getvalue()
    return blobs


def streets_from_blobs(blobs: dict[str, bytes]) -> Streets:
    """Read streets back from `streets_to_blobs`.

    Raises
    ------
    NetworkError
        The blobs are of another version, or some are missing.
    """
    mend = "build the network again with `turntally network`"
    try:
        head: dict[str, Any] = json.loads(blobs["head"])
    except (KeyError, ValueError) as err:
        raise NetworkError(f"the stored network has no readable head ({err}); {mend}") from err
    if head.get("version") != BLOB_VERSION:
        raise NetworkError(
            f"the stored network has format {head.get('version')}, this program reads {BLOB_VERSION}; {mend}"
        )
    names = [n for n in Streets.__dataclass_fields__ if n != "class_names"]
    missing = [n for n in names if n not in blobs]
    if missing:
        raise NetworkError(f"the stored network lacks {', '.join(missing)}; {mend}")
    arrays: dict[str, NDArray[Any]] = {}
    for name in names:
        try:
            arrays[name] = np.load(io.BytesIO(blobs[name]), allow_pickle=False)
        except (ValueError, EOFError) as err:
            raise NetworkError(f"the stored network's {name} can't be read ({err}); {mend}") from err
    return Streets(**arrays, class_names=tuple(head["class_names"]))
