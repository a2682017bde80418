"""Two real bicycle rides (1 fix a second, tests/data/README.md) through reading, cleaning, trips and carry.

Outside: the files read again with the standard library's XML parser, pyproj's geodesics, shapely's
simplification (Douglas and Peucker 1973). No extract of these places is at hand, so the streets are the
rides' own tracks, drawn as road lines with a short side road every 1.5 km or so. No delays are judged.
"""

import gzip
import itertools
import json
from dataclasses import dataclass
from datetime import datetime
from functools import cached_property
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import numpy as np
import pytest
import shapely
from numpy.typing import NDArray
from pyproj import Geod

from stream.config import Settings, load_settings
from stream.detect.carry import carry_columns, held_rows, new_states, states_from_columns
from stream.detect.records import DROP_REASONS, END_REASONS, Found
from stream.detect.run import Detector
from stream.network import Built, build_network
from stream.pings import VehicleBook, open_source

DATA = Path(__file__).resolve().parent.parent / "data"
GEOD = Geod(ellps="WGS84")
SPACING_M = 1500.0  # between side roads
STUB_M = 60.0
CUTS_SEED = 20200418


@dataclass(frozen=True)
class Ride:
    """One ride as the standard library reads it, and the streets drawn from it."""

    path: Path
    lon: NDArray[np.float64]
    lat: NDArray[np.float64]
    t_us: NDArray[np.int64]
    kept: NDArray[np.int64]  # fixes that are vertices of the drawn road
    crossings: NDArray[np.int64]  # those of them where a side road starts
    built: Built
    settings: Settings

    @cached_property
    def road_m(self) -> NDArray[np.float64]:
        """Give the chainage of each vertex along the drawn road, by geodesics."""
        lon, lat = self.lon[self.kept], self.lat[self.kept]
        return np.concatenate([[0.0], np.cumsum(GEOD.inv(lon[:-1], lat[:-1], lon[1:], lat[1:])[2])])

    def positions_m(self) -> NDArray[np.float64]:
        """Give how far along the road each fix is: its foot on the step between the vertices around it."""
        out = np.empty(len(self.lon))
        for k, (a, b) in enumerate(zip(self.kept[:-1], self.kept[1:], strict=True)):
            scale = np.array([np.cos(np.radians(self.lat[a])), 1.0])
            fixes = np.column_stack([self.lon[a : b + 1], self.lat[a : b + 1]]) * scale
            step = fixes[-1] - fixes[0]
            share = np.clip((fixes - fixes[0]) @ step / (step @ step), 0.0, 1.0)
            out[a : b + 1] = self.road_m[k] + share * (self.road_m[k + 1] - self.road_m[k])
        return out


def parsed(path: Path) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.int64]]:
    """Read a GPX file with the standard library: longitudes, latitudes, times in microseconds."""
    space = "{http://www.topografix.com/GPX/1/1}"
    with gzip.open(path) as file:
        points = list(ElementTree.parse(file).getroot().iter(f"{space}trkpt"))
    times = [datetime.fromisoformat(str(p.findtext(f"{space}time"))) for p in points]
    return (
        np.array([float(p.attrib["lon"]) for p in points]),
        np.array([float(p.attrib["lat"]) for p in points]),
        np.array([round(t.timestamp()) * 1_000_000 for t in times], np.int64),
    )


def vertices(lon: NDArray[np.float64], lat: NDArray[np.float64]) -> NDArray[np.int64]:
    """Give the fixes that a simplification by 1.5 m keeps."""
    scale = np.array([111_320.0 * np.cos(np.radians(lat.mean())), 111_320.0])
    metres = (np.column_stack([lon, lat]) - [lon[0], lat[0]]) * scale
    steps = np.flatnonzero(np.any(np.diff(metres, axis=0) != 0.0, axis=1))
    moved = np.concatenate([[0], steps + 1])
    line = shapely.get_coordinates(shapely.LineString(metres[moved]).simplify(1.5))
    kept, at = [], 0
    for place in line:
        while not np.array_equal(metres[moved[at]], place):
            at += 1
        kept.append(int(moved[at]))
    return np.array(kept)


