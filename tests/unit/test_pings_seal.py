"""Files that change between their digest and the last row read: named, with how; those that don't: let be."""

import os
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from stream.errors import InputError
from stream.pings import PingChunk, content_digest, stamp, watched

DAY_NS = 86_400 * 10**9


def read(path: Path, meanwhile: Callable[[], object], fault: InputError | None = None) -> None:
    """Read a file of no chunks, with something happening before the end."""
    stamps = [stamp(path)]

    def chunks() -> Iterator[PingChunk]:
        meanwhile()
        if fault is not None:
            raise fault
        yield from ()

    assert list(watched(chunks(), [path], stamps, content_digest([path]))) == []


@pytest.fixture
def file(tmp_path: Path) -> Path:
    """Give a file of six bytes, a day old."""
    path = tmp_path / "a.csv"
    path.write_bytes(b"123456")
    old = path.stat().st_mtime_ns - DAY_NS
    os.utime(path, ns=(old, old))
    return path


def replace(path: Path, content: bytes) -> None:
    """Put another file of the same time in its place."""
    other, told = path.with_name("other"), path.stat()
    other.write_bytes(content)
    os.utime(other, ns=(told.st_atime_ns, told.st_mtime_ns))
    other.replace(path)


def test_unchanged_file_is_let_be(file: Path) -> None:
    """Nothing happens, nothing is said."""
    read(file, lambda: None)


def test_grown_file_is_refused(file: Path) -> None:
    """Another size is told in bytes."""
    with pytest.raises(InputError, match=r"a\.csv: changed while .* \(6 bytes, now 8\).*run the"):
        read(file, lambda: file.write_bytes(b"12345678"))


def test_file_written_over_is_refused(file: Path) -> None:
    """The same size with a newer time is a change."""
    with pytest.raises(InputError, match=r"a\.csv: changed while it was taken in, so nothing"):
        read(file, lambda: file.write_bytes(b"654321"))


def test_replaced_file_of_same_size_and_time_is_refused(file: Path) -> None:
    """Another file under the name, alike in size and time, is told by its content."""
    with pytest.raises(InputError, match=r"a\.csv: .* \(another file took its place\)"):
        read(file, lambda: replace(file, b"654321"))


def test_replaced_file_of_same_content_is_let_be(file: Path) -> None:
    """The same content delivered once more while it is read harms nothing."""
    read(file, lambda: replace(file, b"123456"))


def test_file_whose_rights_change_is_let_be(file: Path) -> None:
    """Names and rights are no content."""
    read(file, lambda: file.chmod(0o600))


def test_file_taken_away_is_refused(file: Path) -> None:
    """A file that is gone can't be vouched for."""
    with pytest.raises(InputError, match=r"a\.csv: can't be read"):
        read(file, file.unlink)


def test_change_is_told_before_its_consequence(file: Path) -> None:
    """Where reading failed because the file changed, the change is what is told; else the failure."""
    with pytest.raises(InputError, match="6 bytes, now 3"):
        read(file, lambda: os.truncate(file, 3), InputError("broken"))
    with pytest.raises(InputError, match="broken"):
        read(file, lambda: None, InputError("broken"))
