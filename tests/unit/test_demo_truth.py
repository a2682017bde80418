"""True passages against positions and times worked out by hand."""

import numpy as np
import polars as pl
import pytest

from stream.demo.roads import metres_per_degree
from stream.demo.track import Tracks
from stream.demo.truth import true_passages

K_LON, K_LAT = (float(k[0]) for k in metres_per_degree(np.array([50.0])))


def track(corners, knots, nodes):
    """Make one track: corners (east, north) in m, knots (s, m), nodes (id, m)."""
    east, north = np.array(corners, float).T
    point_m = np.concatenate([[0.0], np.cumsum(np.hypot(np.diff(east), np.diff(north)))])
    seconds, place = np.array(knots, float).T
    return Tracks(
        names=("van",),
        vehicle_ix=np.zeros(1, np.int32),
        node_start=np.array([0, len(nodes)]),
        node_id=np.array([n for n, _ in nodes], np.int64),
        node_lon=np.zeros(len(nodes)),
        node_lat=np.zeros(len(nodes)),
        node_m=np.array([m for _, m in nodes], float),
        step_way=np.ones(len(nodes), np.int64),
        point_start=np.array([0, point_m.size]),
        point_lon=10.0 + east / K_LON,
        point_lat=50.0 + north / K_LAT,
        point_m=point_m,
        time_start=np.array([0, seconds.size]),
        t_us=np.round(seconds * 1e6).astype(np.int64),
        s_m=place,
    )


def arms(*rows):
    """Make the arm table from (junction, arm, mouth, bearing, entry gate, exit gate, limit)."""
    return pl.DataFrame(
        [
            {
                "junction_id": j,
                "arm": a,
                "mouth_node_id": mouth,
                "bearing_deg": float(bearing),
                "is_inbound": True,
                "is_outbound": True,
                "entry_gate_m": entry,
                "exit_gate_m": exit_,
                "limit_in_kmh": kmh,
                "limit_out_kmh": kmh,
            }
            for j, a, mouth, bearing, entry, exit_, kmh in rows
        ]
    )


def junctions(members):
    """Make the junction table from {id: nodes}."""
    return pl.DataFrame({"junction_id": list(members), "node_ids": list(members.values())}).with_columns(
        zone=pl.lit("here")
    )


CROSS = arms(
    (7, 0, 7, 0, 60.0, 40.0, 36.0), (7, 1, 7, 90, 60.0, 40.0, 36.0), (7, 2, 7, 270, 50.0, 30.0, 72.0)
)
ONE = junctions({7: [7]})


def test_left_turn_is_timed_at_its_gates():
    """From the west to the north at 10 m/s with 20 s of standing 5 m before the node.

    Node at 300 m; entry gate at 250 m (25.0 s), exit gate at 340 m: 34 s of driving and 20 s of standing.
    Unimpeded: 50 m at 20 m/s, 40 m at 10 m/s, nothing inside.
    """
    one = track(
        [(-300, 0), (0, 0), (0, 300)], [(0, 0), (29.5, 295), (49.5, 295), (80, 600)], [(7, 300.0), (8, 550.0)]
    )
    moves = pl.DataFrame({"junction_id": [7], "arm_in": [2], "arm_out": [0], "maneuver": ["left"]})
    got = true_passages(one, CROSS, ONE, moves).to_dicts()
    assert len(got) == 1
    row = got[0]
    assert (row["vehicle"], row["junction_id"], row["arm_in"], row["arm_out"]) == ("van", 7, 2, 0)
    assert (row["maneuver"], row["zone"]) == ("left", "here")
    assert (row["entry_us"], row["exit_us"]) == (25_000_000, 54_000_000)
    assert row["traversal_ms"] == 29_000
    assert row["unimpeded_ms"] == 2500 + 4000
    assert row["delay_ms"] == 29_000 - 6500
    assert row["stood_near_gate"] is False


