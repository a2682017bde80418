"""A batch that does not come to its end leaves the store at its last commit, and can be run again."""

import gzip
import os
import subprocess
import sys
import tempfile
import threading
from collections.abc import Iterator
from pathlib import Path

import polars as pl
import pytest

from stream.config import Settings
from stream.errors import InputError, StoreError
from stream.ingest import Progress, ingest
from stream.store import Store, put_network
from stream.store.audit import run_audit
from stream.store.ledger import network_config
from tests.archive import archive, dump, write
from tests.stand_in import install, plan

CHILD = Path(__file__).with_name("child.py")
ROOT = CHILD.parents[2]
CHILD_ENV = {**os.environ, "PYTHONPATH": str(ROOT)}
STEPS = (
    ("batch/put_passage", 1),
    ("batch/put_passage", 2),
    ("batch/add_histogram", 1),
    ("carry/clear_superseded", 1),
    ("carry/put_carry", 1),
    ("batch/put_batch", 1),
    ("commit", 1),
)


@pytest.fixture
def plain_ids(make_settings: object) -> Settings:
    """Give settings as the child has them."""
    assert callable(make_settings)
    made = make_settings({"privacy.plain_ids": True, "run.chunk_rows": 40})
    assert isinstance(made, Settings)
    return made


@pytest.fixture
def days(tmp_path: Path) -> list[Path]:
    """Give an archive of two days, in two files."""
    rows = sorted(archive(), key=lambda r: r[1])
    return [write(tmp_path / "1.csv", rows[:60]), write(tmp_path / "2.csv", rows[60:])]


@pytest.fixture
def store_path(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, plain_ids: Settings, days: list[Path]
) -> Path:
    """Give a store with the first day in."""
    install(monkeypatch.setattr)
    path = tmp_path / "s.duckdb"
    with Store.open(path, create=True) as store:
        put_network(store, plan(), network_config(plain_ids))
    ingest(path, days[:1], plain_ids)
    return path


@pytest.fixture
def undisturbed(tmp_path: Path, store_path: Path, plain_ids: Settings, days: list[Path]) -> object:
    """Give what a store holds in which the second day met no trouble."""
    path = tmp_path / "calm.duckdb"
    path.write_bytes(store_path.read_bytes())
    ingest(path, days[1:], plain_ids)
    return dump(path)


def child(store: Path, file: Path, *more: str) -> subprocess.CompletedProcess[str]:
    """Run one ingest as a process."""
    command = [sys.executable, str(CHILD), str(store), str(file), *more]
    return subprocess.run(command, capture_output=True, text=True, env=CHILD_ENV, cwd=ROOT, check=False)


def sound(path: Path) -> bool:
    """Tell whether the audit finds nothing."""
    with Store.open(path, read_only=True) as store:
        return not any(one["n_faults"] for one in run_audit(store))


@pytest.mark.parametrize(("step", "n"), STEPS)
def test_killed_batch_leaves_the_last_commit(
    store_path: Path, days: list[Path], plain_ids: Settings, undisturbed: object, step: str, n: int
) -> None:
    """Killed before any step of a batch, the store is as before it; the same command then does the whole."""
    before = dump(store_path)
    killed = child(store_path, days[1], "--kill-before", step, str(n))
    assert killed.returncode == -9, killed.stderr
    assert dump(store_path) == before
    (report,) = ingest(store_path, days[1:], plain_ids)
    assert report["status"] == "taken in"
    assert dump(store_path) == undisturbed
    assert sound(store_path)


def test_child_without_trouble_does_the_whole(
    store_path: Path, days: list[Path], undisturbed: object
) -> None:
    """The process that the other tests kill would have given what an undisturbed run gives."""
    done = child(store_path, days[1])
    assert (done.returncode, done.stdout) == (0, "taken in\n"), done.stderr
    assert dump(store_path) == undisturbed


@pytest.mark.skipif(sys.platform == "win32", reason="needs a limit on the size of files")
@pytest.mark.parametrize("room", [0, 1_000, 4_000])
def test_full_disk_leaves_the_last_commit(
    store_path: Path, days: list[Path], plain_ids: Settings, undisturbed: object, room: int
) -> None:
    """Where the store can't grow, the error says to make room, and nothing of the batch is in."""
    before = dump(store_path)
    starved = child(store_path, days[1], "--room", str(room))
    assert starved.returncode == 1, starved.stderr
    assert "make room or mend the disk, then run the command again" in starved.stdout
    assert dump(store_path) == before
    ingest(store_path, days[1:], plain_ids)
    assert dump(store_path) == undisturbed


