"""The store's file: made, opened, checked, and its transactions."""

import gc
import weakref
from pathlib import Path
from typing import Any

import duckdb
import polars as pl
import pytest

from stream.errors import StoreError
from stream.store import FORMAT_VERSION, Store, database


def test_new_store_names_its_format_and_first_reference(tmp_path: Path) -> None:
    """A store just made says its format and holds the reference that needs no learning."""
    with Store.open(tmp_path / "s.duckdb", create=True) as store:
        assert store.meta()["format_version"] == str(FORMAT_VERSION)
        assert store.meta()["reference_id"] == "1"
    with duckdb.connect(str(tmp_path / "s.duckdb")) as plain:
        rows = plain.execute("select reference_id, basis from reference").fetchall()
    assert rows == [(1, "limit or class default")]


def test_store_is_opened_again_as_it_was(tmp_path: Path) -> None:
    """Opening with `create` leaves a store that is there alone."""
    path = tmp_path / "s.duckdb"
    with Store.open(path, create=True) as store:
        store.put_meta("note", "kept")
        before = store.meta()
    with Store.open(path, create=True) as store:
        assert store.meta() == before
    with Store.open(path, read_only=True) as store:
        assert store.meta() == before


def test_missing_store_is_refused_with_the_mend(tmp_path: Path) -> None:
    """Without `create` a missing store is an error that names the command that makes one."""
    with pytest.raises(StoreError, match=r"no such store; make it with `turntally network EXTRACT`"):
        Store.open(tmp_path / "s.duckdb")
    assert list(tmp_path.iterdir()) == []


def _write_and_fail(store: Store, error: BaseException) -> None:
    """Write inside a transaction, then let it end with an error."""
    with store.transaction():
        store.put_meta("note", "lost")
        raise error


def test_failed_transaction_leaves_nothing(tmp_path: Path) -> None:
    """What ran before an exception inside a transaction is gone, and the exception comes through."""
    with Store.open(tmp_path / "s.duckdb", create=True) as store:
        before = store.meta()
        with pytest.raises(KeyError):
            _write_and_fail(store, KeyError())
        assert store.meta() == before
        with store.transaction():
            store.put_meta("note", "kept")
        assert store.meta() == {**before, "note": "kept"}


def test_interrupted_transaction_leaves_nothing(tmp_path: Path) -> None:
    """An interrupt from the keyboard rolls back like any exception."""
    with Store.open(tmp_path / "s.duckdb", create=True) as store:
        before = store.meta()
        with pytest.raises(KeyboardInterrupt):
            _write_and_fail(store, KeyboardInterrupt())
        assert store.meta() == before


def test_transaction_inside_a_transaction_is_misuse(tmp_path: Path) -> None:
    """Transactions don't nest."""
    with Store.open(tmp_path / "s.duckdb", create=True) as store, store.transaction():
        with pytest.raises(ValueError, match="open already"), store.transaction():
            pass
        store.put_meta("note", "kept")


def test_wide_sums_pass_in_and_out(tmp_path: Path) -> None:
    """Sums beyond 64 bits go in as Int128 and come back the same."""
    moment = pl.DataFrame(
        {"tally": ["t"], "stratum_id": [5], "n": [2], "sum": [-(2**100)], "sum_sq": [2**120]},
        schema_overrides={"sum": pl.Int128, "sum_sq": pl.Int128},
    )
    with Store.open(tmp_path / "s.duckdb", create=True) as store:
        store.run("batch/add_moment", {"batch_id": 1}, moment)
        got = store.run("audit/no_orphan")
    with duckdb.connect(str(tmp_path / "s.duckdb")) as plain:
        rows = plain.execute("select sum, sum_sq from moment").fetchall()
    assert rows == [(-(2**100), 2**120)]
    assert ("moment", "batch 1", 1) in got


def test_frame_gives_python_values_back(tmp_path: Path) -> None:
    """A query comes back as a frame with typed columns, also when it is empty."""
    with Store.open(tmp_path / "s.duckdb", create=True) as store:
        got = store.frame("ledger/all_batch")
    assert got.height == 0
    assert got.schema["rows_in"] == pl.Int64
    assert got.schema["started_at"] == pl.Datetime("us")


def test_streets_of_a_store_without_network_are_refused(tmp_path: Path) -> None:
    """A store without network says which command loads one."""
    with (
        Store.open(tmp_path / "s.duckdb", create=True) as store,
        pytest.raises(StoreError, match="holds no network; run `turntally network EXTRACT` first"),
    ):
        store.streets()


def test_frames_written_are_freed_before_the_commit(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A batch of any size holds one chunk's rows: what was written is not kept until the commit."""
    seen: list[weakref.ref[Any]] = []
    plain = database._readable

    def noted(incoming: pl.DataFrame | None) -> Any:
        table = plain(incoming)
        if table is not None:
            seen.append(weakref.ref(table))
        return table

    monkeypatch.setattr(database, "_readable", noted)
    counted = pl.DataFrame({"reason": ["late"], "n": [1]})
    with Store.open(tmp_path / "s.duckdb", create=True) as store, store.transaction():
        for batch_id in (1, 2, 3):
            store.run("batch/put_batch_count", {"batch_id": batch_id}, counted)
        gc.collect()
        assert [one() for one in seen] == [None, None, None]
