"""An OpenStreetMap extract into road ways, in two passes and with memory bounded by its roads.

The first pass takes ways and restrictions, the second the locations of the nodes that those ways use;
nodes of buildings, paths and the like are never kept. Ways that leave the extract are cut there.
"""

from array import array
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
import osmium
from numpy.typing import NDArray

from stream.errors import InputError, NetworkError
from stream.network import raw
from stream.network.model import I32, I64, NONE, U8
from stream.network.tags import read_sign, read_turn, read_way

Progress = Callable[[str, int], None]
ENDINGS = (".osm.pbf", ".osm", ".osm.gz", ".osm.bz2")
TELL_EVERY = 100_000


def _silent(_what: str, _n: int) -> None:
    """Tell nobody."""


class _Ways:
    """Ways as they are read, in flat arrays."""

    def __init__(self) -> None:
        self.id, self.ref, self.start = array("q"), array("q"), array("q", [0])
        self.cls, self.open, self.ring = array("B"), array("B"), array("B")
        self.along, self.against = array("f"), array("f")
        self.left_out: Counter[str] = Counter()
        self.noted: Counter[str] = Counter()
        self.restrictions: list[raw.Restriction] = []
        self.turns_left_out: Counter[str] = Counter()


@contextmanager
def _readable(path: Path) -> Iterator[None]:
    """Turn what the file reader raises into an error that names the file and the mend."""
    if not path.is_file():
        raise InputError(f"{path}: no such file; name an OpenStreetMap extract ({', '.join(ENDINGS)})")
    try:
        yield
    except (RuntimeError, OSError, ValueError) as err:
        raise InputError(f"{path}: not a readable OpenStreetMap extract ({err}); fetch it again") from err


def _take_way(ways: _Ways, way: Any, code: dict[str, int], classes: frozenset[str]) -> None:
    tags = dict(way.tags)
    judged = read_way(tags, classes)
    if judged.reason:
        ways.left_out[judged.reason] += 1
        return
    refs = [node.ref for node in way.nodes]
    refs = [ref for i, ref in enumerate(refs) if i == 0 or ref != refs[i - 1]]
    if len(refs) < 2:
        ways.left_out["too_few_nodes"] += 1
        return
    ways.id.append(way.id)
    ways.ref.extend(refs)
    ways.start.append(len(ways.ref))
    ways.cls.append(code[tags["highway"]])
    ways.open.append(judged.open)
    ways.ring.append(judged.ring)
    ways.along.append(judged.limit_along_kmh)
    ways.against.append(judged.limit_against_kmh)
    ways.noted["limited_access"] += judged.is_limited
    ways.noted["limit_no_number"] += judged.has_unread_limit


def _take_turn(ways: _Ways, relation: Any) -> None:
    turn = read_turn(dict(relation.tags))
    if turn.reason:
        ways.turns_left_out[turn.reason] += 1
        return
    found: dict[tuple[str, str], list[int]] = {}
    for member in relation.members:
        found.setdefault((member.role, member.type), []).append(member.ref)
    froms, tos = found.get(("from", "w"), []), found.get(("to", "w"), [])
    via_nodes, via_ways = found.get(("via", "n"), []), found.get(("via", "w"), [])
    if not froms or not tos or len(via_nodes) > 1 or bool(via_nodes) == bool(via_ways):
        ways.turns_left_out["members_incomplete"] += 1
        return
    ways.restrictions.append(
        raw.Restriction(
            relation.id,
            turn.is_only,
            turn.is_reversal,
            turn.is_timed,
            tuple(froms),
            via_nodes[0] if via_nodes else None,
            tuple(via_ways),
            tuple(tos),
        )
    )


def _read_ways(path: Path, classes: tuple[str, ...], tell: Progress) -> _Ways:
    """First pass: road ways and turn restrictions."""
    ways = _Ways()
    code, known = {name: i for i, name in enumerate(classes)}, frozenset(classes)
    kinds = osmium.osm.WAY | osmium.osm.RELATION
    reader = osmium.FileProcessor(str(path), kinds).with_filter(osmium.filter.KeyFilter("highway", "type"))
    thing: Any
    seen = 0
    for seen, thing in enumerate(reader, 1):
        if seen % TELL_EVERY == 0:
            tell("ways", seen)
        if thing.is_way():
            if "highway" in thing.tags:
                _take_way(ways, thing, code, known)
        elif thing.tags.get("type") == "restriction":
            _take_turn(ways, thing)
    tell("ways", seen)
    return ways


