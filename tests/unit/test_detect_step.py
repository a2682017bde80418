"""One committed step: its pieces of edges, and the kept pings placed along them, from hand-made records."""

from itertools import pairwise
from typing import Any

import numpy as np
import pytest

from stream.config import load_settings
from stream.detect.advance import advance
from stream.detect.carry import new_states
from stream.detect.clean import scale_at
from stream.detect.parameters import parameters
from stream.detect.passages import OUT
from stream.detect.records import new_record
from stream.detect.search import ROUTES, forget
from stream.detect.step import STEP, Step
from stream.detect.trips import begin_trip, keep_ping
from stream.network.routes import build_index
from tests.oracle.ground import Point
from tests.oracle.streets import close_edges, grid_streets, streets_of
from tests.oracle.ways import Piece, Spot, Ways

SETTINGS = load_settings()
FOLLOW = SETTINGS.follow
STREETS = grid_streets(4, 150.0)
INDEX = build_index(STREETS, FOLLOW.radius_m, FOLLOW.turn_cost, FOLLOW.reverse_cost, FOLLOW.banned_cost)
PAR = parameters(SETTINGS)[0]
WAYS = Ways(STREETS, SETTINGS)
LONG_M = WAYS.length[0]
SECOND = 1_000_000


def shifted(point: Point, east: float, north: float) -> tuple[int, int]:
    """Move a point by some metres."""
    return round(point[0] + east / 68_700.0 * 1e7), round(point[1] + north / 111_270.0 * 1e7)


def record(spot: Spot, reach_m: float, fixes: list[tuple[int, tuple[int, int]]]) -> Any:
    """Make the record of a vehicle whose committed place is that of its first kept ping."""
    states = new_states(1)
    begin_trip(states[0], fixes[0][0], *fixes[0][1])
    for t_us, place in fixes:
        keep_ping(states[0], t_us, *place, *scale_at(INDEX, place[1]), FOLLOW.keep_m)
    states["is_placed"], states["edge"], states["reach_m"] = 1, spot[0], reach_m
    return states


def step_from(a: Spot, b: Spot, reach_m: float, fixes: list[tuple[int, tuple[int, int]]]) -> tuple[Any, Step]:
    """Commit the step from a to b; give the record after it and the room it was laid in."""
    states, step, routes = record(a, reach_m, fixes), new_record(STEP), new_record(ROUTES)
    forget(routes)
    step.edge[:] = -9
    last = int(states["n_kept"][0]) - 1
    out = new_record(OUT)
    advance(states[0], 0, a[1], b[0], b[1], 0, last, INDEX, PAR, routes, step, out)
    return states, step


def pieces_of(step: Step) -> list[Piece]:
    """Give the pieces laid."""
    n = step.edge.tolist().index(-9)
    return list(zip(step.edge[:n].tolist(), step.from_m[:n].tolist(), step.to_m[:n].tolist(), strict=True))


def ends(a: Spot, b: Spot) -> list[tuple[int, tuple[int, int]]]:
    """Give two pings at the two places, ten seconds apart."""
    (x0, y0), (x1, y1) = WAYS.point(a), WAYS.point(b)
    return [(SECOND, (round(x0), round(y0))), (11 * SECOND, (round(x1), round(y1)))]


# Edges 0, 2, 4 run east along the south side and 1, 3, 5 back; 26 runs north from the second node.
NORTH = 26
CASES: dict[str, tuple[Spot, Spot, float, list[Piece]]] = {
    "on": ((0, 30.0), (0, 80.0), 30.0, [(0, 30.0, 80.0)]),
    "on, beyond what was reached": ((0, 30.0), (0, 80.0), 45.0, [(0, 45.0, 80.0)]),
    "back by noise": ((0, 60.0), (0, 40.0), 60.0, [(0, 60.0, 60.0)]),
    "on, not yet to what was reached": ((0, 50.0), (0, 58.0), 70.0, [(0, 70.0, 70.0)]),
    "turned": (
        (0, 100.0),
        (1, LONG_M - 40.0),
        100.0,
        [(0, 100.0, 100.0), (1, LONG_M - 100.0, LONG_M - 40.0)],
    ),
    "turned at what was reached": (
        (0, 100.0),
        (1, LONG_M - 40.0),
        120.0,
        [(0, 120.0, 120.0), (1, LONG_M - 120.0, LONG_M - 40.0)],
    ),
    "turned farther on": (
        (0, 60.0),
        (1, LONG_M - 100.0),
        60.0,
        [(0, 60.0, 100.0), (1, LONG_M - 100.0, LONG_M - 100.0)],
    ),
    "over a node": ((0, 120.0), (2, 30.0), 125.0, [(0, 125.0, LONG_M), (2, 0.0, 30.0)]),
    "round a corner": ((0, 120.0), (NORTH, 30.0), 120.0, [(0, 120.0, LONG_M), (NORTH, 0.0, 30.0)]),
    "over two nodes": ((0, 120.0), (4, 10.0), 120.0, [(0, 120.0, LONG_M), (2, 0.0, LONG_M), (4, 0.0, 10.0)]),
}
# On one edge and past no gate: nothing needs to be laid.
NO_GATE = {"on", "on, beyond what was reached", "back by noise", "on, not yet to what was reached"}