def side_roads(lon: NDArray[np.float64], lat: NDArray[np.float64], kept: NDArray[np.int64]) -> list[int]:
    """Choose vertices for side roads: some way apart, and far from every other part of the ride."""
    x = (lon - lon[0]) * 111_320.0 * np.cos(np.radians(lat.mean()))
    y = (lat - lat[0]) * 111_320.0
    chosen: list[int] = []
    last_m, at_m = 0.0, np.concatenate([[0.0], np.cumsum(np.hypot(np.diff(x), np.diff(y)))])
    for fix in kept[1:-1].tolist():
        near = np.flatnonzero(np.hypot(x - x[fix], y - y[fix]) < 150.0)
        is_alone = at_m[near].max() - at_m[near].min() < 400.0
        if is_alone and at_m[fix] - last_m > SPACING_M and at_m[-1] - at_m[fix] > 200.0:
            chosen.append(fix)
            last_m = at_m[fix]
    return chosen


def drawn(
    folder: Path, lon: NDArray[np.float64], lat: NDArray[np.float64], kept: Any, chosen: list[int]
) -> Path:
    """Write the road and its side roads as GeoJSON lines."""

    def line(places: list[list[float]]) -> dict[str, Any]:
        geometry = {"type": "LineString", "coordinates": places}
        return {"type": "Feature", "properties": {"class": "residential"}, "geometry": geometry}

    lines = [line([[lon[i], lat[i]] for i in kept])]
    order = kept.tolist()
    for fix in chosen:
        before, after = order[order.index(fix) - 1], order[order.index(fix) + 1]
        along, _, _ = GEOD.inv(lon[before], lat[before], lon[after], lat[after])
        end_lon, end_lat, _ = GEOD.fwd(lon[fix], lat[fix], along + 90.0, STUB_M)
        lines.append(line([[lon[fix], lat[fix]], [end_lon, end_lat]]))
    path = folder / "streets.geojson"
    path.write_text(json.dumps({"type": "FeatureCollection", "features": lines}))
    return path


