"""Following the road: what is committed online against a Viterbi over the whole run; its parts, by hand."""

from typing import Any

import numpy as np
import pytest

from stream.config import Settings, load_settings
from stream.detect.candidates import PLACES
from stream.detect.carry import MAX_SURVIVORS, new_states
from stream.detect.clean import scale_at
from stream.detect.follow import agreed_column, ancestor, choose, extend, rebase, trace
from stream.detect.parameters import parameters
from stream.detect.records import Found, new_record
from stream.detect.room import COLUMN
from stream.detect.run import Detector
from stream.detect.search import ROUTES, forget
from stream.detect.trips import begin_trip, keep_ping
from stream.network.model import Streets
from stream.network.routes import build_index
from tests.grid import Row, columns, drive, joined, lon_lat, reasons
from tests.oracle.ground import apart_m, e7
from tests.oracle.streets import close_edges, grid_streets
from tests.oracle.ways import Spot, Ways

SETTINGS = load_settings()
SPACING = 150.0
STREETS = grid_streets(5, SPACING)
INDEX = build_index(STREETS, 40.0, 1.0, 5.0, 3.0)
# Places in the twin may be centimetres off: its metres are its own (see test_detect_places.py).
NEAR_M = 0.05
SPARSE = [(10.0, 10.0), (4.0, 10.0), (12.0, 15.0), (9.0, 30.0), (13.0, 20.0)]  # speed, interval


def wander(rng: np.random.Generator, legs: int, back: float) -> list[tuple[float, float]]:
    """Choose a way along the grid from crossing to crossing, back with some probability."""
    x, y = int(rng.integers(5)), int(rng.integers(5))
    out = [(x, y)]
    for _ in range(legs):
        moves = [(x + 1, y), (x - 1, y), (x, y + 1), (x, y - 1)]
        moves = [m for m in moves if 0 <= m[0] < 5 and 0 <= m[1] < 5]
        ahead = [m for m in moves if len(out) < 2 or m != out[-2] or rng.random() < back]
        x, y = ahead[int(rng.integers(len(ahead)))]
        out.append((x, y))
    return [(SPACING * x, SPACING * y) for x, y in out]


def journey(
    seed: int, speed_mps: float, every_s: float, noise_m: float = 5.0, back: float = 0.0
) -> list[Row]:
    """Give the pings of a random drive; it starts and ends in the middle of a block.

    Turning back makes ties: the same path with the turn counted before or after a ping.
    """
    rng = np.random.default_rng(seed)
    corners = wander(rng, 14, back)
    for end, toward in ((0, 1), (-1, -2)):
        corners[end] = tuple((a + b) / 2 for a, b in zip(corners[end], corners[toward], strict=True))
    return drive(corners, speed_mps, every_s, noise_m=noise_m, seed=seed)


def committed(detector: Detector, rows: list[Row]) -> tuple[dict[int, Spot], Found]:
    """Feed pings one by one: the committed place by the time of its ping, seen after each; and all found."""
    states = new_states(1)
    seen: dict[int, Spot] = {}
    parts = []
    for ping in rows:
        parts.append(detector.feed(states, *columns([ping])))
        s = states[0]
        if s["is_placed"] and s["n_columns"]:
            t_us = int(s["arrive_us"][s["column_kept"][0]])
            spot = (int(s["at_edge"][0, 0]), float(s["at_m"][0, 0]))
            assert seen.setdefault(t_us, spot) == spot, "a committed place has changed"
    return seen, joined([*parts, detector.close(states)])


def compare(streets: Streets, detector: Detector, settings: Settings, rows: list[Row]) -> tuple[int, int]:
    """Compare the run with the twin's; give how many places were seen committed, and how many anchors are."""
    ways = Ways(streets, settings)
    chain = ways.match([(t_us, e7(lon, lat)) for t_us, lon, lat in rows])
    seen, found = committed(detector, rows)
    assert len(found.trips) == 1
    assert (found.trips["n_caps"][0], found.trips["n_breaks"][0]) == (0, 0)
    plain = {fix[0]: spot for fix, _, spot in chain}
    for t_us, (edge, at_m) in seen.items():
        if plain[t_us][0] == edge:
            assert abs(plain[t_us][1] - at_m) < NEAR_M
        else:  # the end of one edge and the start of the next are one place, at one price
            assert apart_m(ways.point(plain[t_us]), ways.point((edge, at_m))) < NEAR_M
    steps = ways.path(chain)
    done, left = ways.passages(steps)
    assert done == list(
        zip(found.passages["arm_in_ix"].tolist(), found.passages["arm_out_ix"].tolist(), strict=True)
    )
    assert left == list(zip(found.unfinished["arm_in_ix"].tolist(), reasons(found), strict=True))
    path_m = sum(high - low for pieces in steps for _, low, high in pieces)
    assert abs(path_m - found.trips["path_mm"][0] / 1000.0) < NEAR_M
    return len(seen), len(chain)


