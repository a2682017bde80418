"""The report as one file."""

from pathlib import Path

from stream.config import Settings
from stream.report.facts import gather
from stream.report.page import page
from stream.store import Store
from stream.store.target import check_target, whole_file


def write_report(store: Store, to: Path, settings: Settings) -> None:
    """Write one page of figures and text that needs no other file.

    Parameters
    ----------
    store
        An open store with at least one batch.
    to
        `.html`; a file of that name is replaced.
    settings
        The limits `privacy.min_passages` and `privacy.min_vehicles` hold for every line, whatever
        `privacy.plain_ids` says: a report is made to be handed on.

    Raises
    ------
    InputError
        A file that can't be written.
    StoreError
        The store holds no batch yet.
    """
    check_target(to, (".html", ".htm"))
    text = page(gather(store, settings))
    with whole_file(to) as part:
        part.write_text(text, encoding="utf-8")
