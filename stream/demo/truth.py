"""True passages of tracks, from the exported tables of a network alone; shares nothing with detection.

A passage is taken only where both gates lie on the trip's own path: entry chainage = mouth - entry gate,
exit chainage = mouth + exit gate, times by inverting the position over time exactly.
"""

from dataclasses import dataclass

import numpy as np
import polars as pl
from numpy.typing import NDArray

from stream.demo.roads import metres_per_degree
from stream.demo.track import Tracks
from stream.kernel import kernel

F64 = NDArray[np.float64]
I32 = NDArray[np.int32]
I64 = NDArray[np.int64]

MOUTH_FROM_M = 5.0  # the direction of an arm is seen from 5 to 30 m beyond its mouth (DESIGN section 4)
MOUTH_TO_M = 30.0
NEAR_GATE_M = 10.0
STANDING_MPS = 0.5


@dataclass(frozen=True)
class _Visits:
    """Stays of trips at junctions: node rows `first` to `last` (inclusive) belong to one junction."""

    trip: I64
    junction: I64
    first: I64
    last: I64


@kernel
def reach_kernel(trip: I64, x_m: F64, time_start: I64, t_us: I64, s_m: F64, out_us: F64) -> None:
    """Fill the time at which each position is first reached (microseconds, fractional)."""
    for i in range(trip.size):
        low, high = time_start[trip[i]], time_start[trip[i] + 1] - 1
        while low < high:
            middle = (low + high) // 2
            if s_m[middle] < x_m[i]:
                low = middle + 1
            else:
                high = middle
        j = low
        if j == time_start[trip[i]] or s_m[j] == x_m[i]:
            out_us[i] = t_us[j]
        else:
            f = (x_m[i] - s_m[j - 1]) / (s_m[j] - s_m[j - 1])
            out_us[i] = t_us[j - 1] + f * (t_us[j] - t_us[j - 1])


@kernel
def stood_kernel(trip: I64, x_m: F64, time_start: I64, t_us: I64, s_m: F64, out: NDArray[np.bool_]) -> None:
    """Mark positions within NEAR_GATE_M of which the vehicle stood for a second or more."""
    for i in range(trip.size):
        low, high = time_start[trip[i]], time_start[trip[i] + 1] - 1
        while low < high:
            middle = (low + high) // 2
            if s_m[middle] < x_m[i] - NEAR_GATE_M:
                low = middle + 1
            else:
                high = middle
        j = low
        end = time_start[trip[i] + 1] - 1
        while j < end and s_m[j] <= x_m[i] + NEAR_GATE_M:
            span = t_us[j + 1] - t_us[j]
            if span >= 1_000_000 and s_m[j + 1] - s_m[j] < STANDING_MPS * span * 1e-6:
                out[i] = True
            j += 1


@kernel
def places_kernel(
    trip: I64, x_m: F64, point_start: I64, lon: F64, lat: F64, m: F64, lon_out: F64, lat_out: F64
) -> None:
    """Fill the position on each trip's path at a chainage, held within the path."""
    for i in range(trip.size):
        low, high = point_start[trip[i]], point_start[trip[i] + 1] - 2
        while low < high:
            middle = (low + high + 1) // 2
            if m[middle] <= x_m[i]:
                low = middle
            else:
                high = middle - 1
        length = m[low + 1] - m[low]
        f = 0.0 if length <= 0.0 else min(max((x_m[i] - m[low]) / length, 0.0), 1.0)
        lon_out[i] = lon[low] + f * (lon[low + 1] - lon[low])
        lat_out[i] = lat[low] + f * (lat[low + 1] - lat[low])


def _bearing(tracks: Tracks, trip: I64, from_m: F64, to_m: F64) -> F64:
    """Give the bearing (degrees) from one chainage of a trip's path to another."""
    ends = []
    for x in (from_m, to_m):
        lon, lat = np.zeros(trip.size), np.zeros(trip.size)
        places_kernel(
            trip, x, tracks.point_start, tracks.point_lon, tracks.point_lat, tracks.point_m, lon, lat
        )
        ends.append((lon, lat))
    (lon1, lat1), (lon2, lat2) = ends
    k_lon, k_lat = metres_per_degree((lat1 + lat2) / 2.0)
    turn = (lon2 - lon1 + 180.0) % 360.0 - 180.0
    return np.asarray(np.degrees(np.arctan2(turn * k_lon, (lat2 - lat1) * k_lat)) % 360.0)


