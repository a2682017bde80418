"""`retally` as a process: what it prints, what it refuses, and that the figures follow.

Forty vehicles drive through (0, 1) and (1, 1) of the tiny town at 10 m/s from 8:00 UTC, 9:00 in the town;
half go straight on at (1, 1), half turn right (tests/drives.py, test_cli_job.py).
"""

import json
from pathlib import Path

import pytest

from tests.command import done, done_json, refused
from tests.drives import crossings, write_csv

N_THROUGH, N_RIGHT = 60, 20
BANDS = "time: {bands: {early: 0, nine: 9}}\n"
HOURS = BANDS + "tallies: {by band: {value: delay, dimensions: [zone, maneuver, time_band]}}\n"
AREA = [[9.99, 49.99], [10.002, 49.99], [10.002, 50.02], [9.99, 50.02], [9.99, 49.99]]


@pytest.fixture(scope="module")
def job(town_osm: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Give a folder with the drives taken in, then counted anew by band and zone."""
    home = tmp_path_factory.mktemp("retally")
    write_csv(home / "pings.csv", crossings(40))
    done("network", town_osm, cwd=home)
    done("ingest", "pings.csv", "--close", cwd=home)
    (home / "turntally.yaml").write_text(HOURS)
    area = {"type": "Polygon", "coordinates": [AREA]}
    zone = {"type": "Feature", "properties": {"name": "west"}, "geometry": area}
    (home / "zones.geojson").write_text(json.dumps({"type": "FeatureCollection", "features": [zone]}))
    return home


def test_retally_prints_what_it_did(job: Path) -> None:
    """Rows, changed keys, strata and the changed network, as text and as one object; figures follow."""
    told = done("retally", "--zones", "zones.geojson", cwd=job)
    assert told.startswith("1 batches counted anew: 80 passages, 40 sections, ")
    assert "changed keys: tallies.angle.dimensions: " in told
    assert "strata: 3 by band" in told
    assert "zones or maneuvers changed: the network is " in told
    assert "written anew: 80 passages" in told
    again = done_json("retally", cwd=job)
    assert (again["changed"], again["is_network_changed"], again["tallies"]) == ([], False, {"by band": 3})
    rows = done_json("quantiles", "--tally", "by band", "--by", "zone,maneuver,time_band", cwd=job)["rows"]
    # (0, 1) lies in the west, (1, 1) does not.
    assert {(r["zone"], r["maneuver"], r["time_band"]): r["n"] for r in rows} == {
        ("west", "through", "nine"): 40,
        ("", "through", "nine"): N_THROUGH - 40,
        ("", "right", "nine"): N_RIGHT,
    }
    assert done_json("audit", cwd=job)["is_sound"]


def test_retally_refuses_keys_that_need_pings(job: Path) -> None:
    """A key of detection ends with exit 1, its name and both values; the store stays as it is."""
    (job / "other.yaml").write_text(HOURS + "trips: {max_gap_s: 90}\n")
    before = (job / "turntally.duckdb").read_bytes()
    told = refused("retally", "--config", "other.yaml", cwd=job)
    assert "trips.max_gap_s: 120.0 -> 90.0" in told
    assert "put these keys back, or ingest into another --store" in told
    assert (job / "turntally.duckdb").read_bytes() == before
