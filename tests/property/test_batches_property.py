"""Batches in any order, taken back and rolled up at random, on the tiny town with the real detector."""

import datetime
import itertools
import tempfile
from pathlib import Path
from typing import Any

import duckdb
import pytest
from hypothesis import HealthCheck, Phase, given, settings, strategies

from stream.config import load_settings
from stream.errors import InputError
from stream.ingest import ingest
from stream.network import Built, build_network
from stream.store import Store, put_network
from stream.store.audit import run_audit
from stream.store.compact import compact, plan
from stream.store.ledger import network_config
from stream.store.retract import retract
from tests.archive import Row, dump, sums, write
from tests.property.test_ingest_property import OVER, archive
from tests.town import town_xml

DAY = 86_400
KEYS = load_settings(over={**OVER, "run": {"chunk_rows": 600, "threads": 1}})
FEW = settings(
    max_examples=4, deadline=None, suppress_health_check=list(HealthCheck), phases=[Phase.generate]
)
ROWS = archive()[:1800]
N = len(ROWS)


@pytest.fixture(scope="module")
def town(tmp_path_factory: pytest.TempPathFactory) -> Built:
    """Give the tiny town's network."""
    path = tmp_path_factory.mktemp("town") / "town.osm"
    path.write_text(town_xml(), encoding="utf-8")
    return build_network(path, None, KEYS)


def fresh(folder: str, name: str, town: Built) -> Path:
    """Make a store without batches."""
    path = Path(folder) / f"{name}.duckdb"
    with Store.open(path, create=True) as store:
        put_network(store, town, network_config(KEYS))
    return path


def faults(path: Path) -> list[dict[str, Any]]:
    """Run the audit and give what it found."""
    with Store.open(path, read_only=True) as store:
        return [one for one in run_audit(store) if one["n_faults"]]


def day(n: int) -> list[Row]:
    """Give the archive's pings on another day."""
    return [(v, t + n * DAY, lon, lat) for v, t, lon, lat in ROWS]


def cut(folder: str, ends: list[int]) -> list[Path]:
    """Write the archive as files that end at the given rows."""
    whole = sorted({0, *ends, N})
    parts = enumerate(itertools.pairwise(whole))
    return [write(Path(folder) / f"{i:02}.csv", ROWS[a:b], is_sorted=False) for i, (a, b) in parts]


def ladder(path: Path) -> list[tuple[Any, ...]]:
    """Read the quantiles of every stratum."""
    with duckdb.connect(str(path), read_only=True) as con:
        return con.execute("select * from quantile_ladder order by all").fetchall()


def without_reason(path: Path) -> dict[str, Any]:
    """Read what must not depend on the order of days; a trip left open ends by gap in one, else by close."""
    kept = sums(path)
    del kept["unfinished"]
    kept["trip"] = sorted((*r[:4], *r[5:]) for r in kept["trip"])
    return kept


def offered(path: Path, file: Path) -> int:
    """Take a part in and give its rows; none where it lies in a silence that trips were led across."""
    before = dump(path)
    try:
        (report,) = ingest(path, [file], KEYS)
    except InputError:
        assert before == dump(path)
        return 0
    assert report["status"] == "taken in"
    return int(report["rows_in"])


ENDS = strategies.lists(strategies.integers(300, N - 300), min_size=1, max_size=4).map(
    lambda ends: [e for e, before in zip(sorted(ends), [0, *sorted(ends)], strict=False) if e - before >= 300]
)


@FEW
@given(ends=ENDS, n_back=strategies.integers(1, 5), is_closed=strategies.booleans())
def test_add_then_retract_restores(town: Built, ends: list[int], n_back: int, is_closed: bool) -> None:
    """Taking back the newest, again and again, gives each earlier store; taking in again gives the last."""
    with tempfile.TemporaryDirectory() as folder:
        path, files = fresh(folder, "s", town), cut(folder, ends)
        copies = [dump(path)]
        for file in files:
            ingest(path, [file], KEYS, close=is_closed and file == files[-1])
            copies.append(dump(path))
        back = files[-n_back:]
        for file in reversed(back):
            copies.pop()
            with Store.open(path) as store:
                assert retract(store, file.name)["is_exact"]
            assert copies[-1] == dump(path)
        whole = fresh(folder, "whole", town)
        ingest(whole, files, KEYS, close=is_closed)
        ingest(path, back, KEYS, close=is_closed)
        assert dump(whole) == dump(path)