@pytest.fixture(scope="module", params=["ride_2019", "ride_2020"])
def ride(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Ride:
    """Give one ride with its streets."""
    path = DATA / f"{request.param}.gpx.gz"
    lon, lat, t_us = parsed(path)
    kept = vertices(lon, lat)
    chosen = side_roads(lon, lat, kept)
    settings = load_settings()
    streets = drawn(tmp_path_factory.mktemp("streets"), lon, lat, kept, chosen)
    built = build_network(streets, None, settings)
    return Ride(path, lon, lat, t_us, kept, np.array(chosen), built, settings)


def joined(parts: list[Found]) -> dict[str, Any]:
    """Put what several feeds found after one another."""
    names = ("passages", "sections", "unfinished", "trips")
    out: dict[str, Any] = {n: np.concatenate([getattr(p, n) for p in parts]) for n in names}
    return out | {"dropped": sum(p.dropped for p in parts), "n_used": sum(p.n_used for p in parts)}


def followed(ride: Ride, cuts: list[int], threads: int = 1) -> dict[str, Any]:
    """Feed a ride cut into pieces, with the carry written out and read back at each cut."""
    states = new_states(1)
    parts = []
    bounds = [0, *sorted(cuts), len(ride.lon)]
    for a, b in itertools.pairwise(bounds):
        detector = Detector(ride.built.streets, ride.settings, threads=threads)
        states = states_from_columns(carry_columns(states))
        parts.append(
            detector.feed(states, np.zeros(b - a, np.int32), ride.t_us[a:b], ride.lon[a:b], ride.lat[a:b])
        )
        given = sum(p.n_used + int(p.dropped.sum()) for p in parts) + held_rows(states)
        assert b == given
    parts.append(detector.close(states))
    assert held_rows(states) == 0
    return joined(parts)


def same(one: dict[str, Any], other: dict[str, Any]) -> None:
    """Hold two results to be equal in every row and bit."""
    assert one.keys() == other.keys()
    for name, value in one.items():
        np.testing.assert_array_equal(value, other[name], err_msg=name)


@pytest.mark.parametrize("chunk_rows", [1_000_000, 997])
def test_ride_is_read_as_the_standard_library_reads_it(ride: Ride, chunk_rows: int) -> None:
    """Every fix comes through the reader, in order, with its time and place to the last bit."""
    settings = load_settings(over={"run": {"chunk_rows": chunk_rows}})
    book = VehicleBook()
    chunks = list(open_source([ride.path], settings).chunks(book))
    assert sum(c.n_rows_in for c in chunks) == len(ride.lon)
    assert [c.dropped for c in chunks if c.dropped] == []
    assert book.names == [ride.path.name.removesuffix(".gpx.gz")]
    np.testing.assert_array_equal(ride.t_us, np.concatenate([c.t_us for c in chunks]))
    np.testing.assert_array_equal(ride.lon, np.concatenate([c.lon for c in chunks]))
    np.testing.assert_array_equal(ride.lat, np.concatenate([c.lat for c in chunks]))


def test_ride_is_the_one_described(ride: Ride) -> None:
    """Count, box, date and length are those noted when the files were chosen (METHODS.md section 15)."""
    n, west, east, south, north, day, length_km = {
        "ride_2019.gpx.gz": (8357, 5.792, 5.935, 50.384, 50.492, "2019-09-20", 57.7),
        "ride_2020.gpx.gz": (5159, 6.584, 6.725, 52.095, 52.182, "2020-04-18", 36.3),
    }[ride.path.name]
    assert n == len(ride.lon)
    assert [west, east] == pytest.approx([ride.lon.min(), ride.lon.max()], abs=6e-4)
    assert [south, north] == pytest.approx([ride.lat.min(), ride.lat.max()], abs=6e-4)
    assert day == str(np.datetime64(int(ride.t_us[0]), "us").astype("datetime64[D]"))
    steps = GEOD.inv(ride.lon[:-1], ride.lat[:-1], ride.lon[1:], ride.lat[1:])[2]
    assert length_km == pytest.approx(steps.sum() / 1000.0, abs=0.05)
    assert set(np.diff(ride.t_us)) == {1_000_000}


def test_ride_is_one_trip_of_all_its_fixes(ride: Ride) -> None:
    """Nothing is dropped, the trip runs from the first fix to the last, and its path is as long as the road.

    Where a path begins and ends is known to the distance between anchors only.
    """
    found = followed(ride, [])
    assert found["dropped"].sum() == 0
    assert len(ride.lon) == found["n_used"]
    assert len(found["trips"]) == 1
    trip = found["trips"][0]
    assert (len(ride.lon), 0, 0) == (trip["n_pings"], trip["n_breaks"], trip["n_caps"])
    assert (ride.t_us[0], ride.t_us[-1]) == (trip["trip_start_us"], trip["end_us"])
    assert ride.road_m[-1] == pytest.approx(trip["path_mm"] / 1000.0, abs=2 * ride.settings.follow.anchor_m)
    parts = [trip[f"{kind}_us"] for kind in ("passage", "section", "unfinished", "other")]
    assert trip["last_gate_us"] - trip["first_gate_us"] == sum(parts)


def test_each_side_road_is_one_passage_at_its_time(ride: Ride) -> None:
    """One passage straight through per side road, in order; gate times are those of the fixes on the road.

    Expected: each fix's foot on the drawn road by geodesics, and straight interpolation between two fixes.
    Places are kept to 1 cm, so 0.05 s leaves room for a gate passed at 0.5 m/s.
    """
    found = followed(ride, [])["passages"]
    assert len(ride.crossings) > 15
    assert len(ride.crossings) == len(found)
    tables = ride.built.tables
    arms, positions = tables["arm"], ride.positions_m()
    mouths_m = ride.road_m[np.searchsorted(ride.kept, ride.crossings)]
    place = {
        j: (lon, lat) for j, lon, lat in tables["junction"].select("junction_ix", "lon", "lat").iter_rows()
    }

    def reached_us(at_m: float) -> float:
        after = int(np.argmax(positions >= at_m))
        share = (at_m - positions[after - 1]) / (positions[after] - positions[after - 1])
        return float(ride.t_us[after - 1] + share * 1e6)

    for fix, mouth_m, passage in zip(ride.crossings, mouths_m, found, strict=True):
        arm_in, arm_out = int(passage["arm_in_ix"]), int(passage["arm_out_ix"])
        at = place[arms["junction_ix"][arm_in]]
        assert (ride.lon[fix], ride.lat[fix]) == pytest.approx(at, abs=1e-7)
        assert arms["junction_ix"][arm_in] == arms["junction_ix"][arm_out]
        assert max(arms["link_m"][arm_in], arms["link_m"][arm_out]) > 2 * STUB_M
        entry_us = reached_us(mouth_m - arms["entry_gate_m"][arm_in])
        exit_us = reached_us(mouth_m + arms["exit_gate_m"][arm_out])
        assert passage["entry_us"] == pytest.approx(entry_us, abs=50_000)
        assert passage["exit_us"] == pytest.approx(exit_us, abs=50_000)


def test_ride_cut_anywhere_gives_the_same(ride: Ride) -> None:
    """However a ride is cut, with the carry stored in between, rows and counts are the same to the bit."""
    whole = followed(ride, [])
    rng = np.random.default_rng(CUTS_SEED)
    for n_cuts in (1, 1, 2, 5, 40):
        cuts = rng.integers(0, len(ride.lon) + 1, n_cuts).tolist()
        same(whole, followed(ride, cuts))
    start = int(rng.integers(0, len(ride.lon) - 120))
    same(whole, followed(ride, list(range(start, start + 120))))


def test_ride_among_others_gives_the_same(ride: Ride) -> None:
    """Three vehicles on the same ride, 7 s apart and interleaved in time, each get what one alone gets."""
    alone = followed(ride, [])
    n = len(ride.lon)
    shift_us = np.repeat(np.arange(3) * 7_000_000, n)
    t_us = np.tile(ride.t_us, 3) + shift_us
    vehicle_ix = np.repeat(np.arange(3, dtype=np.int32), n)
    order = np.lexsort((vehicle_ix, t_us))
    lon, lat = np.tile(ride.lon, 3)[order], np.tile(ride.lat, 3)[order]
    states = new_states(3)
    detector = Detector(ride.built.streets, ride.settings, threads=2)
    first = detector.feed(states, vehicle_ix[order], t_us[order], lon, lat)
    found = joined([first, detector.close(states)])
    assert 3 * n == found["n_used"]
    for vehicle in range(3):
        mine = found["passages"][found["passages"]["vehicle_ix"] == vehicle]
        for name in mine.dtype.names:
            if name == "vehicle_ix":
                continue
            moved = vehicle * 7_000_000 if name in ("trip_start_us", "entry_us", "exit_us") else 0
            np.testing.assert_array_equal(alone["passages"][name] + moved, mine[name], err_msg=name)


def test_faults_put_into_a_ride_are_counted_and_change_nothing_else(ride: Ride) -> None:
    """A fix thrown aside, one given twice and one out of order are dropped by reason; the rest stays."""
    n = len(ride.lon)
    aside, twice, late = n // 3, n // 2, 2 * n // 3
    plain = np.delete(np.arange(n), [aside])
    lon_shift = np.zeros(n)
    lon_shift[aside] = 400.0 / (111_320.0 * np.cos(np.radians(ride.lat[aside])))
    index = np.insert(np.arange(n), [twice + 1, late + 5], [twice, late])
    detector = Detector(ride.built.streets, ride.settings, threads=1)

    def run(rows: NDArray[np.int64], shift: NDArray[np.float64]) -> dict[str, Any]:
        states = new_states(1)
        columns = (ride.t_us[rows], (ride.lon + shift)[rows], ride.lat[rows])
        first = detector.feed(states, np.zeros(len(rows), np.int32), *columns)
        return joined([first, detector.close(states)])

    expected, got = run(plain, np.zeros(n)), run(index, lon_shift)
    assert n - 1 == got["n_used"]
    dropped = dict(zip(DROP_REASONS, got["dropped"].tolist(), strict=True))
    assert (dropped["duplicate"], dropped["late"]) == (1, 1)
    assert dropped["impossible_speed"] + dropped["outside_area"] == 1
    assert got["dropped"].sum() == 3
    for name in ("passages", "sections", "unfinished", "trips"):
        np.testing.assert_array_equal(expected[name], got[name], err_msg=name)


def test_gap_in_a_ride_parts_it_into_two_trips(ride: Ride) -> None:
    """Fixes taken out for longer than `max_gap_s` end the first trip at the last fix before the gap."""
    gap_s = int(ride.settings.trips.max_gap_s) + 1
    middle = len(ride.lon) // 2
    rows = np.concatenate([np.arange(middle), np.arange(middle + gap_s - 1, len(ride.lon))])
    states = new_states(1)
    detector = Detector(ride.built.streets, ride.settings, threads=1)
    first = detector.feed(
        states, np.zeros(len(rows), np.int32), ride.t_us[rows], ride.lon[rows], ride.lat[rows]
    )
    trips = joined([first, detector.close(states)])["trips"]
    assert [END_REASONS.index("gap"), END_REASONS.index("close")] == trips["end_reason"].tolist()
    assert [middle, len(rows) - middle] == trips["n_pings"].tolist()
    assert [ride.t_us[middle - 1], ride.t_us[-1]] == trips["end_us"].tolist()
    whole = np.delete(np.arange(len(ride.lon)), middle + np.arange(gap_s - 2))
    states = new_states(1)
    first = detector.feed(
        states, np.zeros(len(whole), np.int32), ride.t_us[whole], ride.lon[whole], ride.lat[whole]
    )
    assert len(joined([first, detector.close(states)])["trips"]) == 1