def _read_nodes(path: Path, wanted: I64, tell: Progress) -> tuple[I32, I32, U8, NDArray[np.bool_]]:
    """Second pass: location and signs of the wanted nodes (ascending ids), and which were found."""
    lon, lat = np.zeros(len(wanted), np.int32), np.zeros(len(wanted), np.int32)
    sign, found = np.zeros(len(wanted), np.uint8), np.zeros(len(wanted), np.bool_)
    reader = osmium.FileProcessor(str(path), osmium.osm.NODE)
    if len(wanted) and wanted[0] >= 0:  # the filter knows no negative ids, which editors give to new nodes
        tracker = osmium.IdTracker()
        for node_id in wanted.tolist():
            tracker.add_node(node_id)
        reader = reader.with_filter(tracker.id_filter())
    got_id, got_lon, got_lat, got_sign = array("q"), array("i"), array("i"), array("B")
    node: Any
    for node in reader:
        if not node.location.valid():
            continue
        got_id.append(node.id)
        got_lon.append(node.location.x)
        got_lat.append(node.location.y)
        got_sign.append(read_sign(dict(node.tags)) if len(node.tags) else 0)
        if len(got_id) % TELL_EVERY == 0:
            tell("nodes", len(got_id))
    tell("nodes", len(got_id))
    ids = np.array(got_id, np.int64)
    at = np.searchsorted(wanted, ids)
    ours = np.flatnonzero(at < len(wanted))
    ours = ours[wanted[at[ours]] == ids[ours]]
    at = at[ours]
    lon[at], lat[at] = np.array(got_lon, np.int32)[ours], np.array(got_lat, np.int32)[ours]
    sign[at], found[at] = np.array(got_sign, np.uint8)[ours], True
    return lon, lat, sign, found


def _cut(ways: _Ways, ref: I64, found: NDArray[np.bool_]) -> tuple[I64, I32, I64]:
    """Cut ways where nodes are missing: (row of the way, references, starts) of what remains."""
    start = np.frombuffer(ways.start, np.int64)
    way = np.repeat(np.arange(len(start) - 1), np.diff(start))
    kept = found[ref]
    ways.noted["cut_at_the_edge"] += len(np.unique(way[~kept]))
    breaks = np.ones(len(ref) + 1, np.bool_)
    if len(ref):
        breaks[1:-1] = (way[1:] != way[:-1]) | (kept[1:] != kept[:-1])
    bounds = np.flatnonzero(breaks)
    whole = kept[bounds[:-1]] & (np.diff(bounds) >= 2)
    first, last = bounds[:-1][whole], bounds[1:][whole]
    lengths = last - first
    starts = np.concatenate([[0], np.cumsum(lengths)]).astype(np.int64)
    places = np.arange(starts[-1]) - np.repeat(starts[:-1], lengths) + np.repeat(first, lengths)
    gone = len(start) - 1 - len(np.unique(way[first]))
    if gone:
        ways.left_out["outside_the_extract"] += gone
    return way[first], ref[places].astype(np.int32), starts


def read_osm(path: Path, classes: tuple[str, ...], progress: Progress | None = None) -> raw.RawRoads:
    """Read the roads of an extract.

    Parameters
    ----------
    path
        `.osm.pbf`, `.osm`, `.osm.gz` or `.osm.bz2`.
    classes
        Highway values taken as roads, widest first.
    progress
        Called with what is being read and how many were read so far.

    Raises
    ------
    InputError
        The file is missing or can't be read as an extract.
    NetworkError
        It holds no road of these classes that a car may use.
    """
    tell = progress or _silent
    with _readable(path):
        ways = _read_ways(path, classes, tell)
        wanted, ref = np.unique(np.frombuffer(ways.ref, np.int64), return_inverse=True)
        lon, lat, sign, found = _read_nodes(path, wanted, tell)
    way, refs, starts = _cut(ways, ref, found)
    if not len(way):
        why = ", ".join(f"{k} {n}" for k, n in sorted(ways.left_out.items())) or "it has no highway ways"
        raise NetworkError(f"{path}: holds no road for cars ({why}); take another extract or network.classes")
    order = np.argsort(np.frombuffer(ways.id, np.int64)[way], kind="stable")
    lengths = np.diff(starts)[order]
    new_starts = np.concatenate([[0], np.cumsum(lengths)]).astype(np.int64)
    places = np.arange(len(refs)) - np.repeat(new_starts[:-1] - starts[:-1][order], lengths)
    way, refs = way[order], refs[places]
    used = np.flatnonzero(np.bincount(refs, minlength=len(wanted)))
    index = np.full(len(wanted), NONE, np.int32)
    index[used] = np.arange(len(used))
    return raw.RawRoads(
        classes,
        np.frombuffer(ways.id, np.int64)[way],
        np.frombuffer(ways.cls, np.uint8)[way],
        np.frombuffer(ways.open, np.uint8)[way],
        np.frombuffer(ways.ring, np.uint8)[way],
        np.frombuffer(ways.along, np.float32)[way],
        np.frombuffer(ways.against, np.float32)[way],
        new_starts,
        index[refs],
        wanted[used],
        lon[used],
        lat[used],
        _signs_on_one_way(refs, sign)[used],
        ways.restrictions,
        {
            "ways": {"taken": len(np.unique(way)), **dict(sorted(ways.noted.items()))},
            "ways_left_out": dict(sorted(ways.left_out.items())),
            "restrictions_left_out": dict(sorted(ways.turns_left_out.items())),
        },
    )


def _signs_on_one_way(refs: I32, sign: U8) -> U8:
    """Clear the direction bits of signs on nodes that more than one way (or one way twice) holds."""
    uses = np.bincount(refs, minlength=len(sign))
    directed = np.uint8(raw.GOVERNS_ALONG | raw.GOVERNS_AGAINST)
    return np.where(uses == 1, sign, sign & ~directed).astype(np.uint8)
