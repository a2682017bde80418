"""The one DuckDB file: opened, created, checked, and the only door to SQL.

Guarantee: a store is opened only when its format is ours and no other process holds it; what runs inside
`transaction` is committed as a whole or, on any exception or interrupt, not at all.
"""

from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING, Any, Self

import duckdb
import polars as pl

from stream.errors import StoreError
from stream.store.files import names_in, statement, views_in_order
from stream.tally import BINS_DIGEST

if TYPE_CHECKING:
    import pyarrow as pa

    from stream.network.model import Streets

FORMAT_VERSION = 2
FIRST_REFERENCE = "limit or class default"
_Config = dict[str, str | bool | int | float | list[str]]
_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)


def now_us() -> int:
    """Read the clock: microseconds since 1970, UTC."""
    return (datetime.now(UTC) - _EPOCH) // (datetime.resolution)


def _connect(
    path: Path, read_only: bool, config: dict[str, str | bool | int | float | list[str]]
) -> duckdb.DuckDBPyConnection:
    try:
        return duckdb.connect(str(path), read_only=read_only, config=config)
    except duckdb.Error as err:
        text = str(err)
        if "set lock" in text:
            told = (
                "is in use by another process (one writer at a time, no reader beside it); wait for it to end"
                + (
                    ", or read a copy: `turntally ingest --snapshot FILE` leaves one before it begins"
                    if read_only
                    else ""
                )
            )
        elif "not a valid DuckDB" in text:
            told = "is not a turntally store; name another file with --store"
        elif "Out of Memory" in text:
            told = "can't be opened, DuckDB ran out of memory; raise run.memory_mb, or free memory"
        elif "read-only mode" in text or "Permission denied" in text or "Read-only" in text:
            told = "can't be written; mend the rights of file and folder, or name another file with --store"
        else:
            told = f"can't be opened ({text.splitlines()[0]}); name another file with --store"
        raise StoreError(f"{path}: {told}") from err


@contextmanager
def _interruptible() -> Iterator[None]:
    """Let an interrupt that meets the engine at work be an interrupt, not a fault of the engine."""
    try:
        yield
    except (duckdb.Error, RuntimeError) as err:
        said = str(err)
        if "interrupted" in said.lower() or "KeyboardInterrupt" in said:
            raise KeyboardInterrupt from err
        raise


def _mend(err: Exception) -> str:
    """Say what helps against what the system refused."""
    said = str(err)
    if "Permission denied" in said or "Read-only file system" in said:
        return "mend the rights of file and folder"
    return "make room or mend the disk"


def _readable(incoming: pl.DataFrame | None) -> Any:
    """Give a frame as the engine reads it: it knows no 128-bit integers, a decimal holds sums up to 10^38."""
    if incoming is None:
        return None
    wide = [pl.col(c).cast(pl.Decimal(38, 0)) for c, t in incoming.schema.items() if t == pl.Int128]
    return incoming.with_columns(wide).to_arrow()


