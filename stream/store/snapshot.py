"""A copy of a store at its last commit, to read while the store itself is written to.

Guarantee: the copy is consistent and stands under its name only when it is whole; the store is locked against
writers while it is copied.
"""

import shutil
from pathlib import Path

from stream.errors import InputError
from stream.store.database import Store
from stream.store.target import whole_file


def snapshot(store_path: Path, to: Path) -> int:
    """Copy a store; a copy that is there is replaced.

    Parameters
    ----------
    store_path
        A store that no process writes to at the moment.
    to
        File to write.

    Returns
    -------
    Its size in bytes.

    Raises
    ------
    StoreError
        The store is missing, in use by a writer, or of another format.
    InputError
        The copy can't be written, or would be the store itself.
    """
    if to.is_dir():
        raise InputError(f"{to}: is a folder; name a file with --to")
    if not to.parent.is_dir():
        raise InputError(f"{to}: the folder {to.parent} is missing; make it first")
    if to.exists() and store_path.exists() and to.samefile(store_path):
        raise InputError(f"{to}: is the store itself; name another file with --to")
    log = store_path.with_name(store_path.name + ".wal")
    if log.exists():
        Store.open(store_path).close()  # what a killed writer left in its log goes into the file
    if to.exists():
        Store.open(to, read_only=True).close()  # never over a file that is no store
    with Store.open(store_path, read_only=True), whole_file(to) as part:
        shutil.copyfile(store_path, part)
    return to.stat().st_size
