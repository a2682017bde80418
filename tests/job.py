"""A whole job on the tiny town, command by command, and what the store must hold after each."""

import shutil
import time
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import yaml

from stream.store import Store
from stream.store.audit import run_audit
from tests import days
from tests.archive import dump, write
from tests.forks import NO_STRIKE, Ended, Forks, Strike
from tests.town import town_xml

STORE = "turntally.duckdb"
KEY = f"{STORE}.key"
SECRET = "5a" * 32
Held = dict[str, list[tuple[Any, ...]]]


@dataclass(frozen=True)
class Stage:
    """One command of the job in an undisturbed run.

    Attributes
    ----------
    args : the command
    is_repeatable : done once more it does nothing; else it is refused
    before : copy of the store before it, None for none
    held_before, held : what the store held before and after it, by table
    steps, seconds : that it took
    """

    args: tuple[str, ...]
    is_repeatable: bool
    before: Path | None
    held_before: Held
    held: Held
    steps: tuple[str, ...]
    seconds: float

    @property
    def commit_step(self) -> int:
        """The first step after the commit that ends the work, from 1."""
        return len(self.steps) - self.steps[::-1].index("after commit")


COMMANDS: tuple[tuple[tuple[str, ...], bool], ...] = (
    (("network", "town.osm"), True),
    (("ingest", "1.csv"), True),
    (("ingest", "2.csv"), True),
    (("ingest", "3.csv"), True),
    (("retract", "3.csv"), False),  # the newest: exactly undone
    (("ingest", "3.csv"), True),
    (("retract", "2.csv"), False),  # cut out from between the others
    (("ingest", "2.csv"), True),  # older than what is in: alone
    (("ingest", "--close"), True),
    (("compact", "--before", "2026-03-06"), True),
)


def lay_out(folder: Path) -> Path:
    """Put the town, three days, a configuration and a key into a folder."""
    (folder / "town.osm").write_text(town_xml(), encoding="utf-8")
    for i, rows in enumerate(days.by_day(days.archive(n_vehicles=5, n_drives=1)), start=1):
        write(folder / f"{i}.csv", rows, is_sorted=False)
    keys = {"trips": days.SETTINGS["trips"], "run": {"chunk_rows": 150, "threads": 1}}
    (folder / "turntally.yaml").write_text(yaml.safe_dump(keys), encoding="utf-8")
    (folder / KEY).write_text(SECRET + "\n", encoding="ascii")
    return folder


def holds(store: Path) -> Held:
    """Read a store by table, without the clock; nothing where it is missing or has no table."""
    return dump(store) if store.exists() else {}


def is_sound(store: Path) -> bool:
    """Tell whether the audit finds nothing."""
    with Store.open(store, read_only=True) as opened:
        return not any(one["n_faults"] for one in run_audit(opened))


def undisturbed(forks: Forks, folder: Path) -> list[Stage]:
    """Run the job once in a folder that is laid out, keeping a copy of the store between its commands."""
    store = folder / STORE
    stages = []
    for number, (args, is_repeatable) in enumerate(COMMANDS):
        before, held_before = None, holds(store)
        if store.exists():
            before = Path(shutil.copyfile(store, folder / f"before_{number}.duckdb"))
        start = time.monotonic()
        ended = forks.done(*args, cwd=folder)
        seconds = time.monotonic() - start
        steps = tuple(ended.steps)
        stages.append(Stage(args, is_repeatable, before, held_before, holds(store), steps, seconds))
    assert is_sound(store)
    return stages


def set_back(folder: Path, stage: Stage) -> Path:
    """Put the store of a folder as it was before a stage."""
    store = folder / STORE
    for left in folder.glob(f"{STORE}*"):
        if left.name != KEY:
            left.unlink()
    if stage.before is not None:
        shutil.copyfile(stage.before, store)
    return store


def strike(forks: Forks, folder: Path, stage: Stage, at: Strike = NO_STRIKE, **more: Any) -> Ended:
    """Run a stage's command, struck or hampered."""
    return forks.run(*stage.args, cwd=folder, strike=at, **more)


def finish(forks: Forks, folder: Path, stage: Stage) -> None:
    """Run a stage's command once more, as its user would, and hold the store to the undisturbed run."""
    store = folder / STORE
    if stage.is_repeatable or holds(store) != stage.held:
        forks.done(*stage.args, cwd=folder)
    assert differing(holds(store), stage.held) == []


def differing(found: Held, wanted: Held) -> list[str]:
    """Name the tables that differ."""
    return sorted(t for t in found.keys() | wanted.keys() if found.get(t) != wanted.get(t))


def spread(n: int, of: Sequence[Any]) -> list[Any]:
    """Pick n of a sequence, evenly; all where n is not less."""
    return [of[i * len(of) // n] for i in range(n)] if n < len(of) else list(of)
