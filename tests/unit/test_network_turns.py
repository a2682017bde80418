"""Turn restrictions and movements: what is forbidden, what is timed, what is left out and why."""

from pathlib import Path
from typing import Any

import numpy as np
import pytest

from stream.config import load_settings
from stream.network import Built
from stream.network.movements import maneuver_of
from tests.sketch import Sketch, cross
from tests.unit.test_network_junctions import dual, jog, ring

Turn = tuple[int, int]


def moves(built: Built) -> dict[Turn, dict[str, Any]]:
    """Give the movements by (way in, way out)."""
    way = built.tables["arm"]["way_id"].to_list()
    rows = built.tables["movement"].to_dicts()
    return {(way[r["arm_in_ix"]], way[r["arm_out_ix"]]): r for r in rows}


def banned(built: Built) -> set[Turn]:
    """Give the banned movements by (way in, way out)."""
    return {turn for turn, row in moves(built).items() if row["is_banned"]}


def timed(built: Built) -> set[Turn]:
    """Give the timed movements by (way in, way out)."""
    return {turn for turn, row in moves(built).items() if row["is_timed"]}


def marked(built: Built) -> set[tuple[int, int]]:
    """Give the successors marked as banned, by (way, way)."""
    s = built.streets
    edge = np.repeat(np.arange(len(s.succ_start) - 1), np.diff(s.succ_start))
    rows = np.flatnonzero(s.succ_banned)
    return {(int(s.road_way_id[edge[k] >> 1]), int(s.road_way_id[s.succ_edge[k] >> 1])) for k in rows}


def with_turn(value: str, came: int, goes: int, tags: dict[str, str] | None = None) -> Sketch:
    """Give a cross with one restriction via its node."""
    sketch = cross()
    sketch.turn(1, value, [("from", "w", came), ("via", "n", 1), ("to", "w", goes)], tags)
    return sketch


def test_crossing_has_all_movements(tmp_path: Path) -> None:
    """Four two-way arms give sixteen movements, four of them reversals, by the angles of the map."""
    found = moves(cross().build(tmp_path))
    assert len(found) == 16
    assert {t for t, row in found.items() if row["maneuver"] == "reverse"} == {
        (w, w) for w in (12, 13, 14, 15)
    }
    assert found[14, 12]["maneuver"] == "through"
    assert (found[14, 13]["maneuver"], found[14, 15]["maneuver"]) == ("right", "left")
    assert found[14, 13]["turn_deg"] == pytest.approx(90, abs=0.02)
    assert found[14, 15]["turn_deg"] == pytest.approx(-90, abs=0.02)
    assert {row["inside_m"] for row in found.values()} == {0.0}


def test_movements_keep_to_one_way_arms(tmp_path: Path) -> None:
    """Nobody enters by an exit, nor leaves by an entry."""
    sketch = cross()
    sketch.way(12, [1, 2], oneway="yes")
    sketch.way(13, [1, 3], oneway="-1")
    found = moves(sketch.build(tmp_path))
    assert {t[0] for t in found} == {13, 14, 15}
    assert {t[1] for t in found} == {12, 14, 15}


def test_no_turn_forbids_that_movement_alone(tmp_path: Path) -> None:
    """no_left_turn from the south to the west bans it, on the edge as well."""
    built = with_turn("no_left_turn", 14, 15).build(tmp_path)
    assert banned(built) == {(14, 15)}
    assert marked(built) == {(14, 15)}
    assert built.report["restrictions"] == {"built": 1, "over_links": 0}


def test_only_turn_forbids_all_others(tmp_path: Path) -> None:
    """only_straight_on from the south leaves north; east, west and back are banned."""
    built = with_turn("only_straight_on", 14, 12).build(tmp_path)
    assert banned(built) == {(14, 13), (14, 15), (14, 14)}
    assert marked(built) == banned(built)


def test_no_u_turn_forbids_turning_back(tmp_path: Path) -> None:
    """From-way and to-way are the same way: only the reversal is banned."""
    assert banned(with_turn("no_u_turn", 14, 14).build(tmp_path)) == {(14, 14)}


