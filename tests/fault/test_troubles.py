"""Trouble of all kinds in the middle of a batch: a clear error, exit 1, and the store at its last commit.

Each time the same command, run again once the trouble is over, leaves what an undisturbed run leaves.
"""

import json
import os
import random
import shutil
import signal
import subprocess
import sys
import tempfile
from collections.abc import Iterator
from datetime import timedelta
from pathlib import Path

import duckdb
import pytest

from stream.config import load_settings
from stream.errors import StoreError
from stream.ingest import ingest
from stream.store import Store
from tests import days, job
from tests.cuts import write_as
from tests.forks import Ended, Forks, Strike, can_fork
from tests.job import STORE, Stage, differing, finish, holds, set_back, spread, strike

pytestmark = pytest.mark.skipif(not can_fork(), reason="needs forks and signals")
NOBODY = 65534
FORMS = ("csv.gz", "ndjson", "parquet")
SEED = 7


@pytest.fixture(scope="module")
def stages(forks: Forks, tmp_path_factory: pytest.TempPathFactory) -> list[Stage]:
    """Give the job's stages as an undisturbed run goes through them."""
    return job.undisturbed(forks, job.lay_out(tmp_path_factory.mktemp("calm")))


@pytest.fixture
def folder(tmp_path: Path, stages: list[Stage]) -> Path:
    """Give a folder where the second day is to come."""
    set_back(job.lay_out(tmp_path), stages[2])
    return tmp_path


def told(ended: Ended, code: int = 1) -> str:
    """Give the one message of a command that was refused."""
    assert ended.code == code, ended
    assert "Traceback" not in ended.stderr
    assert ended.stderr.startswith("turntally: ")
    return ended.stderr


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """Give a folder on a disk of its own, as small as can be; `grow` enlarges it."""
    disk = tmp_path / "disk"
    disk.mkdir()
    mount = ["mount", "-t", "tmpfs", "-o", "size=4k", "tmpfs", str(disk)]
    if sys.platform != "linux" or subprocess.run(mount, capture_output=True, check=False).returncode:
        pytest.skip("needs Linux and the right to mount a small disk; test_batch.py limits files instead")
    yield disk
    subprocess.run(["umount", "-l", str(disk)], check=True)


def grow(disk: Path, size: int) -> None:
    """Give a small disk another size."""
    subprocess.run(["mount", "-o", f"remount,size={size}", str(disk)], check=True)


@pytest.mark.parametrize("room", [0, 16 << 10])
def test_full_disk_leaves_the_last_commit(
    forks: Forks, stages: list[Stage], small_disk: Path, room: int
) -> None:
    """A disk that is full in the middle of a batch; once there is room, the same command does the whole."""
    stage = stages[2]
    grow(small_disk, 200 << 20)
    store = set_back(job.lay_out(small_disk), stage)
    filled = shutil.disk_usage(small_disk).used
    grow(small_disk, filled + room)
    message = told(strike(forks, small_disk, stage))
    assert "make room or mend the disk, then run the command again" in message
    grow(small_disk, 200 << 20)
    assert differing(holds(store), stage.held_before) == []
    finish(forks, small_disk, stage)


@pytest.mark.slow
def test_disk_of_any_size_leaves_a_commit(forks: Forks, stages: list[Stage], small_disk: Path) -> None:
    """Disks that are full at forty places of a batch, up to where it fits; what is said is what holds."""
    stage = stages[2]
    codes = []
    for number in range(40):
        grow(small_disk, 200 << 20)
        store = set_back(job.lay_out(small_disk), stage)
        grow(small_disk, shutil.disk_usage(small_disk).used + number * (8 << 10))
        ended = strike(forks, small_disk, stage)
        grow(small_disk, 200 << 20)
        codes.append(ended.code)
        if ended.code:
            assert "make room" in told(ended)
        assert differing(holds(store), stage.held_before if ended.code else stage.held) == [], ended
        finish(forks, small_disk, stage)
    assert {*codes} == {0, 1}


