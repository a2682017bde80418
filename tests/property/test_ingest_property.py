"""However an archive is cut into batches, files, chunks and threads, the store holds the same."""

import itertools
import math
import random
import tempfile
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings, strategies

from stream.config import Settings, load_settings
from stream.ingest import ingest
from stream.network import Built, build_network
from stream.store import Store, put_network
from stream.store.audit import run_audit
from stream.store.ledger import network_config
from tests.archive import T0, Row, sums, write
from tests.town import STEP_M, STUB_M, lon_lat, town_xml

Point = tuple[float, float]
OVER = {"privacy": {"plain_ids": True}, "clean": {"lateness_s": 10}}
EAST = 3 * STEP_M + STUB_M
# Ways through the town by its corners, in metres east and north of (0, 0).
PATHS: tuple[tuple[Point, ...], ...] = (
    ((-STUB_M, STEP_M), (3 * STEP_M, STEP_M)),
    ((STEP_M, -STUB_M), (STEP_M, STEP_M), (2 * STEP_M, STEP_M), (2 * STEP_M, 2 * STEP_M), (EAST, 2 * STEP_M)),
    ((2 * STEP_M, -STUB_M), (2 * STEP_M, 2 * STEP_M), (-STUB_M, 2 * STEP_M)),
    ((EAST, 0.0), (0.0, 0.0), (0.0, 2 * STEP_M), (STEP_M, 2 * STEP_M), (STEP_M, 0.0)),
)


def _along(path: tuple[Point, ...], s_m: float) -> Point:
    """Find the point of a path at a chainage; its last point beyond the end."""
    left = s_m
    for (x1, y1), (x2, y2) in itertools.pairwise(path):
        length = math.hypot(x2 - x1, y2 - y1)
        if left <= length:
            return x1 + (x2 - x1) * left / length, y1 + (y2 - y1) * left / length
        left -= length
    return path[-1]


def _drive(vehicle: str, path: tuple[Point, ...], start: int, step_s: int, dice: random.Random) -> list[Row]:
    """Drive a path at 11 m/s with halts of up to 50 s, seen every `step_s` with 3 m of noise."""
    rows, s_m, halt = [], 0.0, 0
    length = sum(math.dist(a, b) for a, b in itertools.pairwise(path))
    for t in range(start, start + 600):
        if s_m >= length:
            break
        if halt == 0 and dice.random() < 0.01:
            halt = dice.randrange(5, 50)
        s_m += 0.0 if halt else 11.0
        halt = max(halt - 1, 0)
        if (t - start) % step_s == 0:
            x, y = _along(path, s_m)
            lon, lat = lon_lat(x + dice.gauss(0, 3), y + dice.gauss(0, 3))
            rows.append((vehicle, t, round(lon, 7), round(lat, 7)))
    return rows


def archive() -> list[Row]:
    """Give some hundred trips of twelve vehicles, out of order by up to 12 s, with duplicates and strays."""
    dice = random.Random(20)
    rows: list[Row] = []
    for v in range(12):
        start = T0 + dice.randrange(60)
        for _ in range(4):
            path = dice.choice(PATHS)
            rows += _drive(f"v{v}", path, start, (1, 3, 10)[v % 3], dice)
            start = rows[-1][1] + dice.choice((1, 30, 200))
    rows += [dice.choice(rows) for _ in range(20)]
    rows += [("far", T0 + i, 12.0, 50.0) for i in range(5)]
    return sorted(rows, key=lambda r: r[1] + dice.uniform(0, 12))


@pytest.fixture(scope="module")
def town(tmp_path_factory: pytest.TempPathFactory) -> Built:
    """Give the tiny town's network."""
    path = tmp_path_factory.mktemp("town") / "town.osm"
    path.write_text(town_xml(), encoding="utf-8")
    return build_network(path, None, load_settings(over=OVER))


def _fresh(folder: Path, town: Built, made_with: Settings) -> Path:
    path = folder / "s.duckdb"
    with Store.open(path, create=True) as store:
        put_network(store, town, network_config(made_with))
    return path


@pytest.fixture(scope="module")
def whole(town: Built, tmp_path_factory: pytest.TempPathFactory) -> object:
    """Give what the store holds when all comes at once."""
    folder = tmp_path_factory.mktemp("whole")
    keys = load_settings(over=OVER)
    path = _fresh(folder, town, keys)
    (report,) = ingest(path, [write(folder / "all.csv", archive(), is_sorted=False)], keys, close=True)
    assert report["passages"] > 100
    assert report["dropped"].keys() >= {"duplicate", "late", "outside_area"}
    return sums(path)


def _ends(cuts: list[float], n: int) -> list[int]:
    """Give the ends of parts, each long enough not to be refused for a few rows that are late or far."""
    ends = [0]
    for end in sorted(round(c * n) for c in cuts):
        if ends[-1] + 300 <= end <= n - 300:
            ends.append(end)
    return [*ends, n]


@settings(
    max_examples=12,
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow],
)
@given(
    cuts=strategies.lists(strategies.floats(0, 1), max_size=5),
    chunk_rows=strategies.sampled_from([97, 1000, 5000]),
    threads=strategies.sampled_from([1, 2, 3]),
    is_one_batch=strategies.booleans(),
    is_closed_apart=strategies.booleans(),
)
def test_any_cut_gives_the_same_store(
    town: Built,
    whole: object,
    cuts: list[float],
    chunk_rows: int,
    threads: int,
    is_one_batch: bool,
    is_closed_apart: bool,
) -> None:
    """Batches, files in one batch, chunks, threads, and closing later don't change a row or a sum."""
    keys = load_settings(over={**OVER, "run": {"chunk_rows": chunk_rows, "threads": threads}})
    rows = archive()
    ends = _ends(cuts, len(rows))
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        path = _fresh(folder, town, keys)
        parts = enumerate(itertools.pairwise(ends))
        files = [write(folder / f"{i}.csv", rows[a:b], is_sorted=False) for i, (a, b) in parts]
        ingest(path, files, keys, "all of them" if is_one_batch else None, close=not is_closed_apart)
        if is_closed_apart:
            ingest(path, [], keys, close=True)
        assert sums(path) == whole
        with Store.open(path, read_only=True) as store:
            assert [one for one in run_audit(store) if one["n_faults"]] == []
