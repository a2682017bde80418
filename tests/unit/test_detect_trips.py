"""Trips: gaps, dwells, parked vehicles, waiting between gates, and the pings kept of them; against lists."""

import itertools
from typing import Any

import numpy as np
import pytest
from hypothesis import given, reject
from hypothesis import settings as hypothesis_settings
from hypothesis import strategies as st

from stream.config import load_settings
from stream.detect.carry import MAX_KEPT, new_states
from stream.detect.clean import scale_at
from stream.detect.run import Detector
from stream.detect.trips import begin_trip, drop_kept, keep_ping
from stream.network.routes import build_index
from tests.grid import Row, columns, detect, drive, end_s, endings, joined, reasons, row, stand, trips_of
from tests.oracle.ground import apart_m, e7
from tests.oracle.runs import split_trips
from tests.oracle.streets import grid_streets

SETTINGS = load_settings()
BLOCK = 400.0  # gates 60 m before and 40 m behind each crossing: the middle of a block is far from any
STREETS = grid_streets(3, BLOCK)
INDEX = build_index(STREETS, 40.0, 1.0, 5.0, 3.0)
OUTSIDE, INSIDE = (200.0, 600.0), (385.0, 415.0)


@pytest.fixture(scope="module")
def detector() -> Detector:
    """Give a detector on one thread."""
    return Detector(STREETS, SETTINGS, threads=1)


def test_gap_at_the_limit_goes_on(detector: Detector) -> None:
    """A silence of max_gap_s is none; a microsecond more ends the trip at the ping before it."""
    first = [row(k, 10.0 * k, BLOCK) for k in range(4)]
    at = detect(detector, [*first, row(123, 40.0, BLOCK)])
    assert trips_of(at) == [(first[0][0], row(123, 0, 0)[0], 5, "close")]
    over = row(123.000001, 40.0, BLOCK)
    beyond = detect(detector, [*first, over])
    assert trips_of(beyond) == [(first[0][0], first[3][0], 4, "gap"), (over[0], over[0], 1, "close")]


def test_dwell_between_junctions_ends_the_trip_where_it_began(detector: Detector) -> None:
    """A stand of dwell_s ends the trip at its first ping; the ping that shows it is the trip's last."""
    moving = drive([(60.0, BLOCK), (200.0, BLOCK)])
    found = detect(detector, moving + stand((200.0, BLOCK), end_s(moving), 600.0))
    # Stays begin at 60, 100, 140 and 180 m, each with the first ping over 35 m from the one before: the last
    # at 12 s. The stand's pings come at 19, 24, ... s; the one at 314 s is the first 300 s later.
    assert trips_of(found) == [(moving[0][0], moving[12][0], 15 + 60, "dwell")]
    assert endings(found) == ["dwell"]


def test_parked_vehicle_begins_a_trip_when_it_leaves_the_place(detector: Detector) -> None:
    """Parked pings belong to no trip, whatever the silences; the last one seen not long before begins one."""
    parked = [*stand((200.0, BLOCK), 0.0, 305.0), row(2000, 210.0, BLOCK), row(9000, 180.0, BLOCK)]
    found = detect(detector, [*parked, row(9010, 236.0, BLOCK), row(9011, 246.0, BLOCK)])
    assert endings(found) == ["dwell", "close"]
    assert found.trips["trip_start_us"].tolist() == [row(5, 0, 0)[0], row(9000, 0, 0)[0]]
    assert found.trips["n_pings"].tolist()[1] == 3
    assert found.n_used == len(parked) + 2
    later = detect(detector, [*parked, row(9130, 236.0, BLOCK), row(9131, 246.0, BLOCK)])
    assert later.trips["trip_start_us"].tolist()[1] == row(9130, 0, 0)[0]
    assert later.n_used == len(parked) + 2


def test_waiting_between_gates_is_no_dwell_until_max_passage(detector: Detector) -> None:
    """Inside a junction's gates a stand may last max_passage_s; then the passage times out."""
    to = drive([(200.0, BLOCK), (385.0, BLOCK)])
    from_s = end_s(to)
    patient = to + stand((385.0, BLOCK), from_s, 890.0)
    patient += drive([(385.0, BLOCK), (600.0, BLOCK)], start_s=end_s(patient) + 1)
    found = detect(detector, patient)
    assert endings(found) == ["close"]
    assert len(found.passages) == 1
    too_long = detect(detector, to + stand((385.0, BLOCK), from_s, 950.0))
    assert endings(too_long) == ["dwell"]
    assert reasons(too_long) == ["timeout"]


def test_creeping_out_of_the_radius_is_no_dwell(detector: Detector) -> None:
    """A vehicle that gets 36 m on every few minutes never dwells."""
    rows = list(itertools.chain(*(stand((100.0 + 36.0 * k, BLOCK), 290.0 * k, 290.0) for k in range(6))))
    assert endings(detect(detector, rows)) == ["close"]


ACT = st.one_of(
    st.tuples(st.just("to"), st.sampled_from(OUTSIDE + INSIDE), st.just(0)),
    st.tuples(st.just("stand"), st.just(0.0), st.sampled_from([30, 250, 295, 300, 320, 880, 940])),
    st.tuples(st.just("gap"), st.just(0.0), st.sampled_from([100, 120, 121, 500])),
)


def is_inside(point: tuple[int, int]) -> bool:
    """Tell where the stands are; a run that asks about places on the way is not judged."""
    if any(apart_m(point, e7(*row(0, x, BLOCK)[1:])) < 90.0 for x in OUTSIDE):
        return False
    if not any(apart_m(point, e7(*row(0, x, BLOCK)[1:])) < 0.1 for x in INSIDE):
        reject()
    return True


