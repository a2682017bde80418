"""Routes between edges: rows against a plain Dijkstra, whatever the memory holds."""

from typing import Any

import numpy as np
import pytest

from stream.config import load_settings
from stream.detect.records import new_record
from stream.detect.search import ROUTES, SHORT_M, TURN_M, Routes, find_route, forget, routes_dtype, row_kernel
from stream.network.model import NONE, Streets
from stream.network.routes import StreetIndex, build_index
from tests.oracle.streets import close_edges, grid_streets, streets_of
from tests.oracle.ways import Ways

SETTINGS = load_settings()
# Rows keep metres and costs in 32 bits: up to 2 km to a tenth of a millimetre, some log units to a millionth.
NEAR_M, NEAR_COST = 1e-3, 1e-5


def index_of(streets: Streets) -> StreetIndex:
    """Build the index with the default costs."""
    f = SETTINGS.follow
    return build_index(streets, f.radius_m, f.turn_cost, f.reverse_cost, f.banned_cost)


def small_town(seed: int) -> Streets:
    """Draw a random graph of 14 nodes and some 24 roads, a third of them one-way, some turns banned."""
    rng = np.random.default_rng(seed)
    places = rng.integers(-60_000, 60_000, (14, 2))
    points = [(50_000_000 + int(x), 520_000_000 + int(y)) for x, y in places]
    pairs = sorted({tuple(sorted(p)) for p in rng.integers(0, 14, (30, 2)).tolist() if p[0] != p[1]})
    closed = [2 * r + int(rng.integers(2)) for r in range(len(pairs)) if rng.random() < 0.33]
    streets = close_edges(streets_of(points, [(a, b) for a, b in pairs]), closed)
    streets.succ_banned[:] = rng.random(len(streets.succ_banned)) < 0.15
    return streets


def memory(dtype: np.dtype[Any] = ROUTES) -> Routes:
    """Make an empty memory."""
    routes = new_record(dtype)
    forget(routes)
    return routes


def small_routes(rows: int, routes: int) -> Routes:
    """Make a memory with little room: powers of two."""
    return memory(routes_dtype(rows, routes))


def row_of(index: StreetIndex, routes: Routes, source: int, is_long: int, reach_m: float) -> dict[int, tuple]:
    """Give a row as target: (metres, cost, edge before)."""
    slot = row_kernel(index, source, is_long, reach_m, routes)
    out = {}
    for target in range(len(index.edge)):
        found = find_route(routes, slot, target)
        if found != NONE:
            r = routes.route[found]
            assert r["target"] == target
            out[target] = (float(r["metres"]), float(r["cost"]), int(r["before"]))
    return out


def check_row(ways: Ways, source: int, reach_m: float, row: dict[int, tuple]) -> None:
    """Compare a row with Dijkstra's: the same targets, each at the least rank, each along a real route."""
    plain = ways.routes(source, reach_m)
    assert set(plain) == set(row)
    for target, (metres, cost, before) in row.items():
        rank = plain[target][0] + TURN_M * plain[target][1]
        assert abs(metres + TURN_M * cost - rank) < NEAR_M + TURN_M * NEAR_COST
        turns = dict(ways.ahead[source if before == NONE else before])
        m0, c0 = (0.0, 0.0) if before == NONE else (row[before][0] + ways.length[before], row[before][1])
        assert abs(metres - m0) < NEAR_M
        assert abs(cost - c0 - turns[target]) < NEAR_COST


@pytest.mark.parametrize("seed", range(6))
@pytest.mark.parametrize("reach_m", [120.0, SHORT_M, 2000.0])
def test_rows_of_random_towns_are_dijkstras(seed: int, reach_m: float) -> None:
    """Targets, least ranks and routes of each row are those of a plain search."""
    streets = small_town(seed)
    index, ways, routes = index_of(streets), Ways(streets, SETTINGS), memory()
    n = 0
    for source in range(len(index.edge)):
        row = row_of(index, routes, source, 1, reach_m)
        check_row(ways, source, reach_m, row)
        n += len(row)
    assert n > len(index.edge)


def test_rows_of_a_grid_with_many_equal_routes_have_the_least_rank() -> None:
    """Where routes tie, either may be given, at the same rank."""
    streets = grid_streets(5, 100.0)
    index, ways, routes = index_of(streets), Ways(streets, SETTINGS), memory()
    for source in range(0, len(index.edge), 7):
        check_row(ways, source, 450.5, row_of(index, routes, source, 1, 450.5))


@pytest.mark.parametrize(("rows", "room"), [(16, 1 << 20), (1 << 12, 512), (8, 256)])
def test_rows_are_the_same_after_the_memory_was_cleared(rows: int, room: int) -> None:
    """A memory too small for all rows forgets and searches again, and gives the same rows to the bit."""
    streets = small_town(3)
    index = index_of(streets)
    plain = {
        (source, is_long): row_of(index, memory(), source, is_long, reach)
        for source in range(0, len(index.edge), 3)
        for is_long, reach in ((0, SHORT_M), (1, 900.0))
    }
    assert max(len(row) for row in plain.values()) * 3 <= 256
    routes = small_routes(rows, room)
    rng = np.random.default_rng(7)
    asks = [list(plain)[k] for k in rng.integers(0, len(plain), 400)]
    for source, is_long in asks:
        reach = 900.0 if is_long else SHORT_M
        assert plain[source, is_long] == row_of(index, routes, source, is_long, reach)
    assert routes.used[2] > len(plain), "nothing was ever forgotten"
    assert routes.used[0] <= room
    assert routes.used[1] <= rows // 2 + 1


def test_a_remembered_row_is_not_searched_again() -> None:
    """The second ask of a row costs no search; short and long rows of an edge are two."""
    index, routes = index_of(grid_streets()), memory()
    for _ in range(3):
        row_kernel(index, 5, 0, SHORT_M, routes)
        row_kernel(index, 5, 1, 2000.0, routes)
    assert routes.used[2] == 2


def test_a_dense_town_fills_the_labels_with_real_routes() -> None:
    """With more edges in reach than labels, the row holds 1024, each along a real route."""
    streets = grid_streets(18, 20.0)
    index, ways = index_of(streets), Ways(streets, SETTINGS)
    row = row_of(index, memory(), 300, 1, 2000.0)
    plain = ways.routes(300, 2000.0)
    assert len(plain) > 1024
    assert len(row) == 1024
    for target, (metres, cost, before) in row.items():
        assert metres + TURN_M * cost > plain[target][0] + TURN_M * plain[target][1] - 1.0e-2
        turns = dict(ways.ahead[300 if before == NONE else before])
        m0, c0 = (0.0, 0.0) if before == NONE else (row[before][0] + ways.length[before], row[before][1])
        assert abs(metres - m0) < NEAR_M
        assert abs(cost - c0 - turns[target]) < NEAR_COST
    nearest = sorted(plain, key=lambda t: plain[t][0] + TURN_M * plain[t][1])[:200]
    assert set(nearest) <= set(row)


def test_an_edge_without_a_way_on_has_an_empty_row() -> None:
    """From the end of a one-way road that leads nowhere nothing is found, and nothing is read amiss."""
    streets = close_edges(streets_of([(0, 0), (20_000, 0)], [(0, 1)]), [1])
    index, routes = index_of(streets), memory()
    assert row_of(index, routes, 0, 1, 2000.0) == {}
