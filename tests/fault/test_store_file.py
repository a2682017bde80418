"""Store files that can't be used: each ends with one error that names the file and the mend."""

import subprocess
import sys
from pathlib import Path

import duckdb
import pytest

from stream.errors import StoreError
from stream.store import Store

HOLD = """
import sys
from pathlib import Path
from stream.store import Store
with Store.open(Path(sys.argv[1])) as store:
    print("open", flush=True)
    sys.stdin.readline()
"""


@pytest.mark.parametrize("read_only", [False, True])
def test_store_in_use_is_refused(tmp_path: Path, read_only: bool) -> None:
    """While another process writes, neither a writer nor a reader gets in, and the error says so."""
    path = tmp_path / "s.duckdb"
    Store.open(path, create=True).close()
    command = [sys.executable, "-c", HOLD, str(path)]
    with subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True) as other:
        assert other.stdout is not None
        assert other.stdout.readline() == "open\n"
        with pytest.raises(StoreError, match=r"s\.duckdb: is in use by another process \(one writer"):
            Store.open(path, read_only=read_only)
        other.communicate("\n")
    with Store.open(path, read_only=read_only) as store:
        assert store.run("ledger/all_batch") == []


def test_file_that_is_no_database_is_refused(tmp_path: Path) -> None:
    """A file of another kind is left as it is."""
    path = tmp_path / "s.duckdb"
    path.write_bytes(b"vehicle_id,ts,lon,lat\n" * 1000)
    with pytest.raises(StoreError, match="is not a turntally store; name another file with --store"):
        Store.open(path, create=True)
    assert path.read_bytes() == b"vehicle_id,ts,lon,lat\n" * 1000


def test_database_of_something_else_is_refused(tmp_path: Path) -> None:
    """A DuckDB file with other tables is not made into a store."""
    path = tmp_path / "s.duckdb"
    with duckdb.connect(str(path)) as plain:
        plain.execute("create table sale (id integer)").fetchall()
    with pytest.raises(StoreError, match="is a DuckDB file, no turntally store"):
        Store.open(path, create=True)
    with duckdb.connect(str(path)) as plain:
        assert plain.execute("select table_name from duckdb_tables()").fetchall() == [("sale",)]


@pytest.mark.parametrize("version", ["1", "3", "next"])
def test_store_of_another_format_is_refused(tmp_path: Path, version: str) -> None:
    """An older or newer format is refused with both numbers."""
    path = tmp_path / "s.duckdb"
    with Store.open(path, create=True) as store:
        store.put_meta("format_version", version)
    with pytest.raises(StoreError, match=f"has store format {version}, this program reads format 2"):
        Store.open(path)


def test_folder_in_place_of_a_store_is_refused(tmp_path: Path) -> None:
    """A folder is no store."""
    with pytest.raises(StoreError, match="is a folder; name a file with --store"):
        Store.open(tmp_path, create=True)


def test_store_in_a_missing_folder_is_refused(tmp_path: Path) -> None:
    """The folder of a new store must be there."""
    with pytest.raises(StoreError, match=r"the folder .*gone is missing; make it first"):
        Store.open(tmp_path / "gone" / "s.duckdb", create=True)


@pytest.mark.skipif(not Path("/proc/self").is_dir(), reason="needs a folder where nobody may write")
def test_store_in_a_folder_without_write_access_is_refused() -> None:
    """Where no file can be made, the error says so and names the mend (tried in the kernel's own folder)."""
    with pytest.raises(StoreError, match="--store"):
        Store.open(Path("/proc/self/s.duckdb"), create=True)


def test_read_only_store_refuses_a_write(tmp_path: Path) -> None:
    """A store opened for reading can't be changed."""
    path = tmp_path / "s.duckdb"
    Store.open(path, create=True).close()
    with (
        Store.open(path, read_only=True) as store,
        pytest.raises(StoreError, match="opened for reading"),
        store.transaction(),
    ):
        store.put_meta("note", "x")
