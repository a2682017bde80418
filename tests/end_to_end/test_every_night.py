"""The section "Every night" of README, followed word for word, and the commands that keep a store."""

import os
import pty
import shlex
import shutil
import subprocess
from pathlib import Path

import pytest

from tests.archive import dump
from tests.command import COMMAND, done, done_json, environment, refused, turntally
from tests.drives import crossings, write_csv
from tests.readme import README

_START, _END = "<!-- every night -->", "<!-- every night end -->"


def told() -> list[list[str]]:
    """Read the commands of the section."""
    block = README.read_text(encoding="utf-8").partition(_START)[2].partition(_END)[0]
    return [shlex.split(line) for line in block.strip().splitlines() if not line.startswith("```")]


@pytest.fixture(scope="module")
def night(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, dict[str, list[str]]]:
    """Follow README in an empty folder; give where the commands left us and what each printed."""
    here, said = tmp_path_factory.mktemp("night"), {}
    for command, *args in told():
        if command == "cd":
            here /= args[0]
        else:
            assert command == "turntally"
            said.setdefault(" ".join(args), []).append(done(*args, cwd=here))
    return here, said


def test_readme_night_can_be_followed(night: tuple[Path, dict[str, list[str]]]) -> None:
    """Every command works; the same day again is known, what is open is closed, the store is sound."""
    here, said = night
    twice = said["ingest pings_2026-06-07.parquet"]
    assert [("taken in" in one, "already in" in one) for one in twice] == [(True, False), (False, True)]
    assert "closed" in said["ingest --close"][0]
    assert said["audit"][0].splitlines()[-1] == "sound"
    whole = done_json("status", cwd=here)
    assert (whole["n_batches"], whole["open_trips"]) == (4, 0)
    copied = done_json("status", "--store", "yesterday.duckdb", cwd=here)
    assert [b["batch"] for b in copied["batches"]] == ["pings_2026-06-05.parquet"]


def test_days_in_the_wrong_order_give_the_same_passages(
    night: tuple[Path, dict[str, list[str]]], tmp_path: Path
) -> None:
    """The invented town sleeps at night: its days taken in backwards give the same rows."""
    here, _ = night
    store = tmp_path / "s.duckdb"
    shutil.copy(here / "turntally.duckdb.key", tmp_path / "s.duckdb.key")
    done("network", "town.osm", "--zones", "zones.geojson", "--store", store, cwd=here)
    days = sorted(here.glob("pings_*"), reverse=True)
    kinds = [done_json("ingest", d, "--store", store, cwd=here)["batches"][0]["is_backfill"] for d in days]
    done("ingest", "--close", "--store", store, cwd=here)
    assert kinds == [False, True, True]
    assert done_json("audit", "--store", store, cwd=here)["is_sound"]
    right, back = (dump(p, by_batch=False) for p in (here / "turntally.duckdb", store))
    for table in ("passage", "section", "stratum"):
        assert right[table] == back[table]


@pytest.fixture
def job(town_osm: Path, tmp_path: Path) -> Path:
    """Give a folder with a store of two days."""
    rows = crossings(8)
    write_csv(tmp_path / "1.csv", rows)
    write_csv(tmp_path / "2.csv", [(v, t + 86_400, lon, lat) for v, t, lon, lat in rows])
    done("network", town_osm, cwd=tmp_path)
    done("ingest", "1.csv", "2.csv", cwd=tmp_path)
    return tmp_path


def test_retract_by_name_and_by_number(job: Path) -> None:
    """A batch is known by its name or number; text and JSON say what was taken back."""
    whole = done_json("retract", "2.csv", cwd=job)
    assert (whole["batch_id"], whole["is_exact"]) == (2, True)
    assert "the store is as if it had never been in" in done("retract", "1", cwd=job)
    assert done_json("status", cwd=job)["n_batches"] == 0
    assert "no batch 1; none is in" in refused("retract", "1", cwd=job)


def test_compact_says_first_what_becomes_impossible(job: Path) -> None:
    """Without a terminal it goes on; the warning comes on stderr, before the result."""
    ran = turntally("compact", "--before", "2100-01-01", cwd=job)
    assert ran.returncode == 0
    assert "what becomes impossible: to retract them" in ran.stderr
    assert "2 batches rolled up" in ran.stdout
    assert "was rolled up" in refused("retract", "1.csv", cwd=job)
    assert "nothing to roll up" in done("compact", "--before", "2100-01-01", cwd=job)
    assert done_json("audit", cwd=job)["is_sound"]
    assert "rolled up" in done("status", cwd=job)
    assert "is no day" in refused("compact", "--before", "soon", cwd=job, code=2)


@pytest.mark.parametrize(("answer", "code"), [("y", 0), ("n", 1)])
def test_compact_asks_on_a_terminal(job: Path, answer: str, code: int) -> None:
    """A person is asked once; a no changes nothing."""
    here, there = pty.openpty()
    with subprocess.Popen(
        [*COMMAND, "compact", "--before", "2100-01-01"],
        cwd=job,
        env=environment(),
        stdin=there,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    ) as asked:
        os.write(here, f"{answer}\n".encode())
        _, said = asked.communicate(timeout=120)
    os.close(here)
    os.close(there)
    assert (asked.returncode, "go on?" in said) == (code, True)
    rolled = [b["rolled_into"] for b in done_json("status", cwd=job)["batches"]]
    assert rolled == ([2, 2] if answer == "y" else [None, None])


def test_snapshot_can_be_read_while_the_store_is_held(job: Path) -> None:
    """While another process writes, a reader is told of the copy, and the copy gives what the store held."""
    done("snapshot", "--to", "copy.duckdb", cwd=job)
    wanted = done_json("status", cwd=job)["passages"]
    hold = (
        "import sys; from pathlib import Path; from stream.store import Store\n"
        "with Store.open(Path('turntally.duckdb')): print('open', flush=True); sys.stdin.readline()"
    )
    pipe = subprocess.PIPE
    command = [COMMAND[0], "-c", hold]
    with subprocess.Popen(command, cwd=job, env=environment(), stdin=pipe, stdout=pipe, text=True) as other:
        assert other.stdout is not None
        assert other.stdout.readline() == "open\n"
        assert "ingest --snapshot FILE" in refused("status", cwd=job)
        assert "in use by another process" in refused("ingest", "1.csv", cwd=job)
        assert "in use by another process" in refused("snapshot", "--to", "copy.duckdb", cwd=job)
        assert wanted == done_json("status", "--store", "copy.duckdb", cwd=job)["passages"]
        other.communicate("\n")
    assert done_json("snapshot", "--to", "copy.duckdb", cwd=job)["size_bytes"] > 0
