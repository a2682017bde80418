"""The files of an archive: which there are, their digest, their bytes."""

import gzip
import hashlib
import os
from collections.abc import Callable
from pathlib import Path

import pytest
import zstandard

from stream.errors import InputError
from stream.pings import content_digest, expand
from stream.pings.files import ByteSource, format_of, size_of


def touch(folder: Path, *names: str) -> list[Path]:
    """Make small files."""
    paths = [folder / name for name in names]
    for path in paths:
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(b"x")
    return paths


@pytest.mark.parametrize(
    ("name", "wanted"),
    [
        ("a.parquet", "parquet"),
        ("A.CSV", "csv"),
        ("a.b.csv.gz", "csv"),
        ("a.csv.zst", "csv"),
        ("a.tsv", "csv"),
        ("a.jsonl", "ndjson"),
        ("a.ndjson.gz", "ndjson"),
        ("a.gpx", "gpx"),
    ],
)
def test_format_goes_by_the_ending(name: str, wanted: str) -> None:
    """The ending tells the format, in any case and under a packing."""
    assert format_of(Path(name)) == wanted


@pytest.mark.parametrize("name", ["a", "a.xlsx", "a.gz", "a.csv.bz2", "a.parquet.gz"])
def test_format_unknown_is_refused(name: str) -> None:
    """Another ending is refused with those known and the key that overrides."""
    with pytest.raises(InputError, match=rf"{name}: its ending .*\.csv.*source\.format"):
        format_of(Path(name))
    assert format_of(Path(name), "csv") == "csv"


def test_expand_gives_one_batch_a_file_in_name_order(tmp_path: Path) -> None:
    """Files as named, a directory to its bottom and a pattern, each in name order."""
    day2, day1, deep, _, _, _ = touch(
        tmp_path, "d/2.csv", "d/1.parquet", "d/e/3.csv.gz", "d/.hidden.csv", "d/_meta.csv", "d/notes.md"
    )
    other = touch(tmp_path, "other.dat")[0]
    assert expand([other, tmp_path / "d"]) == [[other], [day1], [day2], [deep]]
    assert expand([str(tmp_path / "**" / "[123].*")]) == [[day1], [day2], [deep]]


def test_expand_takes_a_name_with_pattern_signs_as_a_file(tmp_path: Path) -> None:
    """A file that is there is meant, whatever its name looks like."""
    path = touch(tmp_path, "day[1].csv")[0]
    assert expand([path]) == [[path]]