class Store:
    """An open store; close it, or use it in a `with` block.

    Attributes
    ----------
    path : Path
    read_only : bool
    """

    def __init__(self, path: Path, connection: duckdb.DuckDBPyConnection, read_only: bool) -> None:
        self.path = path
        self.read_only = read_only
        self._con = connection
        self._in_transaction = False

    @classmethod
    def open(
        cls,
        path: Path,
        *,
        create: bool = False,
        read_only: bool = False,
        memory_mb: int | None = None,
        threads: int = 0,
    ) -> Self:
        """Open a store, and make it first where `create` says so and the file is missing or empty.

        Parameters
        ----------
        path
            The DuckDB file.
        create
            Make the file with its tables when missing.
        read_only
            Open for reading; several readers may share the file while nobody writes.
        memory_mb
            MB that DuckDB may use; None leaves its own default.
        threads
            Threads that DuckDB may use; 0 = all cores.

        Raises
        ------
        StoreError
            Missing without `create`, held by another process, no DuckDB file, no store, another format.
        """
        path = Path(path)
        if path.is_dir():
            raise StoreError(f"{path}: is a folder; name a file with --store")
        if not path.exists() and not create:
            raise StoreError(f"{path}: no such store; make it with `turntally network EXTRACT`")
        if not path.parent.is_dir():
            raise StoreError(f"{path}: the folder {path.parent} is missing; make it first")
        config: _Config = {}
        if memory_mb is not None:
            config["memory_limit"] = f"{memory_mb}MB"
        if threads:
            config["threads"] = threads
        store = cls(path, _connect(path, read_only, config), read_only)
        try:
            store._check(create)
        except BaseException:
            store.close()
            raise
        return store

    def _check(self, create: bool) -> None:
        tables = {row[0] for row in self.run("meta/all_tables")}
        if not tables and create and not self.read_only:
            self._create()
            return
        if not tables:
            raise StoreError(f"{self.path}: is empty; run `turntally network EXTRACT` first")
        if "meta" not in tables:
            raise StoreError(f"{self.path}: is a DuckDB file, no turntally store; name another with --store")
        found = self.meta().get("format_version")
        if found != str(FORMAT_VERSION):
            is_newer = found is not None and found.isdecimal() and int(found) > FORMAT_VERSION
            mend = "use a newer turntally" if is_newer else "use the version of turntally that wrote it"
            raise StoreError(
                f"{self.path}: has store format {found}, this program reads format {FORMAT_VERSION}; "
                f"{mend}, or ingest anew into another --store"
            )

    def _create(self) -> None:
        made_us = now_us()
        with self.transaction():
            for name in names_in("schema"):
                self.run(name)
            for view in views_in_order():
                self.run(view.name)
            self.put_meta("format_version", str(FORMAT_VERSION))
            self.put_meta("created_us", str(made_us))
            self.put_meta("reference_id", "1")
            self.put_meta("bins", BINS_DIGEST)
            first = {"reference_id": 1, "basis": FIRST_REFERENCE, "made_us": made_us}
            self.run("meta/put_reference", first)

    @contextmanager
    def _telling(self) -> Iterator[None]:
        """Turn what the engine says of disk and memory into errors with a mend."""
        try:
            with _interruptible():
                yield
        except (duckdb.IOException, duckdb.FatalException) as err:
            raise StoreError(
                f"{self.path}: can't be written or read ({str(err).splitlines()[0]}); "
                f"{_mend(err)}, then run the command again"
            ) from err
        except duckdb.OutOfMemoryException as err:
            raise StoreError(
                f"{self.path}: DuckDB ran out of memory; raise run.memory_mb, or free memory"
            ) from err

    def run(
        self, name: str, params: dict[str, Any] | None = None, incoming: pl.DataFrame | None = None
    ) -> list[tuple[Any, ...]]:
        """Run one SQL file and give all its rows.

        Parameters
        ----------
        name
            Path below `sql/` without the ending.
        params
            Values of the parameters in the file's header.
        incoming
            Frame that the statement reads as `incoming`; columns as in the header.
        """
        # The engine finds a local variable by its name. A registered view would do as well, but inside a
        # transaction it keeps every frame in memory until the commit (38 MB for 200,000 passages).
        incoming = _readable(incoming)
        with self._telling():
            return self._con.execute(statement(name).text, params or {}).fetchall()

    def frame(
        self, name: str, params: dict[str, Any] | None = None, incoming: pl.DataFrame | None = None
    ) -> pl.DataFrame:
        """Run one SQL query and give its rows as a frame; hugeint columns come as Int128."""
        incoming = _readable(incoming)
        with self._telling():
            table = self._con.query(statement(name).text, params=params or {}).to_arrow_table()
        got = pl.from_arrow(table)
        assert isinstance(got, pl.DataFrame)
        wide = [pl.col(c).cast(pl.Int128) for c, t in got.schema.items() if t == pl.Decimal(38, 0)]
        return got.with_columns(wide)

    def rows(self, name: str, params: dict[str, Any] | None = None) -> list[dict[str, Any]]:
        """Run one SQL query and give its rows as dicts; times bear their zone, UTC."""
        times = pl.col(pl.Datetime("us")).dt.replace_time_zone("UTC")
        return self.frame(name, params).with_columns(times).to_dicts()

    def batches(
        self,
        name: str,
        params: dict[str, Any] | None = None,
        incoming: pl.DataFrame | None = None,
        batch_rows: int = 20_000,
    ) -> Iterator["pa.RecordBatch"]:
        """Run one SQL query and give its rows as Arrow batches, never all at once; at least one batch.

        Between two batches no other statement may run on this store.
        """
        incoming = _readable(incoming)
        import pyarrow as pa  # 40 ms that a query without an export need not wait

        try:
            reader = self._con.query(statement(name).text, params=params or {}).to_arrow_reader(batch_rows)
            yield pa.RecordBatch.from_pylist([], schema=reader.schema)
            with _interruptible():
                yield from reader
        except duckdb.OutOfMemoryException as err:
            raise StoreError(
                f"{self.path}: DuckDB ran out of memory; raise run.memory_mb, or free memory"
            ) from err
        except (duckdb.IOException, pa.ArrowException) as err:
            raise StoreError(
                f"{self.path}: can't be read to its end ({str(err).splitlines()[0]}); "
                "make room for temporary files, or mend the disk, then run the command again"
            ) from err

    @contextmanager
    def transaction(self) -> Iterator[None]:
        """Commit what runs inside, or roll it back on any exception or interrupt and raise that again."""
        if self._in_transaction:
            raise ValueError("a transaction is open already")
        if self.read_only:
            raise StoreError(f"{self.path}: was opened for reading; open it for writing")
        self._con.begin()
        self._in_transaction = True
        try:
            yield
            try:
                with _interruptible():
                    self._con.commit()
            except duckdb.Error as err:
                raise StoreError(
                    f"{self.path}: could not commit ({str(err).splitlines()[0]}), nothing was written; "
                    f"{_mend(err)}, then run the command again"
                ) from err
        except BaseException:
            self._roll_back()
            raise
        finally:
            self._in_transaction = False

    def _roll_back(self) -> None:
        try:
            self._con.rollback()
        except duckdb.Error:
            # The engine has already ended the transaction; the file stands at its last commit.
            return

    def meta(self) -> dict[str, str]:
        """Read what the store says of itself."""
        return {row[0]: row[1] for row in self.run("meta/all_meta")}

    def put_meta(self, key: str, value: str) -> None:
        """Write one thing that the store says of itself."""
        self.run("meta/put_meta", {"key": key, "value": value})

    def check_bins(self) -> None:
        """Refuse histograms that were counted in other bins than this program's.

        Raises
        ------
        StoreError
            They were.
        """
        held = self.meta().get("bins")
        if held != BINS_DIGEST:
            raise StoreError(
                f"{self.path}: its histograms have the bins {held}, this program counts in {BINS_DIGEST}; "
                "run `turntally retally` to count what is in anew"
            )

    def streets(self) -> "Streets":
        """Load the arrays that detection reads.

        Raises
        ------
        StoreError
            The store holds no network yet.
        """
        blobs = {row[0]: row[1] for row in self.run("network/all_network_blob")}
        if not blobs:
            raise StoreError(f"{self.path}: holds no network; run `turntally network EXTRACT` first")
        from stream.network import streets_from_blobs  # loads the OSM reader: not for those who only query

        return streets_from_blobs(blobs)

    def close(self) -> None:
        """Close the file; a second call does nothing."""
        self._con.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()
