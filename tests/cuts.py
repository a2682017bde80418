"""An archive cut at random into batches, files and chunks, in any order and form that must not matter."""

import gzip
import io
import itertools
import json
import random
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

import polars as pl
import yaml

from tests import days
from tests.archive import Row
from tests.drives import HEADS

LEAST_ROWS = 150  # of a batch: one of a few rows, all of them bad, is refused on purpose
Layout = Callable[[list[Row]], list[list[Row]]]


@dataclass(frozen=True)
class Batch:
    """One delivery, laid out in a folder.

    Attributes
    ----------
    name : to be given where it is of several files
    files : by name, in the order to be read
    """

    name: str
    files: tuple[str, ...]

    @property
    def args(self) -> tuple[str, ...]:
        """The command that takes it in."""
        return ("ingest", *self.files, *(("--batch", self.name) if len(self.files) > 1 else ()))


@dataclass(frozen=True)
class Cut:
    """How an archive comes.

    Attributes
    ----------
    order : source.order
    lateness_s : clean.lateness_s; rows come out of order by nearly as much
    chunk_rows, threads : run.*
    batches : the deliveries, in the order of their times
    is_closed_apart : what is open at the end is ended by a command of its own
    is_one_call : batches of one file each are named in one command
    """

    order: str
    lateness_s: int
    chunk_rows: int
    threads: int
    batches: tuple[Batch, ...]
    is_closed_apart: bool
    is_one_call: bool

    def commands(self) -> list[tuple[str, ...]]:
        """Give the commands that take the archive in."""
        if self.is_one_call:
            commands = [("ingest", *(b.files[0] for b in self.batches))]
        else:
            commands = [b.args for b in self.batches]
        if self.is_closed_apart:
            return [*commands, ("ingest", "--close")]
        return [*commands[:-1], (*commands[-1], "--close")]


def make_cut(dice: random.Random, rows: Sequence[Row], folder: Path) -> Cut:
    """Cut an archive at random, and write its files and its configuration into a folder.

    Parameters
    ----------
    rows
        In order of time; of one vehicle and one time in the order that counts.
    """
    order = dice.choice(("time", "vehicle", "unsorted"))
    lateness_s = dice.choice((0, 0, 5, 40))
    chunk_rows = dice.choice((61, 500, 10_000))
    threads = dice.choice((1, 2, 3))
    keys = {
        **days.SETTINGS,
        "source": {"order": order},
        "clean": {"lateness_s": lateness_s},
        "run": {"chunk_rows": chunk_rows, "threads": threads, "memory_mb": 64},
    }
    (folder / "turntally.yaml").write_text(yaml.safe_dump(keys), encoding="utf-8")
    shaken = _shaken(dice, rows, lateness_s)
    ends = _ends(dice, len(rows))
    batches = []
    for number, (first, last) in enumerate(itertools.pairwise(ends)):
        parts = _files(dice, shaken[first:last], order)
        names = tuple(_write(dice, folder / f"{number}_{i}", part) for i, part in enumerate(parts))
        batches.append(Batch(f"batch {number}", names))
    is_one_call = all(len(b.files) == 1 for b in batches) and dice.random() < 0.5
    return Cut(order, lateness_s, chunk_rows, threads, tuple(batches), dice.random() < 0.5, is_one_call)


def _ends(dice: random.Random, n: int) -> list[int]:
    ends = [0]
    for end in sorted(dice.randrange(n) for _ in range(dice.randrange(6))):
        if ends[-1] + LEAST_ROWS <= end <= n - LEAST_ROWS:
            ends.append(end)
    return [*ends, n]


def _shuffled(
    dice: random.Random, rows: Sequence[Row], base: Callable[[Row], float], most: float
) -> list[Row]:
    """Sort by a base and a random part up to `most`, rows of one vehicle and time together as they stand."""
    share = {(r[0], r[1]): dice.random() * most for r in rows}
    return sorted(rows, key=lambda r: base(r) + share[r[0], r[1]])


def _shaken(dice: random.Random, rows: Sequence[Row], lateness_s: int) -> list[Row]:
    """Put rows out of order by up to the lateness allowed."""
    return _shuffled(dice, rows, lambda r: r[1], lateness_s) if lateness_s else list(rows)


def _files(dice: random.Random, rows: list[Row], order: str) -> list[list[Row]]:
    """Divide a batch into files by time, by vehicle (in any order) or, where that may be, at random."""
    n = dice.choice((1, 1, 2, 3))
    if order == "unsorted":
        rows = _shuffled(dice, rows, lambda _: 0, 1)
    if n > 1 and dice.random() < 0.5:
        of = {vehicle: dice.randrange(n) for vehicle in sorted({r[0] for r in rows})}
        parts = [[r for r in rows if of[r[0]] == i] for i in range(n)]
    else:
        ends = [0, *sorted(dice.randrange(len(rows)) for _ in range(n - 1)), len(rows)]
        parts = [rows[a:b] for a, b in itertools.pairwise(ends)]
    if order == "vehicle":
        parts = [_grouped(dice, part) for part in parts]
    return [part for part in parts if part]


def _grouped(dice: random.Random, rows: list[Row]) -> list[Row]:
    vehicles = sorted({r[0] for r in rows})
    dice.shuffle(vehicles)
    place = {vehicle: i for i, vehicle in enumerate(vehicles)}
    return sorted(rows, key=lambda r: place[r[0]])


def _write(dice: random.Random, stem: Path, rows: list[Row]) -> str:
    """Write rows in a form picked at random; give the file's name."""
    form = dice.choice(("csv", "csv.gz", "ndjson", "parquet"))
    path = stem.with_name(f"{stem.name}.{form}")
    write_as(path, rows, dice.choice((50, 1000)))
    return path.name


def write_as(path: Path, rows: Sequence[Row], group_rows: int = 1000) -> None:
    """Write rows in the form that the file's ending tells; Parquet in groups of so many."""
    if path.name.endswith(".parquet"):
        columns = {name: list(values) for name, values in zip(HEADS, zip(*rows, strict=True), strict=True)}
        pl.DataFrame(columns).write_parquet(path, row_group_size=group_rows)
        return
    if path.name.endswith(".ndjson"):
        text = "".join(json.dumps(dict(zip(HEADS, row, strict=True))) + "\n" for row in rows)
    else:
        out = io.StringIO()
        out.write(",".join(HEADS) + "\n")
        out.writelines(",".join(map(str, row)) + "\n" for row in rows)
        text = out.getvalue()
    packed = text.encode()
    path.write_bytes(gzip.compress(packed, 1) if path.name.endswith(".gz") else packed)