def _arm_at(tracks: Tracks, arms: pl.DataFrame, row: I64, trip: I64, is_out: bool) -> tuple[I32, F64]:
    """Find the arm by which the path leaves (or reaches) the node in each row; -1 where none fits.

    Among the arms whose mouth is that node, the one whose bearing is nearest to the path's own, both seen
    5 to 30 m beyond the mouth. Returns the rows of `arms`, and by how many degrees the bearings differ.
    """
    sign = 1.0 if is_out else -1.0
    at = tracks.node_m[row]
    bearing = _bearing(tracks, trip, at + sign * MOUTH_FROM_M, at + sign * MOUTH_TO_M)
    asked = pl.DataFrame({"i": np.arange(row.size), "mouth": tracks.node_id[row], "b": bearing})
    usable = arms.with_row_index("arm_row").filter(pl.col("is_outbound" if is_out else "is_inbound"))
    turn = (pl.col("bearing_deg") - pl.col("b") + 180.0) % 360.0 - 180.0
    best = (
        asked.join(usable, left_on="mouth", right_on="mouth_node_id")
        .with_columns(off=turn.abs())
        .sort("i", "off")
        .group_by("i", maintain_order=True)
        .first()
    )
    arm, off = np.full(row.size, -1, np.int32), np.full(row.size, 360.0)
    arm[best["i"].to_numpy()] = best["arm_row"].to_numpy()
    off[best["i"].to_numpy()] = best["off"].to_numpy()
    return arm, off


def _visits(tracks: Tracks, arms: pl.DataFrame, junctions: pl.DataFrame) -> _Visits:
    """Group the nodes of each trip into stays at one junction; a way out by an arm ends a stay."""
    members = junctions.select("junction_id", pl.col("node_ids").alias("node_id")).explode("node_id")
    owner = dict(zip(members["node_id"].to_list(), members["junction_id"].to_list(), strict=True))
    codes, inverse = np.unique(tracks.node_id, return_inverse=True)
    junction = np.array([owner.get(int(c), -1) for c in codes], np.int64)[inverse]
    known = np.array([int(c) in owner for c in codes], bool)[inverse]
    row = np.flatnonzero(known)
    trip = np.repeat(np.arange(tracks.n_trips), np.diff(tracks.node_start))[row]
    same = (trip[1:] == trip[:-1]) & (junction[row][1:] == junction[row][:-1])
    out, off = _arm_at(tracks, arms, row[:-1], trip[:-1], True)
    back, back_off = _arm_at(tracks, arms, row[1:], trip[1:], False)
    leaves = (out >= 0) & (off < 20.0) & (back >= 0) & (back_off < 20.0)
    new = np.concatenate([[True], ~same | leaves]) if row.size else np.zeros(0, bool)
    begin = np.flatnonzero(new)
    end = np.concatenate([begin[1:], [row.size]]) - 1 if begin.size else begin
    return _Visits(trip[begin], junction[row][begin], row[begin], row[end])


def _gates(tracks: Tracks, arms: pl.DataFrame, visits: _Visits) -> pl.DataFrame:
    """Give each stay its arms and its gates' chainages; only stays with both gates on the path are kept."""
    arm_in, _ = _arm_at(tracks, arms, visits.first, visits.trip, False)
    arm_out, _ = _arm_at(tracks, arms, visits.last, visits.trip, True)
    gate_in = arms["entry_gate_m"].fill_null(0.0).to_numpy()[arm_in]
    gate_out = arms["exit_gate_m"].fill_null(0.0).to_numpy()[arm_out]
    entry_at = tracks.node_m[visits.first] - gate_in
    exit_at = tracks.node_m[visits.last] + gate_out
    length = tracks.point_m[tracks.point_start[1:] - 1][visits.trip]
    ok = (arm_in >= 0) & (arm_out >= 0) & (gate_in > 0.0) & (gate_out > 0.0)
    ok &= (entry_at > 0.0) & (exit_at < length)
    frame = pl.DataFrame(
        {
            "trip": visits.trip,
            "junction_id": visits.junction,
            "row_in": arm_in,
            "row_out": arm_out,
            "entry_at_m": entry_at,
            "exit_at_m": exit_at,
            "inside_m": tracks.node_m[visits.last] - tracks.node_m[visits.first],
        }
    )
    return frame.filter(pl.Series(ok))


