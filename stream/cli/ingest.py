"""The command that takes pings in."""

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from stream.cli.bars import Bars
from stream.cli.say import Session, counts
from stream.errors import ConfigError

if TYPE_CHECKING:
    from stream.ingest import Progress


def ingest(
    ctx: typer.Context,
    files: Annotated[
        list[Path] | None,
        typer.Argument(
            metavar="FILE",
            help="Parquet, CSV, NDJSON or GPX files, folders or patterns; one batch a file.",
        ),
    ] = None,
    batch: Annotated[
        str | None,
        typer.Option(metavar="NAME", help="Take all files in as one batch of this name."),
    ] = None,
    close: Annotated[
        bool,
        typer.Option("--close", help="End what is still open: no later pings will follow."),
    ] = False,
) -> None:
    """Take pings in, each batch as a whole or not at all."""
    session: Session = ctx.obj
    if not files and not close:
        raise ConfigError("no FILE to take in; name files or folders, or --close to end what is open")
    from stream.ingest import ingest as take_in

    settings = session.settings()
    with Bars(session) as bars:

        def draw(at: "Progress") -> None:
            rate = at.rows / at.seconds if at.seconds > 0 else 0
            note = f"{at.rows:,} rows  {rate:,.0f} rows/s  {at.passages:,} passages"
            bars.show(f"{at.batch} ({at.batch_ix + 1} of {at.n_batches})", at.done, at.total, note)

        reports = take_in(session.store, files or [], settings, batch, close, draw)
    whole = {"store": str(session.store), "batches": reports}
    session.result(whole, "\n".join(_told(one) for one in reports))


def _told(one: dict[str, Any]) -> str:
    if one["status"] not in ("taken in", "closed"):
        return f"{one['batch']}: {one['status']}"
    lines = [
        f"{one['batch']}: {one['status']}, {one['rows_in']:,} rows in, {one['rows_used']:,} used, "
        f"{one['rows_dropped']:,} dropped, {one['n_vehicles']:,} vehicles, {one['passages']:,} passages, "
        f"{one['trips']:,} trips, {one['seconds']:.1f} s"
    ]
    if one["dropped"]:
        lines.append(f"  dropped: {counts(one['dropped'])}")
    if one["unfinished"]:
        lines.append(f"  unfinished passages: {counts(one['unfinished'])}")
    return "\n".join(lines)