@FEW
@given(
    order=strategies.permutations(range(4)),
    closed=strategies.lists(strategies.booleans(), min_size=4, max_size=4),
)
def test_days_in_any_order_give_the_same(town: Built, order: list[int], closed: list[bool]) -> None:
    """Days without trips across midnight: whatever comes first, closed or not, the counts are the same."""
    with tempfile.TemporaryDirectory() as folder:
        files = [write(Path(folder) / f"{n}.csv", day(n), is_sorted=False) for n in range(4)]
        path, right = fresh(folder, "s", town), fresh(folder, "right", town)
        for n in order:
            ingest(path, [files[n]], KEYS, close=closed[n])
        ingest(path, [], KEYS, close=True)
        for file in files:
            ingest(right, [file], KEYS, close=True)
        assert without_reason(right) == without_reason(path)
        assert faults(path) == []


@FEW
@given(ends=ENDS, order=strategies.randoms(use_true_random=False))
def test_parts_in_any_order_count_no_ping_twice(town: Built, ends: list[int], order: Any) -> None:
    """Cut through trips, in any order: a part is taken in or refused whole, and what is in is sound."""
    with tempfile.TemporaryDirectory() as folder:
        path, files = fresh(folder, "s", town), cut(folder, ends)
        order.shuffle(files)
        wanted = 0
        for file in files:
            wanted += offered(path, file)
        ingest(path, [], KEYS, close=True)
        assert faults(path) == []
        with duckdb.connect(str(path), read_only=True) as con:
            ((n_in, n_used, n_dropped),) = con.execute(
                "select sum(rows_in), sum(rows_used), sum(rows_dropped) from batch"
            ).fetchall()
        assert (n_in, n_used + n_dropped) == (wanted, wanted)


@FEW
@given(ends=ENDS, pick=strategies.integers(0, 9), is_closed=strategies.booleans())
def test_any_batch_taken_back_and_in_again_is_sound(
    town: Built, ends: list[int], pick: int, is_closed: bool
) -> None:
    """An older batch leaves a sound store, and a sound one when it comes again; no passage counts twice."""
    with tempfile.TemporaryDirectory() as folder:
        path, files = fresh(folder, "s", town), cut(folder, ends)
        ingest(path, files, KEYS, close=is_closed)
        n_passages = len(dump(path)["passage"])
        file = files[pick % len(files)]
        with Store.open(path) as store:
            retract(store, file.name)
        assert faults(path) == []
        offered(path, file)
        ingest(path, [], KEYS, close=True)
        assert faults(path) == []
        assert len(dump(path)["passage"]) <= n_passages + 12  # what was open, once a vehicle


@FEW
@given(
    order=strategies.permutations((0, 3, 30, 70)),
    until=strategies.integers(1, 90),
    back=strategies.integers(0, 3),
)
def test_compacting_keeps_quantiles(town: Built, order: list[int], until: int, back: int) -> None:
    """Whatever is rolled up, every quantile, sum and stratum stays, and what was not can still be undone."""
    with tempfile.TemporaryDirectory() as folder:
        path = fresh(folder, "s", town)
        for n in order:
            ingest(path, [write(Path(folder) / f"{n}.csv", day(n), is_sorted=False)], KEYS)
        before, wanted = ladder(path), sums(path)
        first = datetime.date(2023, 11, 14)
        with Store.open(path) as store:
            report = compact(store, plan(store, first + datetime.timedelta(days=until)))
        assert before == ladder(path)
        assert wanted == sums(path)
        assert faults(path) == []
        assert report["n_batches"] == sum(n < until for n in order)
        name = order[back]
        if name >= until:
            with Store.open(path) as store:
                retract(store, f"{name}.csv")
            assert faults(path) == []