def test_expand_works_from_here(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Names and patterns without a folder are looked up in the current one."""
    touch(tmp_path, "b.csv", "a.csv")
    monkeypatch.chdir(tmp_path)
    assert expand(["*.csv"]) == [[Path("a.csv")], [Path("b.csv")]]


@pytest.mark.parametrize("arg", ["none.csv", "none/*.csv", "*.parquet"])
def test_expand_refuses_what_leads_nowhere(arg: str, tmp_path: Path) -> None:
    """A path or pattern without a file is named."""
    touch(tmp_path, "a.csv")
    with pytest.raises(InputError, match=r"there is no such file"):
        expand([str(tmp_path / arg)])


def test_expand_refuses_a_directory_without_pings(tmp_path: Path) -> None:
    """A directory in which no ending is known is named, with the endings."""
    touch(tmp_path, "notes.md")
    with pytest.raises(InputError, match=r"holds no file of pings.*\.parquet"):
        expand([tmp_path])


def test_digest_of_one_file_is_its_sha256(tmp_path: Path) -> None:
    """SHA-256 of "abc" is that of FIPS 180-2, appendix B.1; the name plays no part."""
    path = tmp_path / "a.csv"
    path.write_bytes(b"abc")
    wanted = "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    assert content_digest([path]) == wanted
    assert content_digest([path.rename(tmp_path / "b.csv")]) == wanted


def test_digest_of_several_files_is_over_their_digests(tmp_path: Path) -> None:
    """Order counts, and where one file ends and the next begins."""
    one, two = tmp_path / "1", tmp_path / "2"
    one.write_bytes(b"ab")
    two.write_bytes(b"c")
    wanted = hashlib.sha256(hashlib.sha256(b"ab").digest() + hashlib.sha256(b"c").digest()).hexdigest()
    assert content_digest([one, two]) == wanted
    assert content_digest([two, one]) != wanted


def test_digest_of_a_missing_file_is_refused(tmp_path: Path) -> None:
    """A file that can't be read is named with the reason."""
    with pytest.raises(InputError, match=r"none\.csv: can't be read \(No such file"):
        content_digest([tmp_path / "none.csv"])


def test_size_of_what_is_no_full_file_is_refused(tmp_path: Path) -> None:
    """Missing, empty, or a directory: each is told as such."""
    (tmp_path / "empty.csv").touch()
    with pytest.raises(InputError, match=r"empty\.csv: the file is empty"):
        size_of(tmp_path / "empty.csv")
    with pytest.raises(InputError, match=r"none\.csv: there is no such file"):
        size_of(tmp_path / "none.csv")
    with pytest.raises(InputError, match=r"is no file"):
        size_of(tmp_path)


PACK: dict[str, Callable[[bytes], bytes]] = {
    "": lambda data: data,
    ".gz": gzip.compress,
    ".zst": lambda data: zstandard.ZstdCompressor().compress(data),
}
TEXT = b"".join(b"line %d\n" % i for i in range(5000)) + b"no end"


@pytest.mark.parametrize("packing", list(PACK))
@pytest.mark.parametrize("n_bytes", [1, 100, 1 << 20])
def test_lines_are_whole_in_any_packing(packing: str, n_bytes: int, tmp_path: Path) -> None:
    """Blocks end with a line's end, and together are the text; progress ends at the file's size."""
    text = TEXT if n_bytes > 1 else TEXT[:300]
    path = tmp_path / f"a.csv{packing}"
    path.write_bytes(PACK[packing](text))
    source = ByteSource(path)
    blocks = list(source.lines(n_bytes))
    assert b"".join(blocks) == text
    assert all(block.endswith(b"\n") for block in blocks[:-1])
    assert source.done == path.stat().st_size


@pytest.mark.parametrize("packing", [".gz", ".zst"])
def test_packed_pieces_one_after_another_are_one_text(packing: str, tmp_path: Path) -> None:
    """Several members or frames in one file are read to the end (RFC 1952 2.2, RFC 8878 3.1)."""
    path = tmp_path / f"a.csv{packing}"
    path.write_bytes(PACK[packing](b"one\n") + PACK[packing](b"two\n"))
    assert b"".join(ByteSource(path).lines()) == b"one\ntwo\n"


@pytest.mark.parametrize("packing", [".gz", ".zst"])
@pytest.mark.parametrize("part", [0.1, 0.5, 0.99])
def test_packed_file_cut_off_is_refused(packing: str, part: float, tmp_path: Path) -> None:
    """A packed file that ends too early is named with how far it was good."""
    whole = PACK[packing](os.urandom(100_000))
    path = tmp_path / f"a.csv{packing}"
    path.write_bytes(whole[: int(len(whole) * part)])
    with pytest.raises(
        InputError, match=rf"a\.csv\{packing}: is broken or cut off as .*fetch the file again"
    ):
        list(ByteSource(path).lines())


@pytest.mark.parametrize("packing", [".gz", ".zst"])
def test_packed_by_name_only_is_refused(packing: str, tmp_path: Path) -> None:
    """Plain text under the name of a packed file is named."""
    path = tmp_path / f"a.csv{packing}"
    path.write_bytes(TEXT)
    with pytest.raises(InputError, match=r"is broken or cut off as"):
        list(ByteSource(path).lines())


def test_line_without_end_is_refused(tmp_path: Path) -> None:
    """What never comes to a line's end is no text, and is not gathered in memory."""
    path = tmp_path / "a.csv"
    with path.open("wb") as file:
        file.truncate(80 << 20)  # a hole: takes no room on the disk
    with pytest.raises(InputError, match=r"a line is longer than 64 MB"):
        list(ByteSource(path).lines())