def test_no_entry_and_no_exit_have_several_members(tmp_path: Path) -> None:
    """no_entry has several from-ways, no_exit several to-ways; each pair is banned."""
    sketch = cross()
    sketch.turn(1, "no_entry", [("from", "w", 12), ("from", "w", 14), ("via", "n", 1), ("to", "w", 13)])
    sketch.turn(2, "no_exit", [("from", "w", 15), ("via", "n", 1), ("to", "w", 12), ("to", "w", 14)])
    assert banned(sketch.build(tmp_path)) == {(12, 13), (14, 13), (15, 12), (15, 14)}


def test_conditional_restriction_is_timed_not_banned(tmp_path: Path) -> None:
    """What holds at times only is kept apart, and marks no edge."""
    tags = {"restriction:conditional": "no_left_turn @ (Mo-Fr 07:00-09:00)"}
    built = with_turn("", 14, 15, tags).build(tmp_path)
    assert (banned(built), timed(built), marked(built)) == (set(), {(14, 15)}, set())


def test_restriction_of_others_bans_nothing(tmp_path: Path) -> None:
    """Lorries' restrictions and those that exempt cars leave cars free, and are counted."""
    sketch = with_turn("", 14, 15, {"restriction:hgv": "no_left_turn"})
    sketch.turn(
        2, "no_right_turn", [("from", "w", 14), ("via", "n", 1), ("to", "w", 13)], {"except": "motorcar"}
    )
    built = sketch.build(tmp_path)
    assert banned(built) == set()
    assert built.report["restrictions_left_out"] == {"cars_exempt": 1, "other_vehicles": 1}


@pytest.mark.parametrize(
    ("members", "reason"),
    [
        ([("from", "w", 14), ("via", "n", 99), ("to", "w", 15)], "left_out_members_missing"),
        ([("from", "w", 99), ("via", "n", 1), ("to", "w", 15)], "left_out_members_missing"),
        ([("from", "w", 14), ("via", "n", 1), ("to", "w", 99)], "left_out_members_missing"),
        ([("from", "w", 14), ("via", "n", 2), ("to", "w", 12)], "left_out_not_connected"),
    ],
)
def test_restriction_that_fits_nothing_is_counted(
    tmp_path: Path, members: list[tuple[str, str, int]], reason: str
) -> None:
    """Members outside the extract or not joined ban nothing; the report says so."""
    sketch = cross()
    sketch.turn(1, "no_left_turn", members)
    built = sketch.build(tmp_path)
    assert banned(built) == set()
    assert built.report["restrictions"][reason] == 1


def test_way_that_passes_through_is_ambiguous(tmp_path: Path) -> None:
    """A from-way not split at the via node could mean two approaches: nothing is guessed."""
    sketch = cross()
    sketch.way(14, [4, 1, 2])
    sketch.way(12, [2, 4], {"highway": "footway"})
    sketch.turn(1, "no_left_turn", [("from", "w", 14), ("via", "n", 1), ("to", "w", 15)])
    built = sketch.build(tmp_path)
    assert banned(built) == set()
    assert built.report["restrictions"]["left_out_ambiguous"] == 1


def test_inside_path_runs_between_the_mouths(tmp_path: Path) -> None:
    """Across a dual carriageway 15 m wide: right 0 m, through 15 m, left 30 m, round 30 and more."""
    found = moves(dual(15.0).build(tmp_path))
    from_south = {out: row["inside_m"] for (came, out), row in found.items() if came == 204}
    assert from_south == pytest.approx({106: 0, 206: 15, 103: 30, 203: 45}, abs=0.02)
    assert (found[204, 203]["maneuver"], found[204, 203]["turn_deg"]) == (
        "reverse",
        pytest.approx(180, abs=0.2),
    )


def test_restriction_inside_a_cluster_bans_the_movement(tmp_path: Path) -> None:
    """No left turn where the road through the middle meets the far carriageway bans left and reversal."""
    sketch = dual(15.0)
    sketch.turn(1, "no_left_turn", [("from", "w", 205), ("via", "n", 2), ("to", "w", 102)])
    built = sketch.build(tmp_path)
    assert banned(built) == {(204, 103), (204, 203), (104, 103)}
    assert (205, 102) in marked(built)


