"""Killed at any moment and started again, a job leaves what an undisturbed run leaves: row for row.

In full (`pytest -m slow tests/fault/test_kills.py`) each step of each command is tried, and 20 random moments
of each; a share of them in the default run.
"""

import hmac
import random
from pathlib import Path

import duckdb
import pytest

from tests import job
from tests.days import archive, by_day
from tests.forks import Forks, Strike, can_fork
from tests.job import KEY, STORE, Stage, finish, holds, set_back, spread, strike

pytestmark = pytest.mark.skipif(not can_fork(), reason="needs forks and SIGKILL")
N_STAGES = len(job.COMMANDS)
SEED = 20261201


@pytest.fixture(scope="module")
def stages(forks: Forks, tmp_path_factory: pytest.TempPathFactory) -> list[Stage]:
    """Give the job's stages as an undisturbed run goes through them."""
    return job.undisturbed(forks, job.lay_out(tmp_path_factory.mktemp("calm")))


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """Give a folder for a run that is struck."""
    return job.lay_out(tmp_path)


def kill_at_steps(forks: Forks, folder: Path, stage: Stage, steps: list[int]) -> int:
    """Kill a command at steps; each time the store stands at the commit before or, past it, after."""
    for step in steps:
        store = set_back(folder, stage)
        ended = strike(forks, folder, stage, Strike(step))
        assert ended.was_killed, (step, ended)
        if stage.before is not None:
            committed = stage.held if step >= stage.commit_step else stage.held_before
            assert job.differing(holds(store), committed) == [], stage.steps[step - 1]
        finish(forks, folder, stage)
    assert job.is_sound(folder / STORE)
    return len(steps)


def kill_at_moments(forks: Forks, folder: Path, stage: Stage, n: int, dice: random.Random) -> int:
    """Kill a command n times at random moments, from where the last kill left it, until it is done."""
    store, killed = folder / STORE, 0
    for _ in range(10 * n):
        phase = dice.choice(("any", "any", "before commit", "before Store.close"))
        step = 0 if phase == "any" else stage.steps.index(phase) + 1
        after_s = dice.uniform(0, stage.seconds if phase == "any" else 0.02)
        killed += strike(forks, folder, stage, Strike(step, after_s)).was_killed
        held = holds(store)
        if held == stage.held:
            set_back(folder, stage)
        elif stage.before is not None:
            assert job.differing(held, stage.held_before) == []
        if killed == n:
            break
    finish(forks, folder, stage)
    assert job.is_sound(store)
    return killed


@pytest.mark.parametrize(("number", "n"), [(0, 1), (1, 2), (2, 3), (4, 1), (6, 2), (7, 1), (9, 1)])
def test_kill_at_some_steps_leaves_a_commit(
    forks: Forks, stages: list[Stage], folder: Path, number: int, n: int
) -> None:
    """Eleven kills at steps spread over seven commands."""
    stage = stages[number]
    assert kill_at_steps(forks, folder, stage, spread(n, range(2, len(stage.steps) + 1))) == n


def test_kill_at_some_moments_leaves_a_commit(forks: Forks, stages: list[Stage], folder: Path) -> None:
    """A kill at a random moment of each command of a whole job, each started again until it is done."""
    dice = random.Random(SEED)
    for stage in stages:
        assert kill_at_moments(forks, folder, stage, 1, dice) == 1


@pytest.mark.slow
@pytest.mark.parametrize("number", range(N_STAGES))
def test_kill_at_every_step_leaves_a_commit(
    forks: Forks, stages: list[Stage], folder: Path, number: int
) -> None:
    """Each step of each command."""
    stage = stages[number]
    every = list(range(1, len(stage.steps) + 1))
    assert kill_at_steps(forks, folder, stage, every) == len(every) > 30


@pytest.mark.slow
@pytest.mark.parametrize("seed", [1, 2])
def test_kill_at_many_moments_leaves_a_commit(
    forks: Forks, stages: list[Stage], folder: Path, seed: int
) -> None:
    """Ten random moments of each command, twice."""
    dice = random.Random(SEED + seed)
    for stage in stages:
        assert kill_at_moments(forks, folder, stage, 10, dice) == 10


@pytest.mark.parametrize("n", [3, pytest.param(1000, marks=pytest.mark.slow)])
def test_kill_around_the_first_key_leaves_names_of_one_key(
    forks: Forks, stages: list[Stage], folder: Path, n: int
) -> None:
    """Killed at any step of writing the key, the next run names all vehicles with the one key on file.

    Names by RFC 2104 (HMAC) over SHA-256 as Python's own library gives it.
    """
    stage = stages[1]
    set_back(folder, stage)
    (folder / KEY).unlink()
    steps = forks.done(*stage.args, cwd=folder).steps
    first, last = (steps.index(f"{end} VehicleNames.save") for end in ("before", "after"))
    assert last - first > 3
    for step in spread(n, range(first + 2, last + 1)):
        store = set_back(folder, stage)
        (folder / KEY).unlink(missing_ok=True)
        assert strike(forks, folder, stage, Strike(step)).was_killed
        forks.done(*stage.args, cwd=folder)
        secret = bytes.fromhex((folder / KEY).read_text(encoding="ascii"))
        ids = {row[0] for row in by_day(archive(n_vehicles=5, n_drives=1))[0]}
        wanted = {hmac.digest(secret, one.encode(), "sha256")[:8].hex() for one in ids}
        with duckdb.connect(str(store), read_only=True) as con:
            found = {row[0] for row in con.execute("select distinct vehicle from passage").fetchall()}
        assert found
        assert found <= wanted
