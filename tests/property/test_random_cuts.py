"""However an archive comes in, and however often it is killed, the store holds the same, row for row.

An archive of three days is cut at random: batches, files by time or by vehicle and in any order, formats,
order of rows, lateness, chunks, threads, closing, kills, content delivered twice. In full
(`pytest -m slow tests/property/test_random_cuts.py`) 300 cuts; a few of them in the default run.
"""

import random
import shutil
from dataclasses import dataclass
from pathlib import Path

import pytest

from stream.config import load_settings
from stream.ingest import ingest
from stream.network import build_network
from stream.store import Store, put_network
from stream.store.ledger import network_config
from tests import days
from tests.archive import Row, sums, write
from tests.cuts import Cut, make_cut
from tests.forks import NO_STRIKE, Forks, Strike, can_fork
from tests.job import STORE, is_sound

pytestmark = pytest.mark.skipif(not can_fork(), reason="needs forks and SIGKILL")
N_DEFAULT, N_FULL, EACH = 10, 300, 10
FULL = [pytest.param(s, marks=pytest.mark.slow) for s in range(N_DEFAULT, N_DEFAULT + N_FULL, EACH)]


@dataclass(frozen=True)
class Whole:
    """An archive, a store with a network only, and what a store holds when all came at once."""

    rows: list[Row]
    fresh: Path
    sums: dict[str, object]


@pytest.fixture(scope="module")
def whole(town_osm: Path, tmp_path_factory: pytest.TempPathFactory) -> Whole:
    """Take the archive in at once: one batch, one chunk, one thread, in order of time."""
    folder = tmp_path_factory.mktemp("whole")
    keys = load_settings(over={**days.SETTINGS, "run": {"threads": 1}})
    fresh, store = folder / "fresh.duckdb", folder / STORE
    with Store.open(fresh, create=True) as opened:
        put_network(opened, build_network(town_osm, None, keys), network_config(keys))
    shutil.copyfile(fresh, store)
    rows = days.archive()
    (report,) = ingest(store, [write(folder / "all.csv", rows, is_sorted=False)], keys, close=True)
    assert report["dropped"].keys() == {
        "duplicate",
        "same_time_elsewhere",
        "outside_area",
        "impossible_speed",
    }
    assert report["unfinished"].keys() >= {"gap", "close"}
    assert report["passages"] > 150
    assert is_sound(store)
    return Whole(rows, fresh, sums(store))


def take_in(forks: Forks, folder: Path, cut: Cut, dice: random.Random) -> int:
    """Run a cut's commands, each killed up to twice and then run to its end; give the number of kills."""
    n_kills = 0
    for args in cut.commands():
        for _ in range(dice.choice((0, 0, 0, 1, 2))):
            strike = dice.choice((Strike(dice.randrange(1, 80)), Strike(0, dice.uniform(0, 0.4))))
            ended = forks.run(*args, cwd=folder, strike=strike)
            assert ended.was_killed or ended.code == 0, (args, ended)
            n_kills += ended.was_killed
        again = dice.choice((1, 1, 1, 2)) if "--close" not in args else 1
        for _ in range(again):
            ended = forks.run(*args, cwd=folder, strike=NO_STRIKE)
            assert ended.code == 0, (args, ended)
    return n_kills


def check(forks: Forks, whole: Whole, folder: Path, seed: int) -> int:
    """Take one cut in and compare; give the number of kills."""
    dice = random.Random(seed)
    folder.mkdir()
    cut = make_cut(dice, whole.rows, folder)
    store = Path(shutil.copyfile(whole.fresh, folder / STORE))
    n_kills = take_in(forks, folder, cut, dice)
    found = sums(store)
    differing = [table for table, rows in whole.sums.items() if found[table] != rows]
    assert differing == [], (seed, cut)
    assert is_sound(store)
    shutil.rmtree(folder)
    return n_kills


@pytest.mark.parametrize("seed", range(N_DEFAULT))
def test_some_cuts_give_the_same_store(forks: Forks, whole: Whole, tmp_path: Path, seed: int) -> None:
    """A few cuts; in all of the default run some are killed."""
    check(forks, whole, tmp_path / str(seed), seed)


@pytest.mark.parametrize("seed", FULL)
def test_any_cut_gives_the_same_store(forks: Forks, whole: Whole, tmp_path: Path, seed: int) -> None:
    """Ten cuts; some of them are killed."""
    kills = [check(forks, whole, tmp_path / str(s), s) for s in range(seed, seed + EACH)]
    assert sum(kills) > 0