def test_restriction_over_a_way_bans_the_movement(tmp_path: Path) -> None:
    """No u-turn from one carriageway to the other over the short road between them (via way)."""
    sketch = dual(15.0)
    sketch.turn(1, "no_u_turn", [("from", "w", 101), ("via", "w", 102), ("via", "w", 202), ("to", "w", 105)])
    built = sketch.build(tmp_path)
    assert banned(built) == {(101, 106)}
    assert marked(built) == set()
    assert not moves(built)[101, 203]["is_banned"]


def test_only_restriction_over_a_way_leaves_one_exit(tmp_path: Path) -> None:
    """only_straight_on from the south over the middle road: left behind it is banned, ahead is not."""
    sketch = dual(15.0)
    sketch.turn(1, "only_straight_on", [("from", "w", 204), ("via", "w", 205), ("to", "w", 206)])
    built = sketch.build(tmp_path)
    assert banned(built) == {(204, 103), (204, 203)}
    assert not moves(built)[104, 103]["is_banned"]


def test_restriction_over_a_link_is_counted(tmp_path: Path) -> None:
    """Over a road between two junctions no movement of one junction can hold it."""
    sketch = jog(100)
    sketch.way(10, [3, 1], {"highway": "primary"})
    sketch.way(13, [1, 2], {"highway": "primary"})
    sketch.way(14, [2, 4], {"highway": "primary"})
    sketch.turn(1, "no_right_turn", [("from", "w", 11), ("via", "w", 13), ("to", "w", 12)])
    built = sketch.build(tmp_path)
    assert banned(built) == set()
    assert built.report["restrictions"] == {"built": 1, "over_links": 1}


def test_movement_stays_free_where_another_path_is_legal(tmp_path: Path) -> None:
    """In a jog with two parallel short roads, a ban on one leaves the other."""
    sketch = jog(20)
    sketch.way(10, [3, 1], {"highway": "primary"})
    sketch.way(13, [1, 2], {"highway": "primary"})
    sketch.way(14, [2, 4], {"highway": "primary"})
    sketch.nodes({9: (10, 6)})
    sketch.way(15, [1, 9, 2], {"highway": "primary"})
    sketch.turn(1, "no_straight_on", [("from", "w", 10), ("via", "n", 1), ("to", "w", 13)])
    row = moves(sketch.build(tmp_path))[10, 14]
    assert not row["is_banned"]
    assert row["inside_m"] == pytest.approx(2 * np.hypot(10, 6), abs=0.02)


@pytest.mark.parametrize(("clockwise", "right_m", "left_m"), [(False, 0.25, 0.75), (True, 0.75, 0.25)])
def test_ring_paths_go_round_as_driven(
    tmp_path: Path, clockwise: bool, right_m: float, left_m: float
) -> None:
    """From the south: right is a quarter of the ring driving on the right, left three; back is all."""
    sketch = ring(clockwise=clockwise)
    found = moves(sketch.build(tmp_path))
    around = 8 * 2 * 15.0 * np.sin(np.pi / 8)
    got = {out: found[203, out]["inside_m"] / around for out in (200, 201, 202, 203)}
    assert got == pytest.approx({200: right_m, 201: 0.5, 202: left_m, 203: 1.0}, abs=1e-3)
    assert [found[203, out]["maneuver"] for out in (200, 201, 202, 203)] == [
        "right",
        "through",
        "left",
        "reverse",
    ]


@pytest.mark.parametrize(
    ("angle", "name"),
    [
        (0, "through"),
        (24.9, "through"),
        (25, "slight_right"),
        (-54.9, "slight_left"),
        (55, "right"),
        (-125, "sharp_left"),
        (159.9, "sharp_right"),
        (160, "reverse"),
        (-160, "reverse"),
        (180, "reverse"),
    ],
)
def test_angle_on_a_limit_belongs_to_the_next_class(angle: float, name: str) -> None:
    """Limits of DESIGN section 2: through < 25, slight < 55, plain < 125, sharp < 160, then reverse."""
    assert maneuver_of(angle, load_settings().maneuver) == name
