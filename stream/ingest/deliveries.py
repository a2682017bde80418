"""Which batches a call of `ingest` names.

Guarantee: every file stands in one batch, batches of one call have different names, and their order is
that of the file names.
"""

import os
from collections.abc import Sequence
from pathlib import Path

from stream.errors import InputError


def name_batches(groups: Sequence[Sequence[Path]], batch_name: str | None) -> list[tuple[str, list[Path]]]:
    """Name the batches: one a group, or one for all under the given name.

    A batch is called by its first file's name; where that would name two alike, by the paths below the
    folder that all have in common.

    Raises
    ------
    InputError
        One file is named twice.
    """
    files = [file for group in groups for file in group]
    seen: dict[Path, Path] = {}
    for file in files:
        whole = file.resolve()
        if whole in seen:
            raise InputError(f"{file}: is named twice ({seen[whole]}); name each file once")
        seen[whole] = file
    if batch_name is not None:
        return [(batch_name, files)] if files else []
    names = [group[0].name for group in groups]
    if len(set(names)) < len(names):
        firsts = [group[0].resolve() for group in groups]
        common = Path(os.path.commonpath([f.parent for f in firsts]))
        names = [f.relative_to(common).as_posix() for f in firsts]
    return [(name, list(group)) for name, group in zip(names, groups, strict=True)]