@pytest.fixture(scope="module")
def detector() -> Detector:
    """Give a detector on one thread."""
    return Detector(STREETS, SETTINGS, threads=1)


@pytest.mark.parametrize(("speed_mps", "every_s"), SPARSE)
def test_committed_chain_is_that_of_a_whole_viterbi(
    detector: Detector, speed_mps: float, every_s: float
) -> None:
    """Committed online or found at the end: the same edges and places, path, passages and reasons."""
    counts = [compare(STREETS, detector, SETTINGS, journey(seed, speed_mps, every_s)) for seed in range(8)]
    assert sum(seen for seen, _ in counts) > 0.4 * sum(n for _, n in counts) > 20


@pytest.mark.parametrize(("speed_mps", "every_s"), [(10.0, 1.0), (8.0, 5.0), (14.0, 3.0)])
def test_short_steps_find_the_passages_of_a_whole_viterbi(
    detector: Detector, speed_mps: float, every_s: float
) -> None:
    """Short steps look ahead of the survivors alone; the passages are those of looking everywhere."""
    ways = Ways(STREETS, SETTINGS)
    n = 0
    for seed in range(2):
        rows = journey(seed, speed_mps, every_s, noise_m=2.0, back=0.1)
        done, _ = ways.passages(ways.path(ways.match([(t, e7(x, y)) for t, x, y in rows])))
        found = committed(detector, rows)[1]
        pairs = zip(found.passages["arm_in_ix"].tolist(), found.passages["arm_out_ix"].tolist(), strict=True)
        assert done == list(pairs)
        n += len(done)
    assert n > 10


def test_one_way_streets_are_followed_their_way(make_settings: Any) -> None:
    """With a third of the streets one-way and other costs, online and whole run still agree.

    Drives against a one-way street are broken off, as they must be, and not compared; nor are those with a
    place right at a node, which is the end of one street and the start of the next at the same price.
    """
    rng = np.random.default_rng(4)
    closed = [2 * r + int(rng.integers(2)) for r in range(len(STREETS.road_from)) if rng.random() < 0.3]
    streets = close_edges(STREETS, closed)
    settings = make_settings(
        {"follow.sigma_m": 6, "follow.beta_m": 12, "follow.reverse_cost": 4, "follow.prune": 9}
    )
    detector = Detector(streets, settings, threads=1)
    compared = broken = 0
    for seed in range(60):
        rows = journey(20 + seed, 9.0, 12.0)[:14]
        if committed(detector, rows)[1].trips["n_breaks"].sum():
            broken += 1
            continue
        ways = Ways(streets, settings)
        spots = [spot for _, _, spot in ways.match([(t_us, e7(lon, lat)) for t_us, lon, lat in rows])]
        if any(min(at_m, ways.length[edge] - at_m) < NEAR_M for edge, at_m in spots):
            continue
        compare(streets, detector, settings, rows)
        compared += 1
    assert compared >= 10
    assert broken > 0


def test_places_are_priced_as_they_are_kept(detector: Detector) -> None:
    """What is priced is the kept place itself: a place is kept in 32 bits, and never compared in more."""
    states = new_states(1)
    places, column, routes = new_record(PLACES), new_record(COLUMN), new_record(ROUTES)
    forget(routes)
    begin_trip(states[0], 1, *e7(*lon_lat(70.123, 3.0)))
    place = e7(*lon_lat(70.123, 3.0))
    keep_ping(states[0], 1, *place, *scale_at(INDEX, place[1]), 4.0)
    extend(states[0], 0, INDEX, parameters(SETTINGS)[0], routes, places, column)
    n = int(states["column_n"][0, 0])
    assert n == 2
    assert sorted(states["at_m"][0, 0, :n].tolist()) == sorted(column.at_m[:n].tolist())


