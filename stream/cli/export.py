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
    from stream.export import write
    from stream.store import Store

    session: Session = ctx.obj
    settings = session.settings()
    with Store.open(session.store, read_only=True, memory_mb=settings.run.memory_mb) as store:
        n_rows = write(store, what, to, settings)
    whole = {"what": what, "file": str(to), "n_rows": n_rows}
    session.result(whole, f"{to}: {n_rows:,} rows of {what}")


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