@pytest.fixture
def open_folder() -> Iterator[Path]:
    """Give a folder that every user may look into."""
    with tempfile.TemporaryDirectory() as name:
        Path(name).chmod(0o755)
        yield Path(name)
        Path(name).chmod(0o755)


def opens_to_all(path: Path) -> bool:
    """Tell whether every user may look into a folder."""
    return all(folder.stat().st_mode & 0o005 == 0o005 for folder in (path, *path.parents))


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() != 0, reason="needs root, to be somebody else")
@pytest.mark.skipif(
    not all(opens_to_all(Path(p).resolve()) for p in (sys.prefix, sys.base_prefix, Path(__file__).parent)),
    reason="needs an environment and a checkout that somebody else may read",
)
@pytest.mark.parametrize(("of_file", "of_folder"), [(0o444, 0o555), (0o444, 0o777), (0o666, 0o555)])
def test_read_only_store_or_folder_is_refused(
    forks: Forks, stages: list[Stage], open_folder: Path, of_file: int, of_folder: int
) -> None:
    """Without the right to write to the store, or beside it, nothing is taken in and the rights are named."""
    store = set_back(job.lay_out(open_folder), stages[2])
    for file in open_folder.iterdir():
        file.chmod(0o644)
    store.chmod(of_file)
    open_folder.chmod(of_folder)
    message = told(strike(forks, open_folder, stages[2], user=NOBODY))
    assert "mend the rights of file and folder" in message
    open_folder.chmod(0o755)
    store.chmod(0o644)
    assert differing(holds(store), stages[2].held_before) == []
    finish(forks, open_folder, stages[2])


@pytest.mark.parametrize("args", [("ingest", "2.csv"), ("status",), ("audit",)])
def test_second_process_is_refused(
    forks: Forks, stages: list[Stage], folder: Path, args: tuple[str, ...]
) -> None:
    """While one process has the store to write, another one is told so, writer or reader."""
    with Store.open(folder / STORE):
        message = told(forks.run(*args, cwd=folder))
    assert f"{STORE}: is in use by another process" in message
    finish(forks, folder, stages[2])


@pytest.mark.parametrize("form", ["csv", *(pytest.param(f, marks=pytest.mark.slow) for f in FORMS)])
@pytest.mark.parametrize("step", ["before begin", "before Detector.feed"])
@pytest.mark.parametrize("what", ["truncate", "append", "replace", "remove"])
def test_file_that_changes_meanwhile_is_refused(
    forks: Forks, stages: list[Stage], folder: Path, form: str, step: str, what: str
) -> None:
    """A file cut off, added to, replaced or taken away under the run: nothing of it is in."""
    rows = days.by_day(days.archive(n_vehicles=5, n_drives=1))[1]
    file = folder / f"day.{form}"
    write_as(file, rows)
    ended = forks.run("ingest", file.name, cwd=folder, meddle=(step, what, file))
    assert "day" in told(ended)
    if step == "before Detector.feed" and what != "remove":
        assert f"{file.name}: changed while it was taken in" in ended.stderr
    assert differing(holds(folder / STORE), stages[2].held_before) == []
    write_as(file, rows)
    forks.done("ingest", file.name, cwd=folder)
    found, wanted = holds(folder / STORE), stages[2].held
    assert set(differing(found, wanted)) <= {"batch"}


def interrupt(forks: Forks, folder: Path, stage: Stage, at: Strike) -> bool:
    """Interrupt a command; tell whether its end came first."""
    store = set_back(folder, stage)
    ended = strike(forks, folder, stage, at)
    held = holds(store)
    if ended.code == 0:
        assert differing(held, stage.held) == []
        return True
    assert "interrupted; the store stands at its last commit" in told(ended, 130)
    assert [] in (differing(held, stage.held_before), differing(held, stage.held))
    finish(forks, folder, stage)
    return False


