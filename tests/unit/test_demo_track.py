"""Pings of tracks: where and when receivers see a vehicle, and with what error."""

import numpy as np
import polars as pl
import pytest

from stream.demo.holds import NO_RULE
from stream.demo.roads import metres_per_degree
from stream.demo.track import sample
from stream.demo.write import Receivers, add_faults, receive, vehicle_intervals
from tests.straight import send, straight


@pytest.fixture(scope="module")
def tracks():
    """Give 300 vehicles on the straight road, 20 s apart."""
    return send(straight(NO_RULE, {}, 10.0), np.arange(300) * 20.0, 1.0, 2.0)


def metres(tracks, pings):
    """Give each ping's metres east of the start of the road, and north of it."""
    k_lon, k_lat = metres_per_degree(np.array([50.0]))
    east = (pings["lon"].to_numpy() - tracks.point_lon[0]) * k_lon[0]
    return east, (pings["lat"].to_numpy() - 50.0) * k_lat[0]


def test_pings_without_noise_lie_on_the_track(tracks):
    """A ping lies where the piecewise linear position says, and instants are whole intervals apart."""
    pings = sample(tracks, 5.0, 0.0, 60.0, 1)
    one = pings.filter(vehicle_id="v7")
    t = one["ts"].dt.epoch("us").to_numpy()
    assert set(np.diff(t)) == {5_000_000}
    rows = slice(tracks.time_start[7], tracks.time_start[8])
    expected = np.interp(t, tracks.t_us[rows], tracks.s_m[rows])
    east, north = metres(tracks, one)
    assert east == pytest.approx(expected, abs=1e-6)
    assert north == pytest.approx(0.0, abs=1e-9)
    assert tracks.t_us[rows][0] <= t[0] < tracks.t_us[rows][0] + 5_000_000
    assert tracks.t_us[rows][-1] - 5_000_000 < t[-1] <= tracks.t_us[rows][-1]


def test_pings_come_in_order_of_time(tracks):
    """Pings are sorted by time, with the types that the reader expects by default."""
    pings = sample(tracks, 3.0, 4.0, 60.0, 1)
    assert pings["ts"].is_sorted()
    assert pings.schema == {
        "vehicle_id": pl.String(),
        "ts": pl.Datetime("us", "UTC"),
        "lon": pl.Float64(),
        "lat": pl.Float64(),
    }


def test_noise_has_its_spread_and_memory(tracks):
    """Errors have sd sigma on both axes and correlation exp(-dt / tau) (METHODS.md section 4)."""
    clean, noisy = sample(tracks, 2.0, 0.0, 20.0, 5), sample(tracks, 2.0, 4.0, 20.0, 5)
    for a, b in zip(metres(tracks, noisy), metres(tracks, clean), strict=True):
        error = a - b
        assert error.std() == pytest.approx(4.0, rel=0.06)  # some 300 x 10 independent values
        frame = pl.DataFrame({"v": noisy["vehicle_id"], "e": error})
        pairs = frame.with_columns(then=pl.col("e").shift(-1).over("v")).drop_nulls()
        assert np.corrcoef(pairs["e"], pairs["then"])[0, 1] == pytest.approx(np.exp(-0.1), abs=0.02)


def test_each_trip_may_have_its_interval(tracks):
    """An interval a trip is obeyed."""
    interval = np.where(np.arange(300) % 2 == 0, 1.0, 15.0)
    pings = sample(tracks, interval, 0.0, 60.0, 2)
    for name, us in (("v4", 1_000_000), ("v5", 15_000_000)):
        assert set(pings.filter(vehicle_id=name)["ts"].dt.epoch("us").diff().drop_nulls()) == {us}


def test_same_seed_same_pings(tracks):
    """The same seed gives the same pings, another one others."""
    assert sample(tracks, 3.0, 4.0, 60.0, 9).equals(sample(tracks, 3.0, 4.0, 60.0, 9))
    assert not sample(tracks, 3.0, 4.0, 60.0, 9).equals(sample(tracks, 3.0, 4.0, 60.0, 10))


def test_faults_are_as_many_as_told(tracks):
    """Duplicates, null islands and jumps are counted, and no other row changes."""
    pings = sample(tracks, 1.0, 4.0, 60.0, 3)
    spoilt, counts = add_faults(pings, {"duplicate": 0.001, "null_island": 0.0005, "jump": 0.0003}, 4)
    assert counts == {
        "duplicate": round(0.001 * pings.height),
        "null_island": round(0.0005 * pings.height),
        "jump": round(0.0003 * pings.height),
    }
    assert min(counts.values()) > 0
    assert spoilt.height == pings.height + counts["duplicate"]
    assert spoilt.filter((pl.col("lon") == 0) & (pl.col("lat") == 0)).height == counts["null_island"]
    assert spoilt.height - spoilt.unique().height == counts["duplicate"]
    untouched = spoilt.unique().join(pings, on=["vehicle_id", "ts", "lon", "lat"], how="semi").height
    assert untouched == pings.height - counts["null_island"] - counts["jump"]


def test_receivers_keep_their_interval_and_round():
    """Intervals are drawn by their shares; coordinates have seven decimals."""
    receivers = Receivers(
        {1.0: 0.5, 10.0: 0.5}, 4.0, 60.0, {"duplicate": 0.0, "null_island": 0.0, "jump": 0.0}
    )
    interval = vehicle_intervals(receivers, 300, 1)
    assert set(interval) == {1.0, 10.0}
    assert 100 < (interval == 1.0).sum() < 200
    few = send(straight(NO_RULE, {}, 10.0), np.arange(300) * 20.0, 1.0, 2.0)
    pings, counts = receive(few, receivers, interval, 2)
    assert sum(counts.values()) == 0
    assert (pings["lon"] == pings["lon"].round(7)).all()