@pytest.mark.parametrize("case", CASES)
def test_pieces_lead_from_what_was_reached_to_the_next_place(case: str) -> None:
    """On the same edge, turned between nodes, or along the route; never back behind what was reached."""
    a, b, reach_m, expected = CASES[case]
    states, step = step_from(a, b, reach_m, ends(a, b))
    laid = pieces_of(step)
    if case in NO_GATE:
        assert laid == []
    else:
        assert [p[0] for p in laid] == [p[0] for p in expected]
        assert np.allclose([p[1:] for p in laid], [p[1:] for p in expected], atol=1e-9)
    path_m = sum(high - low for _, low, high in expected)
    assert abs(float(states["path_m"][0]) - path_m) < 1e-6
    assert int(states["edge"][0]) == expected[-1][0]
    assert abs(float(states["reach_m"][0]) - expected[-1][2]) < 1e-9


def test_step_without_a_route_is_laid_straight_over(monkeypatch: pytest.MonkeyPatch) -> None:
    """No way is ever matched so; were it, by a rounding, the step is laid all the same (it once crashed)."""
    points = [(50_000_000 + k * 50_000, 520_000_000) for k in range(3)]  # two one-way roads, 343 m each
    streets = close_edges(streets_of(points, [(0, 1), (2, 1)]), [1, 3])
    ways = Ways(streets, SETTINGS)
    monkeypatch.setattr(f"{__name__}.WAYS", ways)
    monkeypatch.setattr(f"{__name__}.INDEX", build_index(streets, 40.0, 1.0, 5.0, 3.0))
    back, over = ((0, 300.0), (0, 260.0)), ((0, 300.0), (2, 310.0))
    assert pieces_of(step_from(*back, 300.0, ends(*back))[1]) == [(0, 300.0, 300.0)]
    assert pieces_of(step_from(*over, 300.0, ends(*over))[1]) == [(0, 300.0, ways.length[0]), (2, 0.0, 310.0)]


def test_edge_of_the_cases_runs_north() -> None:
    """The cases above mean the edges they say."""
    (x0, y0), (x1, y1) = WAYS.point((NORTH, 0.0)), WAYS.point((NORTH, LONG_M))
    assert (x0, y0) == WAYS.point((2, 0.0))
    assert x1 == x0
    assert y1 > y0


def drive_at(pieces: list[Piece], metres: float) -> Point:
    """Give the point some metres along pieces."""
    for edge, low, high in pieces:
        if metres <= high - low + 1e-9:
            return WAYS.point((edge, low + metres))
        metres -= high - low
    raise ValueError("beyond the pieces")


@pytest.mark.parametrize("seed", range(8))
def test_kept_pings_are_placed_where_they_were_driven(seed: int) -> None:
    """Pings driven along a random route lie where they were on it, within their noise, in order of time."""
    rng = np.random.default_rng(seed)
    n_gates, off_m = 0, list[float]()
    for _ in range(25):
        a = (int(rng.integers(len(WAYS.length))), float(rng.uniform(20.0, 130.0)))
        targets = [t for t, r in WAYS.routes(a[0], 350.0).items() if t // 2 != a[0] // 2 and r[0] < 200.0]
        b = (int(rng.choice(targets)), float(rng.uniform(20.0, 130.0)))
        pieces = WAYS.path([((0, WAYS.point(a)), 0, a), ((60 * SECOND, WAYS.point(b)), 0, b)])[0]
        if any(p[0] == q[0] ^ 1 for p, q in pairwise(pieces)):
            continue
        total = sum(high - low for _, low, high in pieces)
        at = [0.0, *np.arange(12.0, total - 6.0, 12.0).tolist(), total]
        noise = rng.normal(0.0, 1.0, (len(at), 2)) * (np.arange(len(at)) % (len(at) - 1) > 0)[:, None]
        places = [shifted(drive_at(pieces, m), *d) for m, d in zip(at, noise.tolist(), strict=True)]
        fixes = [(k * SECOND, place) for k, place in enumerate(places)]
        states, step = step_from(a, b, a[1], fixes)
        assert int(states["n_kept"][0]) == len(fixes)
        assert [p[0] for p in pieces_of(step)] == [p[0] for p in pieces]
        m = 2 * len(fixes) - 1
        placed, t_us = step.at_m[:m].tolist(), step.t_us[:m].tolist()
        assert placed == sorted(placed)
        assert t_us == [k // 2 * SECOND for k in range(m)]
        assert (placed[0], abs(placed[-1] - total) < 0.02) == (0.0, True)
        off_m += [abs(x - y) for x, y in zip(placed[::2], at, strict=True)]
        n_gates += int(states["first_gate_us"][0] >= 0)
    assert n_gates > 5
    # Noise of 1 m is 0.8 m along the way on average, more round corners; at most four sigma, or twice that.
    assert max(off_m) < 8.0
    assert sum(off_m) / len(off_m) < 1.0
