"""Whether the files of a delivery stay as they were when their digest was taken.

Guarantee: what was read under a digest is the content of that digest, or an error says which file changed.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from stream.errors import InputError
from stream.pings.chunks import PingChunk
from stream.pings.files import content_digest, unreadable


@dataclass(frozen=True)
class Stamp:
    """What the system tells of a file: another content shows in at least one of these.

    Attributes
    ----------
    size, modified_ns : of the content
    others : when its entry last changed, and which file it is; they change with names and rights too
    """

    size: int
    modified_ns: int
    others: tuple[int, int, int]


def stamp(path: Path) -> Stamp:
    """Look at a file; to be done before its digest is taken.

    Raises
    ------
    InputError
        The system gives nothing.
    """
    try:
        told = path.stat()
    except OSError as err:
        raise unreadable(path, err) from err
    return Stamp(told.st_size, told.st_mtime_ns, (told.st_ctime_ns, told.st_ino, told.st_dev))


def watched(
    chunks: Iterator[PingChunk], paths: Sequence[Path], stamps: Sequence[Stamp], digest: str
) -> Iterator[PingChunk]:
    """Hand a delivery's chunks on, and check after the last one that its files are the same still.

    Parameters
    ----------
    chunks
        Read from the files.
    paths, stamps
        The files, and what was told of each before the digest.
    digest
        Of their content.

    Raises
    ------
    InputError
        A file changed, or can't be used.
    """
    try:
        yield from chunks
    except InputError:
        _check(paths, stamps, digest)
        raise
    _check(paths, stamps, digest)


def _check(paths: Sequence[Path], stamps: Sequence[Stamp], digest: str) -> None:
    now = [stamp(path) for path in paths]
    for path, old, new in zip(paths, stamps, now, strict=True):
        if old.size != new.size:
            raise _changed(path, f" ({old.size:,} bytes, now {new.size:,})")
        if old.modified_ns != new.modified_ns:
            raise _changed(path, "")
    if now != list(stamps) and content_digest(paths) != digest:
        first = next(path for path, old, new in zip(paths, stamps, now, strict=True) if old != new)
        raise _changed(first, " (another file took its place)")


def _changed(path: Path, how: str) -> InputError:
    return InputError(
        f"{path}: changed while it was taken in{how}, so nothing of its batch is; "
        "wait until the delivery is whole, then run the command again"
    )