def _timed(tracks: Tracks, gates: pl.DataFrame) -> pl.DataFrame:
    """Add entry and exit times and whether the vehicle stood near a gate."""
    trip = gates["trip"].to_numpy()
    columns: dict[str, NDArray[np.generic]] = {}
    stood = np.zeros(trip.size, bool)
    for gate in ("entry", "exit"):
        at = gates[f"{gate}_at_m"].to_numpy()
        t = np.zeros(trip.size)
        reach_kernel(trip, at, tracks.time_start, tracks.t_us, tracks.s_m, t)
        columns[f"{gate}_us"] = np.round(t).astype(np.int64)
        stood_kernel(trip, at, tracks.time_start, tracks.t_us, tracks.s_m, stood)
    names = np.array(tracks.names, dtype=object)
    return gates.with_columns(
        pl.Series("vehicle", names[tracks.vehicle_ix[trip]].tolist(), dtype=pl.String),
        pl.Series("stood_near_gate", stood),
        pl.Series("trip_start_us", tracks.t_us[tracks.time_start[trip]]),
        pl.Series("trip_end_us", tracks.t_us[tracks.time_start[trip + 1] - 1]),
        *(pl.Series(name, values) for name, values in columns.items()),
    )


def true_passages(
    tracks: Tracks, arms: pl.DataFrame, junctions: pl.DataFrame, movements: pl.DataFrame | None = None
) -> pl.DataFrame:
    """Give the passages the drivers really made, with exact times.

    Parameters
    ----------
    arms, junctions, movements : the network's exported tables; without movements the maneuver is null

    Returns
    -------
    One row a passage: vehicle, junction_id, arm_in, arm_out, maneuver, zone, entry_us, exit_us,
    traversal_ms, unimpeded_ms (gates over the arms' cruise speeds, inside at their mean pace, DESIGN
    section 6), delay_ms, inside_m, stood_near_gate (within 10 m of a gate), trip_start_us, trip_end_us (of
    the drive); sorted by vehicle, then entry.
    """
    found = _timed(tracks, _gates(tracks, arms, _visits(tracks, arms, junctions)))
    gate = arms.with_row_index("row").select(
        pl.col("row").cast(pl.Int32), "arm", "entry_gate_m", "exit_gate_m", "limit_in_kmh", "limit_out_kmh"
    )
    joined = (
        found.join(gate.select(pl.all().name.suffix("_i")), left_on="row_in", right_on="row_i")
        .join(gate.select(pl.all().name.suffix("_o")), left_on="row_out", right_on="row_o")
        .join(junctions.select("junction_id", "zone"), on="junction_id")
    )
    pace_in, pace_out = 3.6 / pl.col("limit_in_kmh_i"), 3.6 / pl.col("limit_out_kmh_o")
    unimpeded_s = (
        pl.col("entry_gate_m_i") * pace_in
        + pl.col("inside_m") * (pace_in + pace_out) / 2.0
        + pl.col("exit_gate_m_o") * pace_out
    )
    out = joined.with_columns(
        arm_in=pl.col("arm_i").cast(pl.Int64),
        arm_out=pl.col("arm_o").cast(pl.Int64),
        traversal_ms=((pl.col("exit_us") - pl.col("entry_us")) / 1000.0).round().cast(pl.Int64),
        unimpeded_ms=(unimpeded_s * 1000.0).round().cast(pl.Int64),
    ).with_columns(delay_ms=pl.col("traversal_ms") - pl.col("unimpeded_ms"))
    if movements is None:
        out = out.with_columns(maneuver=pl.lit(None, pl.String))
    else:
        keys = ["junction_id", "arm_in", "arm_out"]
        turn = movements.select(*(pl.col(c).cast(pl.Int64) for c in keys), "maneuver")
        out = out.join(turn, on=keys, how="left")
    return out.select(
        "vehicle",
        "junction_id",
        "arm_in",
        "arm_out",
        "maneuver",
        "zone",
        "entry_us",
        "exit_us",
        "traversal_ms",
        "unimpeded_ms",
        "delay_ms",
        "inside_m",
        "stood_near_gate",
        "trip_start_us",
        "trip_end_us",
    ).sort("vehicle", "entry_us", "junction_id")
