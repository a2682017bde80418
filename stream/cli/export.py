"""The commands that write files: export, report."""

from pathlib import Path
from typing import Annotated

import typer

from stream.cli.say import Session


def export(
    ctx: typer.Context,
    what: Annotated[
        str,
        typer.Argument(metavar="WHAT", help="passages, arms, links, junctions, movements or histogram."),
    ],
    to: Annotated[Path, typer.Option(metavar="FILE", help="Where to write: .parquet or .csv.")],
) -> None:
    """Write a table to a file, its data dictionary beside it."""
    from stream.export import export_table
    from stream.store import Store

    session: Session = ctx.obj
    settings = session.settings()
    with Store.open(session.store, read_only=True, memory_mb=settings.run.memory_mb) as store:
        written = export_table(store, what, to, settings)
    held = written.withheld
    whole = {
        "what": what,
        "file": str(to),
        "dictionary": str(written.dictionary),
        "n_rows": written.n_rows,
        "withheld_strata": held.n_strata,
        "withheld_passages": held.n_rows,
    }
    told = f"{to}: {written.n_rows:,} rows of {what}, described in {written.dictionary.name}"
    if held.n_strata:
        least = settings.privacy
        told += (
            f"\n  held back: {held.n_rows:,} passages or sections in {held.n_strata:,} strata of fewer than "
            f"{least.min_passages} passages or {least.min_vehicles} vehicles (privacy.min_passages, "
            "privacy.min_vehicles)"
        )
    session.result(whole, told)


def report(
    ctx: typer.Context,
    to: Annotated[Path, typer.Option(metavar="FILE.html", help="Where to write the page.")],
) -> None:
    """Write one page of figures and text."""
    from stream.report import write_report
    from stream.store import Store

    session: Session = ctx.obj
    settings = session.settings()
    with Store.open(session.store, read_only=True, memory_mb=settings.run.memory_mb) as store:
        write_report(store, to, settings)
    session.result({"file": str(to), "size_bytes": to.stat().st_size}, f"{to} is written")
