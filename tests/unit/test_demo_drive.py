"""Driven tracks: routes, speeds and rates stay within what the road and the driver allow."""

from itertools import pairwise

import numpy as np
import pytest

from stream.demo.draw import poisson, seeds, uniform
from stream.demo.drive import drive, drive_network
from stream.demo.fleet import Fleet, day_trips
from stream.demo.holds import A, D
from stream.demo.rules import LEVEL, town_roads
from stream.demo.town import build_plan
from stream.network import build_network

MIDNIGHT_US = 1_780_272_000_000_000


@pytest.fixture(scope="module")
def roads():
    """Give the town's roads."""
    return town_roads(build_plan(False))


@pytest.fixture(scope="module")
def trips(roads):
    """Give a day of a small fleet."""
    return day_trips(roads, Fleet(25, 8.0, (100.0, 300.0), 0.2, (60.0, 300.0)), LEVEL, MIDNIGHT_US, 4)


@pytest.fixture(scope="module")
def tracks(roads, trips):
    """Give its tracks."""
    return drive(roads, trips, LEVEL, 5)


def steps(tracks):
    """Give trip, seconds and metres between knots of one trip."""
    trip = np.repeat(np.arange(tracks.n_trips), np.diff(tracks.time_start))
    same = trip[1:] == trip[:-1]
    return trip[1:][same], np.diff(tracks.t_us)[same] * 1e-6, np.diff(tracks.s_m)[same]


def test_uniform_draws_fill_the_unit_interval():
    """Draws lie inside (0, 1) with mean 1/2 and variance 1/12, and depend on the seed alone."""
    state = seeds(2, np.random.default_rng(3))
    again = state.copy()
    got = np.array([uniform(state, 1) for _ in range(20_000)])
    assert 0.0 < got.min() < got.max() < 1.0
    assert got.mean() == pytest.approx(0.5, abs=4 * (1 / 12 / 20_000) ** 0.5)
    assert got.var() == pytest.approx(1 / 12, rel=0.03)
    assert [uniform(again, 1) for _ in range(5)] == list(got[:5])


def test_poisson_draws_have_equal_mean_and_variance():
    """Counts of mean 3.5 have mean and variance 3.5, and mean 0 gives 0."""
    state = seeds(1, np.random.default_rng(4))
    got = np.array([poisson(state, 0, 3.5) for _ in range(20_000)])
    assert got.mean() == pytest.approx(3.5, abs=4 * (3.5 / 20_000) ** 0.5)
    assert got.var() == pytest.approx(3.5, rel=0.06)
    assert poisson(state, 0, 0.0) == 0


def test_routes_follow_the_roads(roads, tracks):
    """Each step of a route is an edge that is there, in its direction, and no banned turn is made."""
    pairs = set(zip(roads.node_id[roads.edge_from], roads.node_id[roads.edge_to], strict=True))
    owner = np.repeat(np.arange(roads.edge_m.size), np.diff(roads.succ_start))
    turns = {
        (roads.node_id[roads.edge_from[e]], roads.node_id[roads.edge_to[e]], roads.node_id[roads.edge_to[f]])
        for e, f in zip(owner, roads.succ_edge, strict=True)
    }
    for i in range(tracks.n_trips):
        nodes = tracks.node_id[tracks.node_start[i] : tracks.node_start[i + 1]]
        assert set(pairwise(nodes)) <= pairs
        assert set(zip(nodes, nodes[1:], nodes[2:], strict=False)) <= turns


def test_time_and_place_never_go_back(tracks):
    """Knots of a trip go forward in time and place and end at the end of the path."""
    _, dt, ds = steps(tracks)
    assert dt.min() >= 0.0
    assert ds.min() >= 0.0
    ends = tracks.s_m[tracks.time_start[1:] - 1]
    assert ends == pytest.approx(tracks.point_m[tracks.point_start[1:] - 1])


def test_speed_stays_below_the_drivers_share_of_the_limit(roads, trips, tracks):
    """No vehicle is faster than its share of the highest limit; steps while speed changes are short."""
    trip, dt, ds = steps(tracks)
    fast = ds > dt * roads.edge_mps.max() * trips.driver[trip, 0] + 1e-4  # times are whole microseconds
    assert not fast.any()
    assert np.median(dt) <= 0.5


def test_rates_stay_within_the_drivers(trips, tracks):
    """Speeds at neighbouring knots differ by no more than the driver's rates, but for emergencies."""
    trip, dt, ds = steps(tracks)
    ok = (dt[1:] > 0.05) & (dt[:-1] > 0.05) & (trip[1:] == trip[:-1])
    rate = (np.diff(ds / np.maximum(dt, 1e-9)) / (0.5 * (dt[1:] + dt[:-1])))[ok]
    who = trip[1:][ok]
    assert (rate <= trips.driver[who, A] + 0.01).all()
    assert (rate >= -trips.driver[who, D] - 0.01).mean() > 0.999


def test_trips_of_a_vehicle_follow_each_other(tracks):
    """A vehicle's next trip starts later, where its last ended, unless it left by the motorway."""
    same = tracks.vehicle_ix[1:] == tracks.vehicle_ix[:-1]
    begin, end = tracks.t_us[tracks.time_start[:-1]], tracks.t_us[tracks.time_start[1:] - 1]
    assert (begin[1:][same] > end[:-1][same]).all()
    first, last = tracks.point_start[:-1], tracks.point_start[1:] - 1
    is_there = np.isclose(tracks.point_lon[first][1:], tracks.point_lon[last][:-1], atol=1e-9)
    ids = build_plan(False).node_ids()
    left = np.isin(tracks.node_id[tracks.node_start[1:] - 1], [ids["x5"], ids["y5"]])[:-1]
    assert is_there[same & ~left].all()
    assert (same & ~left).sum() > 100


def test_same_seed_same_tracks(roads, trips, tracks):
    """The same seed drives the same tracks; another seed others."""
    again = drive(roads, trips, LEVEL, 5)
    assert (again.t_us == tracks.t_us).all()
    assert (again.s_m == tracks.s_m).all()
    other = drive(roads, trips, LEVEL, 6)
    assert other.t_us.size != tracks.t_us.size or (other.t_us != tracks.t_us).any()


def test_network_drives_honour_direction_and_bans(town_osm, settings):
    """Drives on a built network take open edges only and make no banned movement."""
    streets = build_network(town_osm, None, settings).streets
    tracks = drive_network(streets, 200, 8)
    assert tracks.n_trips == 200
    node = {int(n): i for i, n in enumerate(streets.node_id)}
    edges: dict[tuple[int, int], list[int]] = {}
    for e in np.flatnonzero(streets.edge_open):
        ends = (streets.road_from[e >> 1], streets.road_to[e >> 1])
        edges.setdefault(ends if e % 2 == 0 else ends[::-1], []).append(int(e))
    owner = np.repeat(np.arange(streets.edge_open.size), np.diff(streets.succ_start))
    free = streets.succ_banned == 0
    allowed = set(zip(owner[free].tolist(), streets.succ_edge[free].tolist(), strict=True))
    for i in range(tracks.n_trips):
        walk = [node[int(n)] for n in tracks.node_id[tracks.node_start[i] : tracks.node_start[i + 1]]]
        path = [edges[a, b] for a, b in pairwise(walk)]
        for here, then in pairwise(path):
            assert any((e, f) in allowed for e in here for f in then)
