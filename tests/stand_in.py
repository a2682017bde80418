"""A detector that needs no streets, and the network it pretends to drive on: for tests of store and ingest.

Its rule is plain enough to work out by hand. Of a vehicle's pings in a trip, counted from 0, number 5k enters
junction 1 (arm 1), 5k + 1 leaves it (arm 0), 5k + 2 enters junction 2 (arm 0), 5k + 3 leaves it (arm 1), and
5k + 4 does nothing. The newest ping always waits for the next one (it is held). A ping out of 0 to 10
degrees is outside, one older than the newest is late, one as old is a duplicate; a silence of more than
120 s ends a trip.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import polars as pl

from stream.detect.carry import new_states
from stream.detect.records import (
    DROP_REASONS,
    END_REASONS,
    PASSAGE,
    SECTION,
    TRIP,
    UNFINISHED,
    UNFINISHED_REASONS,
    Found,
)
from stream.store.files import statement

MAX_GAP_US = 120_000_000
GATE_M = 60.0
_TYPES = {
    "integer": pl.Int32,
    "bigint": pl.Int64,
    "double": pl.Float64,
    "boolean": pl.Boolean,
    "varchar": pl.String,
    "bigint[]": pl.List(pl.Int64),
}
INSIDE_M = 10.0
KMH = 36.0  # 10 m/s


class StandIn:
    """Takes the place of `stream.detect.run.Detector`."""

    def __init__(self, streets: Any, settings: Any, threads: int = 0) -> None:
        self.given = (streets, settings, threads)

    def feed(self, states: Any, vehicle_ix: Any, t_us: Any, lon: Any, lat: Any) -> Found:
        """Go on with each vehicle, ping by ping."""
        out = _Out()
        outside = (lon < 0) | (lat < 0) | (lon > 10) | (lat > 10)
        for v, t, is_outside in zip(vehicle_ix.tolist(), t_us.tolist(), outside.tolist(), strict=True):
            state = states[v]
            newest = state["held_us"] if state["is_held"] else state["t_us"]
            if is_outside:
                out.drop("outside_area")
            elif state["has_last"] and t < newest:
                out.drop("late")
            elif state["has_last"] and t == newest:
                out.drop("duplicate")
            else:
                if state["is_held"]:
                    out.use(state, v, int(state["held_us"]))
                state["held_us"], state["is_held"], state["has_last"] = t, 1, 1
        return out.found()

    def close(self, states: Any) -> Found:
        """Use what is held and end every trip."""
        out = _Out()
        for v in range(len(states)):
            state = states[v]
            if state["is_held"]:
                out.use(state, v, int(state["held_us"]))
                state["is_held"] = 0
            if state["mode"]:
                out.end(state, v, "close")
        return out.found()


class _Out:
    def __init__(self) -> None:
        self.rows: dict[str, list[tuple[Any, ...]]] = {"p": [], "s": [], "u": [], "t": []}
        self.dropped = np.zeros(len(DROP_REASONS), np.int64)
        self.n_used = 0

    def drop(self, reason: str) -> None:
        self.dropped[DROP_REASONS.index(reason)] += 1

    def use(self, state: Any, v: int, t: int) -> None:
        self.n_used += 1
        if state["mode"] and t - state["t_us"] > MAX_GAP_US:
            self.end(state, v, "gap")
        if not state["mode"]:
            state["mode"], state["trip_start_us"], state["n_pings"], state["n_passages"] = 1, t, 0, 0
            state["first_gate_us"] = state["last_gate_us"] = -1
            for name in ("passage_us", "section_us", "unfinished_us", "other_us"):
                state[name] = 0
        phase = int(state["n_pings"]) % 5
        state["n_pings"] += 1
        state["t_us"] = t
        if phase < 4:
            self.gate(state, v, t, phase)

    def gate(self, state: Any, v: int, t: int, phase: int) -> None:
        start, last = int(state["trip_start_us"]), int(state["last_gate_us"])
        if last < 0:
            state["first_gate_us"] = t
        elif phase == 0:
            state["other_us"] += t - last
        elif phase == 2:
            self.rows["s"].append((v, 0, 2, (t - last) // 1000, start, last, t, 250.0))
            state["section_us"] += t - last
        else:
            arms = (1, 0) if phase == 1 else (2, 3)
            state["n_passages"] += 1
            state["passage_us"] += t - last
            step = (t - last) // 1000
            self.rows["p"].append((v, *arms, start, last, t, INSIDE_M, 2, step, 0, 100, 10.0, 0))
        state["open_arm"] = {0: 1, 2: 2}.get(phase, -1)
        state["last_gate_us"] = t

    def end(self, state: Any, v: int, reason: str) -> None:
        start, last_gate, t = int(state["trip_start_us"]), int(state["last_gate_us"]), int(state["t_us"])
        if state["open_arm"] >= 0:
            code = UNFINISHED_REASONS.index(reason)
            self.rows["u"].append((v, int(state["open_arm"]), code, start, last_gate, t))
        names = ("first_gate_us", "last_gate_us", "passage_us", "section_us", "unfinished_us", "other_us")
        rest = (int(state[n]) for n in names)
        counts = (int(state["n_pings"]), int(state["n_passages"]), 0, 0)
        self.rows["t"].append((v, END_REASONS.index(reason), *counts, start, t, *rest, 1000 * counts[0]))
        held = (state["is_held"], state["held_us"], state["t_us"], state["has_last"])
        clean = new_states(1)[0]
        for name in state.dtype.names:
            state[name] = clean[name]
        state["is_held"], state["held_us"], state["t_us"], state["has_last"] = held

    def found(self) -> Found:
        kinds = {"p": PASSAGE, "s": SECTION, "u": UNFINISHED, "t": TRIP}
        made = [np.array(self.rows[k], dtype=kind) for k, kind in kinds.items()]
        return Found(*made, self.dropped, self.n_used)


@dataclass(frozen=True)
class Corners:
    """What `put_network` reads of the streets."""

    node_lon_e7: Any
    node_lat_e7: Any
    class_names: tuple[str, ...]


@dataclass(frozen=True)
class Plan:
    """What `put_network` reads of a network."""

    streets: Corners
    tables: dict[str, pl.DataFrame]
    digest: str
    seen_side: str = "right"


def install(patch: Callable[[str, Any], None]) -> None:
    """Put the stand-in where ingest looks for the detector.

    Parameters
    ----------
    patch
        Sets an attribute by its dotted path, e.g. `monkeypatch.setattr`.
    """
    patch("stream.ingest.job.Detector", StandIn)
    patch("stream.network.streets_to_blobs", lambda _: {"class_names": b"road"})
    patch("stream.network.streets_from_blobs", lambda blobs: blobs)
    patch("stream.network.network_digest", _digest)


def _digest(_: Any, tables: dict[str, pl.DataFrame]) -> str:
    """Know the plan, as it is, by its name."""
    names = ("junction", "arm", "link", "movement", "zone")
    return "two junctions" if all(tables[n].equals(_as_stored(n)) for n in names) else "something else"


def _as_stored(table: str) -> pl.DataFrame:
    """Give a table of the plan with the columns and types of the store."""
    columns = statement(f"network/put_{table}").incoming
    return plan().tables[table].select(pl.col(name).cast(_TYPES[kind]) for name, kind in columns)


def plan(digest: str = "two junctions") -> Plan:
    """Give two junctions, `east` of each other, joined by one link and each with a stub."""
    corners = Corners(np.array([0, 100_000_000], np.int32), np.array([0, 100_000_000], np.int32), ("road",))
    arms = []
    for ix, (junction, arm) in enumerate([(0, 0), (0, 1), (1, 0), (1, 1)]):
        arms.append(
            {
                "arm_ix": ix,
                "junction_ix": junction,
                "junction_id": junction + 1,
                "arm": arm,
                "way_id": 70 + arm,
                "mouth_node_id": junction + 1,
                "bearing_deg": 90.0 + 180 * arm,
                "is_inbound": True,
                "is_outbound": True,
                "class": "road",
                "limit_kmh": KMH,
                "limit_in_kmh": KMH,
                "limit_out_kmh": KMH,
                "has_limit": True,
                "link_ix": 0 if arm == junction else 1 + junction,
                "link_m": 400.0,
                "entry_gate_m": GATE_M,
                "exit_gate_m": GATE_M,
                **{f"{g}_{c}{i}": 0.5 for g in ("entry", "exit") for c in ("lon", "lat") for i in (1, 2)},
            }
        )
    tables = {"arm": pl.DataFrame(arms), "junction": _junctions(), "movement": _movements()}
    links = [(0, 0, 2), (1, 1, -1), (2, 3, -1)]
    rest = {
        "length_m": 400.0,
        "class": "road",
        "limit_kmh": KMH,
        "middle_fwd_m": 280.0,
        "middle_back_m": 280.0,
    }
    rest |= {"is_open_fwd": True, "is_open_back": True, "lon": 1.0, "lat": 0.5, "zone": "east"}
    tables["link"] = pl.DataFrame(
        [{"link_ix": i, "arm_from_ix": a, "arm_to_ix": b, **rest} for i, a, b in links]
    )
    zone = {"zone_ix": 0, "zone": "east", "time_zone": "Europe/Helsinki", "driving_side": "right"}
    tables["zone"] = pl.DataFrame([zone])
    return Plan(corners, tables, digest)


def _junctions() -> pl.DataFrame:
    same = {"n_nodes": 1, "kind": "node", "control": "signals", "zone": "east", "driving_side": "right"}
    same |= {"time_zone": "Europe/Helsinki", "class": "road", "n_arms": 2}
    return pl.DataFrame(
        [
            {"junction_ix": i, "junction_id": i + 1, "lon": 0.5 + i, "lat": 0.5, "node_ids": [i + 1], **same}
            for i in (0, 1)
        ]
    )


def _movements() -> pl.DataFrame:
    same = {"inside_m": INSIDE_M, "is_banned": False, "is_timed": True}
    return pl.DataFrame(
        [
            {
                "junction_ix": j,
                "junction_id": j + 1,
                "arm_in": a,
                "arm_out": b,
                "arm_in_ix": 2 * j + a,
                "arm_out_ix": 2 * j + b,
                "turn_deg": 180.0 if a == b else 0.0,
                "maneuver": "reverse" if a == b else "through",
                **same,
            }
            for j in (0, 1)
            for a in (0, 1)
            for b in (0, 1)
        ]
    )
