"""The SQL files: every statement the store runs is one of them, found by its path below `sql/`.

Guarantee: a statement's parameters and registered columns are the ones its header states
(`tests/unit/test_sql.py` holds every file to that).
"""

import re
from dataclasses import dataclass
from functools import cache
from pathlib import Path

from stream.config import share_path

_HEADER = ("purpose", "grain", "params", "reads")


@dataclass(frozen=True)
class Statement:
    """One SQL file.

    Attributes
    ----------
    name : path below `sql/` without its ending, e.g. ``batch/put_passage``
    purpose, grain : what its header says
    params : names that it wants bound, without the dollar sign
    reads : names it reads, and ``incoming`` where a registered frame is wanted
    writes : tables it changes; empty for a query
    incoming : (column, type) of the registered frame, in the header's order
    text : the file
    """

    name: str
    purpose: str
    grain: str
    params: tuple[str, ...]
    reads: tuple[str, ...]
    writes: tuple[str, ...]
    incoming: tuple[tuple[str, str], ...]
    text: str


def _header(name: str, text: str) -> dict[str, str]:
    found: dict[str, str] = {}
    key = ""
    for line in text.splitlines():
        if not line.startswith("--"):
            break
        start = re.match(r"-- (\w+):\s+(.*)", line)
        if start:
            key = start[1]
            found[key] = start[2].strip()
        elif key:
            found[key] += " " + line[2:].strip()
    if tuple(found) != _HEADER:
        raise ValueError(f"sql/{name}.sql: header has {tuple(found)}, wants {_HEADER}")
    return found


def _names(text: str) -> tuple[str, ...]:
    return tuple(n.strip() for n in text.split(",") if n.strip() and n.strip() not in ("none", "nothing"))


def parse_statement(name: str, text: str) -> Statement:
    """Take a SQL file apart.

    Raises
    ------
    ValueError
        The header lacks a line, or has one out of order.
    """
    header = _header(name, text)
    reads, _, writes = header["reads"].partition("; writes:")
    incoming: tuple[tuple[str, str], ...] = ()
    registered = re.search(r"incoming \(registered: ([^)]*)\)", reads)
    if registered:
        pairs = (column.split() for column in registered[1].split(","))
        incoming = tuple((column, kind) for column, kind in pairs)
        reads = reads.replace(registered[0], "incoming")
    params = tuple(p.removeprefix("$") for p in _names(header["params"]))
    return Statement(
        name, header["purpose"], header["grain"], params, _names(reads), _names(writes), incoming, text
    )


@cache
def statement(name: str) -> Statement:
    """Load a SQL file by its path below `sql/`, without the ending."""
    return parse_statement(name, (share_path("sql") / f"{name}.sql").read_text(encoding="utf-8"))


def names_in(folder: str) -> list[str]:
    """List the SQL files of a folder below `sql/`, in name order."""
    root = share_path("sql")
    found = sorted(Path(root, folder).glob("*.sql"))
    return [f.relative_to(root).with_suffix("").as_posix() for f in found]


def creates_view(one: Statement) -> bool:
    """Tell a view that is kept in the store from a query with parameters that stands beside it."""
    return re.search(r"^create view ", one.text, re.MULTILINE) is not None


def views_in_order() -> list[Statement]:
    """List the views to create, each after those it reads.

    Raises
    ------
    ValueError
        Views that read each other in a circle.
    """
    waiting = {n.rpartition("/")[2]: statement(n) for n in names_in("view")}
    waiting = {n: s for n, s in waiting.items() if creates_view(s)}
    ordered: list[Statement] = []
    while waiting:
        ready = [n for n, s in waiting.items() if not (set(s.reads) - {n}) & set(waiting)]
        if not ready:
            raise ValueError(f"views read each other in a circle: {sorted(waiting)}")
        ordered += [waiting.pop(n) for n in ready]
    return ordered