@hypothesis_settings(deadline=None, max_examples=60)
@given(st.lists(ACT, min_size=1, max_size=12))
def test_trips_of_whole_runs_are_those_of_plain_lists(
    detector: Detector, acts: list[tuple[str, float, int]]
) -> None:
    """Starts, ends, pings and reasons of a vehicle's trips are those of the plain rules."""
    here = 200.0
    rows: list[Row] = [row(0, here, BLOCK)]
    for what, to, seconds in acts:
        if what == "to" and to != here:
            rows += drive([(here, BLOCK), (to, BLOCK)], start_s=end_s(rows) + 1)
            here = to
        elif what == "stand":
            rows += stand((here, BLOCK), end_s(rows), seconds)
        elif what == "gap":
            rows.append(row(end_s(rows) + seconds, here, BLOCK))
    fixes = [(t_us, e7(lon, lat)) for t_us, lon, lat in rows]
    plain = split_trips([fixes], SETTINGS, is_inside)
    found = detect(detector, rows)
    assert plain == trips_of(found)
    assert found.n_used == len(rows)


def plain_kept(rows: list[tuple[int, tuple[int, int]]], keep_m: float) -> list[dict[str, Any]]:
    """Keep pings as lists do: a ping nearer than keep_m to the last kept one's arrival extends its stay."""
    kept: list[dict[str, Any]] = []
    for t_us, place in rows:
        if kept and apart_m(kept[-1]["at"], place) < keep_m:
            last = kept[-1]
            last["step_ms"] = max(last["step_ms"], (t_us - last["leave_us"]) // 1000)
            last.update(leave_us=t_us, left=place, n=last["n"] + 1)
        else:
            kept.append(
                {"at": place, "left": place, "arrive_us": t_us, "leave_us": t_us, "n": 1, "step_ms": 0}
            )
    return kept


def kept_of(states: Any) -> list[dict[str, Any]]:
    """Give a record's kept pings as the twin does."""
    s, n = states[0], int(states["n_kept"][0])
    return [
        {
            "at": (int(s["kept_lon"][k]), int(s["kept_lat"][k])),
            "left": (int(s["left_lon"][k]), int(s["left_lat"][k])),
            "arrive_us": int(s["arrive_us"][k]),
            "leave_us": int(s["leave_us"][k]),
            "n": int(s["kept_n"][k]),
            "step_ms": int(s["kept_step_ms"][k]),
        }
        for k in range(n)
    ]


def walked(seed: int, n: int) -> list[tuple[int, tuple[int, int]]]:
    """Give a jittering walk with uneven steps of time."""
    rng = np.random.default_rng(seed)
    t_us = np.cumsum(rng.integers(1, 9_000_000, n)).tolist()
    east, north = np.cumsum(rng.normal(0.0, 2.0, n)).tolist(), np.cumsum(rng.normal(0.0, 2.0, n)).tolist()
    return [
        (t, e7(5.0 + x / 68_000.0, 52.0 + y / 111_000.0)) for t, x, y in zip(t_us, east, north, strict=True)
    ]


@pytest.mark.parametrize("seed", range(4))
def test_kept_pings_are_stays_of_plain_lists(seed: int) -> None:
    """Arrival, leave, count and largest silence of each kept ping are those of a plain list of stays."""
    walk = walked(seed, 120)
    states = new_states(1)
    begin_trip(states[0], walk[0][0], *walk[0][1])
    kept_new = []
    for t_us, place in walk:
        before = int(states["n_kept"][0])
        assert before < MAX_KEPT
        kept_new.append(keep_ping(states[0], t_us, *place, *scale_at(INDEX, place[1]), 4.0))
        assert kept_new[-1] == (int(states["n_kept"][0]) == before + 1)
    assert plain_kept(walk, 4.0) == kept_of(states)
    assert sum(kept_new) == len(plain_kept(walk, 4.0)) > 10


@pytest.mark.parametrize(("n_columns", "base"), [(0, None), (1, 0), (1, 1), (1, 7), (3, 5)])
def test_kept_pings_before_the_committed_anchor_are_dropped(n_columns: int, base: int | None) -> None:
    """All but one before the committed anchor go (all but the last two without one); places stay in step."""
    walk = walked(9, 60)
    states = new_states(1)
    begin_trip(states[0], walk[0][0], *walk[0][1])
    for t_us, place in walk:
        keep_ping(states[0], t_us, *place, *scale_at(INDEX, place[1]), 4.0)
    kept = plain_kept(walk, 4.0)
    columns = [base + 2 * k for k in range(n_columns)] if base is not None else []
    states["n_columns"] = n_columns
    states["column_kept"][0, :n_columns] = columns
    states["anchor"] = columns[-1] if columns else 3
    drop_kept(states[0])
    gone = max((base if base is not None else len(kept) - 1) - 1, 0)
    assert kept[gone:] == kept_of(states)
    assert [k - gone for k in columns] == states["column_kept"][0, :n_columns].tolist()
    assert max((columns[-1] if columns else 3) - gone, -1) == states["anchor"][0]


def test_close_twice_gives_nothing_more(detector: Detector) -> None:
    """After close nothing is open: a second close is empty, and later pings begin a trip of their own."""
    states = new_states(1)
    rows = drive([(60.0, BLOCK), (200.0, BLOCK)])
    first = joined([detector.feed(states, *columns(rows)), detector.close(states)])
    again = detector.close(states)
    assert (len(first.trips), len(again.trips), again.n_used) == (1, 0, 0)
    later = drive([(210.0, BLOCK), (300.0, BLOCK)], start_s=end_s(rows) + 1)
    more = joined([detector.feed(states, *columns(later)), detector.close(states)])
    assert trips_of(more) == [(later[0][0], later[-1][0], len(later), "close")]