@pytest.mark.parametrize("n", [8, pytest.param(1000, marks=pytest.mark.slow)])
def test_interrupt_at_a_step_leaves_a_commit(forks: Forks, stages: list[Stage], folder: Path, n: int) -> None:
    """An interrupt from the keyboard at steps of a batch: exit 130, what is kept is said and kept."""
    stage = stages[2]
    for step in spread(n, range(1, len(stage.steps))):
        assert not interrupt(forks, folder, stage, Strike(step, signal=signal.SIGINT)), stage.steps[step - 1]


@pytest.mark.parametrize("n", [4, pytest.param(60, marks=pytest.mark.slow)])
def test_interrupt_at_a_moment_leaves_a_commit(
    forks: Forks, stages: list[Stage], folder: Path, n: int
) -> None:
    """An interrupt at random moments, most of them in the middle of somebody else's code."""
    dice = random.Random(SEED)
    stage = stages[2]
    ends_first = [
        interrupt(forks, folder, stage, Strike(1, dice.uniform(0, stage.seconds), signal.SIGINT))
        for _ in range(n)
    ]
    assert not all(ends_first)


@pytest.mark.parametrize("step", [1, 30])
def test_clock_set_back_leaves_a_ledger_in_order(
    forks: Forks, stages: list[Stage], folder: Path, step: int
) -> None:
    """A clock that is three days behind from a step on changes no row, and no batch ends before it began."""
    stage = stages[2]
    ended = forks.run("--json", *stage.args, cwd=folder, clock_s=-3 * 86_400, clock_step=step)
    assert ended.code == 0, ended.stderr
    (report,) = json.loads(ended.stdout)["batches"]
    assert 0 <= report["seconds"] < 60
    store = folder / STORE
    with duckdb.connect(str(store), read_only=True) as con:
        times = con.execute("select started_at, ended_at from batch order by batch_id").fetchall()
    assert len(times) == 2
    assert all(start <= end for start, end in times)
    assert times[1][0] - times[0][1] < timedelta(0) or step > 1
    finish(forks, folder, stage)
    assert job.is_sound(store)
    for later in stages[3:]:
        finish(forks, folder, later)
    assert job.is_sound(store)


@pytest.mark.parametrize("memory_mb", [1, 3])
def test_memory_of_the_store_at_its_limit_leaves_the_last_commit(
    stages: list[Stage], folder: Path, memory_mb: int
) -> None:
    """Where the engine may use less than it needs, the error names the key, and nothing is in."""
    stage = stages[2]
    plain = load_settings(folder / "turntally.yaml")
    tiny = plain.model_copy(update={"run": plain.run.model_copy(update={"memory_mb": memory_mb})})
    with pytest.raises(StoreError, match=r"ran out of memory; raise run\.memory_mb"):
        ingest(folder / STORE, [folder / "2.csv"], tiny)
    assert differing(holds(folder / STORE), stage.held_before) == []
    ingest(folder / STORE, [folder / "2.csv"], plain)
    assert differing(holds(folder / STORE), stage.held) == []


@pytest.mark.slow
@pytest.mark.skipif(not Path("/proc/self/statm").exists(), reason="needs Linux, to know what a process has")
def test_memory_of_the_process_at_its_limit_leaves_the_last_commit(
    forks: Forks, stages: list[Stage], folder: Path
) -> None:
    """Whatever room is left to the process, its end is a message or that of a library that gives up.

    Libraries of other languages end the process where they get no memory (SIGABRT); the store stays.
    """
    stage = stages[2]
    codes = []
    for more in range(10, 4000, 110):
        store = set_back(folder, stage)
        ended = strike(forks, folder, stage, more_bytes=more << 20)
        codes.append(ended.code)
        if ended.code == 1:
            assert "memory" in told(ended), more
        held = stage.held if ended.code == 0 else stage.held_before
        assert differing(holds(store), held) == [], ended
        finish(forks, folder, stage)
    assert {0, 1} <= {*codes} <= {0, 1, -signal.SIGABRT}, codes
    assert codes[-1] == 0