def test_gate_beyond_the_tracks_ends_gives_no_passage():
    """A trip that starts after the entry gate, or ends before the exit gate, has no passage."""
    late = track([(-49, 0), (0, 0), (0, 300)], [(0, 0), (34.9, 349)], [(7, 49.0)])
    early = track([(-300, 0), (0, 0), (0, 39)], [(0, 0), (33.9, 339)], [(7, 300.0)])
    assert true_passages(late, CROSS, ONE).height == 0
    assert true_passages(early, CROSS, ONE).height == 0
    whole = track([(-51, 0), (0, 0), (0, 41)], [(0, 0), (9.2, 92)], [(7, 51.0)])
    assert true_passages(whole, CROSS, ONE).height == 1


def test_arm_without_gate_gives_no_passage():
    """An arm too short for a gate ends no passage."""
    bare = CROSS.with_columns(exit_gate_m=pl.when(pl.col("arm") == 0).then(None).otherwise("exit_gate_m"))
    one = track([(-300, 0), (0, 0), (0, 300)], [(0, 0), (60, 600)], [(7, 300.0)])
    assert true_passages(one, bare, ONE).height == 0


def test_reversal_at_a_node_leaves_by_the_arm_it_came():
    """Turning round at the node: arm out is arm in, 50 m before to 30 m behind."""
    one = track([(-300, 0), (0, 0), (-300, 0)], [(0, 0), (60, 600)], [(7, 300.0)])
    row = true_passages(one, CROSS, ONE).to_dicts()[0]
    assert (row["arm_in"], row["arm_out"]) == (2, 2)
    assert row["traversal_ms"] == 8000


def test_return_from_a_dead_end_is_a_second_passage():
    """Out to a dead end 200 m north and back through the same node: two passages."""
    one = track(
        [(-300, 0), (0, 0), (0, 200), (0, 0), (300, 0)],
        [(0, 0), (100, 1000)],
        [(7, 300.0), (9, 500.0), (7, 700.0)],
    )
    got = true_passages(one, CROSS, ONE)
    assert got["arm_in"].to_list() == [2, 0]
    assert got["arm_out"].to_list() == [0, 1]
    assert got["entry_us"].to_list() == [25_000_000, 64_000_000]


def test_cluster_is_passed_once():
    """Two nodes 20 m apart are one junction: entry at the first mouth, exit at the last, 20 m inside."""
    pair = arms(
        (7, 0, 8, 90, 60.0, 40.0, 36.0), (7, 1, 7, 270, 60.0, 40.0, 36.0), (7, 2, 8, 0, 60.0, 40.0, 36.0)
    )
    one = track([(-300, 0), (320, 0)], [(0, 0), (62, 620)], [(7, 300.0), (8, 320.0)])
    row = true_passages(one, pair, junctions({7: [7, 8]})).to_dicts()[0]
    assert (row["arm_in"], row["arm_out"]) == (1, 0)
    assert row["traversal_ms"] == 12_000
    assert row["unimpeded_ms"] == 12_000
    assert row["inside_m"] == pytest.approx(20.0)


def test_shape_node_inside_a_ring_does_not_cut_the_passage():
    """A ring's shape node that belongs to no junction lies inside the passage."""
    ring = arms((7, 0, 8, 90, 60.0, 40.0, 36.0), (7, 1, 7, 270, 60.0, 40.0, 36.0))
    one = track(
        [(-300, 0), (0, 0), (15, -15), (30, 0), (330, 0)],
        [(0, 0), (64.2426407, 642.426407)],
        [(7, 300.0), (70, 321.2132034), (8, 342.4264069)],
    )
    got = true_passages(one, ring, junctions({7: [7, 8]}))
    assert got.height == 1
    assert got["inside_m"][0] == pytest.approx(42.4264069)


def test_standing_by_a_gate_is_marked():
    """Two seconds of standing 8 m before the entry gate are marked, 12 m before it not."""
    for stop, expected in ((242.0, True), (238.0, False)):
        knots = [(0, 0), (stop / 10, stop), (stop / 10 + 2, stop), (62, 600)]
        one = track([(-300, 0), (0, 0), (0, 300)], knots, [(7, 300.0)])
        assert true_passages(one, CROSS, ONE)["stood_near_gate"].to_list() == [expected]
