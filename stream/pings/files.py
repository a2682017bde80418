"""The files of an archive: which there are, what they are, and their bytes in whole lines.

Guarantee: a file is never held in memory as a whole; whatever is wrong with it is one error that names it.
"""

import hashlib
from collections.abc import Iterator, Sequence
from pathlib import Path

import pyarrow as pa

from stream.errors import InputError

FORMATS = {
    ".parquet": "parquet",
    ".pq": "parquet",
    ".csv": "csv",
    ".tsv": "csv",
    ".txt": "csv",
    ".ndjson": "ndjson",
    ".jsonl": "ndjson",
    ".gpx": "gpx",
}
PACKED = {".gz": "gzip", ".zst": "zstd"}
BLOCK_BYTES = 8 << 20
MAX_LINE_BYTES = 64 << 20


def format_of(path: Path, wanted: str = "auto") -> str:
    """Tell a file's format by its ending, unless one is named.

    Raises
    ------
    InputError
        The ending is not known.
    """
    if wanted != "auto":
        return wanted
    stem = path.with_suffix("") if path.suffix.lower() in PACKED else path
    found = FORMATS.get(stem.suffix.lower())
    if found is None or (found == "parquet" and stem is not path):
        endings = ", ".join(FORMATS)
        raise InputError(
            f"{path}: its ending is no format known; known are {endings} "
            f"(all but Parquet also with .gz or .zst); rename the file or set source.format"
        )
    return found


def _is_known(path: Path) -> bool:
    if path.name.startswith((".", "_")) or not path.is_file():
        return False
    try:
        format_of(path)
    except InputError:
        return False
    return True


def expand(args: Sequence[str | Path]) -> list[list[Path]]:
    """Turn files, directories and glob patterns into batches, one a file.

    Directories are searched to the bottom, for the endings known; names that begin with a dot or an
    underscore are passed over. What one argument gives is in name order; the arguments keep theirs.

    Raises
    ------
    InputError
        A path or pattern that leads to no file.
    """
    found: list[Path] = []
    for arg in args:
        path = Path(arg)
        if path.is_file():
            files = [path]
        elif path.is_dir():
            files = sorted(f for f in path.rglob("*") if _is_known(f))
            if not files:
                raise InputError(
                    f"{path}: the directory holds no file of pings; known endings: {', '.join(FORMATS)}"
                )
        else:
            files = sorted(f for f in _matching(str(arg)) if f.is_file())
            if not files:
                raise InputError(
                    f"{arg}: there is no such file; check the path (wanted: file, directory or pattern)"
                )
        found += files
    return [[path] for path in found]


def _matching(pattern: str) -> Iterator[Path]:
    """Give the paths that a glob pattern matches; `**` stands for any depth."""
    path = Path(pattern)
    return Path(path.anchor).glob(str(path.relative_to(path.anchor)))


def content_digest(paths: Sequence[Path]) -> str:
    """Hash the content of a delivery with SHA-256; for several files, over their digests in order.

    Raises
    ------
    InputError
        A file can't be read.
    """
    digests = []
    for path in paths:
        try:
            with path.open("rb") as file:
                digests.append(hashlib.file_digest(file, "sha256"))
        except OSError as err:
            raise unreadable(path, err) from err
    if len(digests) == 1:
        return digests[0].hexdigest()
    whole = hashlib.sha256()
    for one in digests:
        whole.update(one.digest())
    return whole.hexdigest()


def unreadable(path: Path, err: OSError) -> InputError:
    """Say why the system doesn't give a file."""
    reason = err.strerror or str(err)
    return InputError(f"{path}: can't be read ({reason}); check the path and its permissions")


def size_of(path: Path) -> int:
    """Give a file's size in bytes.

    Raises
    ------
    InputError
        It is missing, no file, or empty.
    """
    try:
        size = path.stat().st_size
    except FileNotFoundError as err:
        raise InputError(f"{path}: there is no such file; check the path") from err
    except OSError as err:
        raise unreadable(path, err) from err
    if not path.is_file():
        raise InputError(f"{path}: is no file; name a file, or a directory to `turntally ingest`")
    if size == 0:
        raise InputError(f"{path}: the file is empty (0 bytes); deliver it again or leave it out")
    return size


class ByteSource:
    """The unpacked bytes of a file, one block after another.

    Attributes
    ----------
    path : the file
    done : bytes of the file (packed, if it is) read so far
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self._packing = PACKED.get(path.suffix.lower())
        try:
            self._raw = pa.OSFile(str(path), "rb")
        except OSError as err:
            raise unreadable(path, err) from err
        self._stream = pa.CompressedInputStream(self._raw, self._packing) if self._packing else self._raw

    @property
    def done(self) -> int:
        """Tell how far the file is read, in its own bytes."""
        return int(self._raw.tell())

    def blocks(self, n_bytes: int = BLOCK_BYTES) -> Iterator[bytes]:
        """Give block after block.

        Raises
        ------
        InputError
            A packed file is broken or cut off.
        """
        while True:
            try:
                block: bytes = self._stream.read(n_bytes)
            except (OSError, pa.ArrowInvalid) as err:
                if self._packing is None:
                    raise unreadable(self.path, OSError(str(err))) from err
                raise InputError(
                    f"{self.path.name}: is broken or cut off as {self._packing} after {self.done:,} bytes "
                    f"({err}); fetch the file again"
                ) from err
            if not block:
                return
            yield block

    def lines(self, n_bytes: int = BLOCK_BYTES) -> Iterator[bytes]:
        """Give blocks that end with a line's end (the last one maybe not).

        Raises
        ------
        InputError
            As `blocks`, or a line is longer than 64 MB.
        """
        rest: list[bytes] = []
        n_rest = 0
        for block in self.blocks(n_bytes):
            cut = block.rfind(b"\n") + 1
            if cut:
                yield b"".join([*rest, memoryview(block)[:cut]])
                rest, n_rest = [block[cut:]], len(block) - cut
            else:
                rest.append(block)
                n_rest += len(block)
            if n_rest > MAX_LINE_BYTES:
                limit = MAX_LINE_BYTES >> 20
                raise InputError(
                    f"{self.path.name}: a line is longer than {limit} MB; is it text? set source.format"
                )
        if n_rest:
            yield b"".join(rest)
