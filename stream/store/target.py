"""Files that leave the store: refused before any work is done, and under their name only when whole."""

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from stream.errors import InputError


def check_target(to: Path, endings: tuple[str, ...]) -> None:
    """Refuse a file that can't be written, before any work is done.

    Raises
    ------
    InputError
        Another ending, a folder of that name, or a folder that is missing.
    """
    if to.suffix.lower() not in endings:
        raise InputError(
            f"{to}: ending {to.suffix or 'missing'}; name a file that ends in {' or '.join(endings)}"
        )
    if to.is_dir():
        raise InputError(f"{to}: is a folder; name a file with --to")
    if not to.parent.is_dir():
        raise InputError(f"{to}: the folder {to.parent} is missing; make it first")


@contextmanager
def whole_file(to: Path) -> Iterator[Path]:
    """Give a temporary name beside `to`, and rename it when the block ends well; else remove it.

    Raises
    ------
    InputError
        The file can't be written: rights, a full disk.
    """
    part = to.with_name(f".{to.name}.part")
    try:
        yield part
        part.replace(to)
    except OSError as err:
        raise InputError(
            f"{to}: can't be written ({err.strerror or err}); make room or mend the rights"
        ) from err
    finally:
        part.unlink(missing_ok=True)
