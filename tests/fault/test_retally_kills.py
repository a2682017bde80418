"""Killed while it counts anew, a store stands as before; run again, the new counts are whole."""

import json
import random
from pathlib import Path

import pytest
import yaml

from tests import days, job
from tests.forks import Forks, Strike, can_fork
from tests.job import STORE, Stage, differing, finish, holds, set_back, spread, strike
from tests.town import lon_lat

pytestmark = pytest.mark.skipif(not can_fork(), reason="needs forks and SIGKILL")
COMMAND = ("retally", "--config", "other.yaml", "--zones", "zones.geojson")
SEED = 20261202
OTHER = {
    "trips": days.SETTINGS["trips"],
    "time": {"bands": {"early": 0, "late": 12}},
    "maneuver": {"plain_deg": 80},
    "tallies": {"by hour": {"value": "delay", "dimensions": ["zone", "maneuver", "hour"]}},
    "run": {"threads": 1},
}


@pytest.fixture(scope="module")
def stage(forks: Forks, tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Stage]:
    """Give a folder with three days in, and the retally as an undisturbed run does it."""
    folder = job.lay_out(tmp_path_factory.mktemp("retally"))
    (folder / "other.yaml").write_text(yaml.safe_dump(OTHER), encoding="utf-8")
    ring = [
        list(lon_lat(x, y)) for x, y in [(-400, -400), (400, -400), (400, 900), (-400, 900), (-400, -400)]
    ]
    area = {"type": "Polygon", "coordinates": [ring]}
    zone = {"type": "Feature", "properties": {"name": "west"}, "geometry": area}
    text = json.dumps({"type": "FeatureCollection", "features": [zone]})
    (folder / "zones.geojson").write_text(text, encoding="utf-8")
    for args in (("network", "town.osm"), ("ingest", "1.csv", "2.csv", "3.csv", "--close")):
        forks.done(*args, cwd=folder)
    before = folder / "before.duckdb"
    before.write_bytes((folder / STORE).read_bytes())
    held_before = holds(before)
    ended = forks.done(*COMMAND, cwd=folder)
    held = holds(folder / STORE)
    assert job.is_sound(folder / STORE)
    assert {"junction", "link", "movement", "zone", "passage", "histogram"} <= set(
        differing(held_before, held)
    )
    return folder, Stage(COMMAND, True, before, held_before, held, tuple(ended.steps), 1.0)


@pytest.mark.parametrize("n", [12, pytest.param(1000, marks=pytest.mark.slow)])
def test_kill_at_steps_leaves_old_or_new(forks: Forks, stage: tuple[Path, Stage], n: int) -> None:
    """Before the commit the store is as it was, after it as it is to be; the same command then does it.

    In full at every step, else at some, those around the commit among them.
    """
    folder, whole = stage
    last = len(whole.steps)
    around = range(whole.commit_step - 2, min(whole.commit_step + 2, last + 1))
    for step in sorted({*spread(n, range(1, last + 1)), *around}):
        store = set_back(folder, whole)
        assert strike(forks, folder, whole, Strike(step)).was_killed, whole.steps[step - 1]
        wanted = whole.held if step >= whole.commit_step else whole.held_before
        assert differing(holds(store), wanted) == [], whole.steps[step - 1]
    finish(forks, folder, whole)
    assert job.is_sound(folder / STORE)


def test_kill_at_a_moment_leaves_old_or_new(forks: Forks, stage: tuple[Path, Stage]) -> None:
    """Whenever it is killed around the commit, the store is as it was or as it is to be, nothing between."""
    folder, whole = stage
    dice = random.Random(SEED)
    for _ in range(6):
        store = set_back(folder, whole)
        after_s = dice.uniform(0, 0.03)
        strike(forks, folder, whole, Strike(whole.commit_step - 1, after_s))
        held = holds(store)
        assert [] in (differing(held, whole.held_before), differing(held, whole.held)), after_s
    finish(forks, folder, whole)