def test_interrupt_leaves_the_last_commit(
    store_path: Path, days: list[Path], plain_ids: Settings, undisturbed: object
) -> None:
    """An interrupt in the middle of a batch rolls it back and leaves no thread behind."""
    before, threads = dump(store_path), threading.active_count()

    def stop(at: Progress) -> None:
        if at.rows > 40:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        ingest(store_path, days[1:], plain_ids, progress=stop)
    assert threading.active_count() == threads
    assert dump(store_path) == before
    ingest(store_path, days[1:], plain_ids)
    assert dump(store_path) == undisturbed


def _parquet(path: Path) -> Path:
    rows = sorted(archive(), key=lambda r: r[1])[60:]
    columns = dict(zip(("vehicle_id", "ts", "lon", "lat"), zip(*rows, strict=True), strict=True))
    pl.DataFrame({name: list(values) for name, values in columns.items()}).write_parquet(path)
    return path


@pytest.mark.parametrize("kind", ["parquet", "csv.gz"])
def test_truncated_file_leaves_the_last_commit(
    store_path: Path, tmp_path: Path, days: list[Path], plain_ids: Settings, kind: str
) -> None:
    """A file that was cut off while it was copied is refused by name, and nothing of it is in."""
    before = dump(store_path)
    cut = tmp_path / f"cut.{kind}"
    if kind == "parquet":
        whole = _parquet(tmp_path / "whole.parquet").read_bytes()
    else:
        whole = gzip.compress(days[1].read_bytes())
    cut.write_bytes(whole[: len(whole) * 2 // 3])
    with pytest.raises(InputError, match=r"cut\."):
        ingest(store_path, [cut], plain_ids)
    assert dump(store_path) == before
    cut.write_bytes(whole)
    (report,) = ingest(store_path, [cut], plain_ids)
    assert report["status"] == "taken in"


HOLD = """
import sys
from pathlib import Path
from stream.store import Store
with Store.open(Path(sys.argv[1])) as store:
    print("open", flush=True)
    sys.stdin.readline()
"""


def test_locked_store_is_refused(store_path: Path, days: list[Path], plain_ids: Settings) -> None:
    """While another process has the store, a batch is refused with the reason, and works once it is free."""
    command = [sys.executable, "-c", HOLD, str(store_path)]
    pipe = subprocess.PIPE
    with subprocess.Popen(command, stdin=pipe, stdout=pipe, text=True, env=CHILD_ENV) as other:
        assert other.stdout is not None
        assert other.stdout.readline() == "open\n"
        with pytest.raises(StoreError, match=r"s\.duckdb: is in use by another process"):
            ingest(store_path, days[1:], plain_ids)
        other.communicate("\n")
    (report,) = ingest(store_path, days[1:], plain_ids)
    assert report["status"] == "taken in"


@pytest.fixture
def open_folder() -> Iterator[Path]:
    """Give a folder that every user may look into, but only its owner write to."""
    with tempfile.TemporaryDirectory() as name:
        Path(name).chmod(0o755)
        yield Path(name)


@pytest.mark.skipif(not hasattr(os, "geteuid"), reason="needs users and rights of files")
def test_read_only_store_is_refused(store_path: Path, days: list[Path], open_folder: Path) -> None:
    """A store that may only be read takes no batch; the error names the rights, the file stays as it is."""
    held, file, before = open_folder / "s.duckdb", open_folder / "2.csv", store_path.read_bytes()
    held.write_bytes(before)
    file.write_bytes(days[1].read_bytes())
    held.chmod(0o444)
    open_folder.chmod(0o555)
    other_user = ("--user", "65534") if os.geteuid() == 0 else ()
    refused = child(held, file, *other_user)
    open_folder.chmod(0o755)
    assert refused.returncode == 1, refused.stderr
    assert "s.duckdb: can't be written; mend the rights of file and folder" in refused.stdout
    assert held.read_bytes() == before
