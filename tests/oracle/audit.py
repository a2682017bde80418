"""What must hold of whatever detection gives: counts, junctions, order in time, and time that adds up."""

from itertools import pairwise
from typing import Any

from stream.detect.records import END_REASONS, UNFINISHED_REASONS, Found
from stream.network.model import Streets


def plain(rows: Any) -> list[dict[str, Any]]:
    """Turn records into dicts."""
    return [{name: row[name].item() for name in rows.dtype.names} for row in rows]


def check_counts(found: Found, n_rows: int, n_held: int) -> None:
    """Each row is used, dropped for one reason, or held."""
    assert found.n_used + int(found.dropped.sum()) + n_held == n_rows
    assert found.n_used >= 0
    assert min(found.dropped.tolist()) >= 0


def check_all(found: Found, streets: Streets) -> None:
    """Check what vehicles gave from first to last, closed."""
    junction = streets.arm_junction.tolist()
    trips = plain(found.trips)
    by_vehicle: dict[int, list[dict[str, Any]]] = {}
    for trip in trips:
        by_vehicle.setdefault(trip["vehicle_ix"], []).append(trip)
    for theirs in by_vehicle.values():
        theirs.sort(key=lambda t: (t["trip_start_us"], t["end_us"]))
        for a, b in pairwise(theirs):
            assert a["end_us"] <= b["trip_start_us"], "trips overlap"
    keys = {(t["vehicle_ix"], t["trip_start_us"]): t for t in trips}
    assert len(keys) == len(trips), "two trips of one vehicle begin at once"
    parts: dict[tuple[int, int], list[tuple[int, int, str]]] = {key: [] for key in keys}
    for row in plain(found.passages):
        assert junction[row["arm_in_ix"]] == junction[row["arm_out_ix"]]
        assert row["entry_us"] <= row["exit_us"]
        assert 0 <= row["slow_ms"] * 1000 <= row["exit_us"] - row["entry_us"]
        assert row["n_pings"] >= 0 <= row["max_step_ms"]
        assert row["timing_error_ms"] > 0.0 <= row["entry_speed_mps"] < 1e3
        assert 0.0 <= row["inside_m"] < 1e5
        assert row["is_queued_at_gate"] in (0, 1)
        key = (row["vehicle_ix"], row["trip_start_us"])
        parts[key].append((row["entry_us"], row["exit_us"], "passage"))
    for row in plain(found.sections):
        assert row["from_us"] <= row["to_us"]
        assert row["path_m"] > -1e-6
        assert row["max_step_ms"] >= 0
        key = (row["vehicle_ix"], row["trip_start_us"])
        parts[key].append((row["from_us"], row["to_us"], "section"))
    for row in plain(found.unfinished):
        assert row["entry_us"] <= row["last_us"]
        assert row["reason"] in range(len(UNFINISHED_REASONS))
        trip = keys[row["vehicle_ix"], row["trip_start_us"]]
        assert trip["first_gate_us"] <= row["entry_us"] <= trip["last_gate_us"]
        assert row["last_us"] <= trip["end_us"]
    for key, trip in keys.items():
        check_trip(trip, sorted(parts[key]))


def check_trip(trip: dict[str, Any], parts: list[tuple[int, int, str]]) -> None:
    """Check one trip against its passages and sections."""
    for (_, end, _), (start, _, _) in pairwise(parts):
        assert end <= start, "passages or sections of a vehicle overlap"
    assert trip["end_reason"] in range(len(END_REASONS))
    assert trip["trip_start_us"] <= trip["end_us"]
    assert trip["n_pings"] >= 1
    assert trip["path_mm"] >= 0
    assert trip["n_passages"] == sum(what == "passage" for _, _, what in parts)
    spent = {name: trip[f"{name}_us"] for name in ("passage", "section", "unfinished", "other")}
    assert min(spent.values()) >= 0
    if trip["first_gate_us"] < 0:
        assert (sum(spent.values()), parts, trip["last_gate_us"]) == (0, [], -1)
        return
    assert trip["trip_start_us"] <= trip["first_gate_us"] <= trip["last_gate_us"] <= trip["end_us"]
    assert trip["last_gate_us"] - trip["first_gate_us"] == sum(spent.values())
    for name in ("passage", "section"):
        assert spent[name] == sum(end - start for start, end, what in parts if what == name)
    if parts:
        assert trip["first_gate_us"] <= parts[0][0]
        assert parts[-1][1] <= trip["last_gate_us"]