def paths(columns_: list[list[tuple[int, int]]]) -> Any:
    """Make a record of columns; each candidate is (edge, back), its place 10 m per column."""
    states = new_states(1)
    states["n_columns"] = len(columns_)
    for k, candidates in enumerate(columns_):
        states["column_n"][0, k] = len(candidates)
        states["column_kept"][0, k] = 3 * k
        for c, (edge, back) in enumerate(candidates):
            states["at_edge"][0, k, c], states["back"][0, k, c] = edge, back
            states["at_m"][0, k, c] = 10.0 * k + c
    states["cost"][0] = np.arange(MAX_SURVIVORS)
    return states


# Column 1 has candidates 11 and 12 over the one candidate of column 0; column 2 three, two of them over 12.
FORK = [[(1, 0)], [(11, 0), (12, 0)], [(21, 1), (22, 0), (23, 1)]]


@pytest.mark.parametrize(
    ("columns_", "agreed"),
    [
        ([[(1, 0), (2, 0)]], (-1, -1)),
        ([[(1, 0)]], (0, 0)),
        (FORK, (0, 0)),
        ([*FORK, [(31, 0), (32, 2)]], (1, 1)),
        ([*FORK, [(31, 2)]], (3, 0)),
        ([*FORK, [(31, 1), (32, 1), (33, 1)]], (2, 1)),
        ([[(1, 0), (2, 0)], [(11, 1), (12, 1)]], (0, 1)),
        ([[(1, 0), (2, 0)], [(11, 0), (12, 1)]], (-1, -1)),
    ],
)
def test_agreed_column_is_the_newest_that_all_survivors_share(columns_: Any, agreed: tuple[int, int]) -> None:
    """The newest column through one candidate of which all paths go; none without a common start."""
    assert agreed_column(paths(columns_)[0]) == agreed


def test_trace_and_ancestor_follow_the_backs() -> None:
    """A candidate's line back to the start is that of its `back` entries."""
    states = paths([*FORK, [(31, 0), (32, 1)]])
    for candidate, line in [(0, [0, 1, 0, 0]), (1, [0, 0, 1, 1])]:
        chain = np.full(4, -9, np.int32)
        trace(states[0], 3, candidate, chain)
        assert chain.tolist() == line
        assert [ancestor(states[0], candidate, k) for k in range(4)] == line


def test_choose_drops_survivors_of_other_lines() -> None:
    """Only descendants of the chosen candidate stay, in order, with their places, backs and costs."""
    states = paths(FORK)
    choose(states[0], 1, 1)
    s = states[0]
    assert s["column_n"].tolist()[:3] == [1, 2, 2]
    assert s["at_edge"][2, :2].tolist() == [21, 23]
    assert s["back"][2, :2].tolist() == [1, 1]
    assert s["at_m"][2, :2].tolist() == [20.0, 22.0]
    assert s["cost"][:2].tolist() == [0.0, 2.0]


def test_rebase_makes_the_candidate_column_0() -> None:
    """Columns move down; the committed one has one candidate, and the next ones come from it."""
    states = paths([*FORK, [(31, 0), (32, 2)]])
    rebase(states[0], 1, 1)
    s = states[0]
    assert int(s["n_columns"]) == 3
    assert s["column_n"][:3].tolist() == [1, 3, 2]
    assert s["column_kept"][:3].tolist() == [3, 6, 9]
    assert (int(s["at_edge"][0, 0]), float(s["at_m"][0, 0])) == (12, 11.0)
    assert s["at_edge"][1, :3].tolist() == [21, 22, 23]
    assert s["back"][1, [0, 2]].tolist() == [0, 0]
    assert s["at_edge"][2, :2].tolist() == [31, 32]
    assert s["back"][2, :2].tolist() == [0, 2]
    assert s["cost"][:2].tolist() == [0.0, 1.0]


def test_rebase_to_the_newest_column_leaves_it_alone() -> None:
    """A path committed whole has one column, one candidate, no cost."""
    states = paths(FORK)
    rebase(states[0], 2, 2)
    s = states[0]
    assert (int(s["n_columns"]), int(s["column_n"][0]), float(s["cost"][0])) == (1, 1, 0.0)
    assert (int(s["at_edge"][0, 0]), int(s["column_kept"][0])) == (23, 6)
