"""The command that takes pings in."""

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from stream.cli.bars import Bars
from stream.cli.keep import copy
from stream.cli.say import Session, counts, warn
from stream.errors import ConfigError, StreamError

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
    snapshot: Annotated[
        Path | None,
        typer.Option(metavar="FILE", help="Leave a copy of the store first, to read while this runs."),
    ] = None,
) -> None:
    """Take pings in, each batch as a whole or not at all."""
    session: Session = ctx.obj
    if not files and not close:
        raise ConfigError("no FILE to take in; name files or folders, or --close to end what is open")
    from stream.ingest import ingest as take_in

    settings = session.settings()
    at: list[Progress] = []

    def draw(now: "Progress") -> None:
        at[:] = [now]
        rate = now.rows / now.seconds if now.seconds > 0 else 0
        note = f"{now.rows:,} rows  {rate:,.0f} rows/s  {now.passages:,} passages"
        bars.show(f"{now.batch} ({now.batch_ix + 1} of {now.n_batches})", now.done, now.total, note)

    if snapshot is not None:
        copy(session, snapshot)
        session.note(f"{snapshot} is a copy to read meanwhile")
    if files:
        note_compiling(session)
    try:
        with Bars(session) as bars:
            reports = take_in(session.store, files or [], settings, batch, close, draw)
    except (StreamError, KeyboardInterrupt):
        if at and at[0].batch_ix:
            warn(f"batches before {at[0].batch} are in ({at[0].batch_ix} of {at[0].n_batches})")
        raise
    whole = {"store": str(session.store), "batches": reports}
    session.result(whole, "\n".join(told(one) for one in reports))


def note_compiling(session: Session) -> None:
    """Say that the wait to come is compiling, unless compiled code of this version is on disk."""
    from stream.detect.ahead import is_compiled

    if not is_compiled():
        session.note("compiling the kernels, the first time only: up to a minute")


def told(one: dict[str, Any]) -> str:
    """Say in text what came of one batch."""
    if one["status"] == "already in":
        return f"{one['batch']}: already in since {one['since']:%Y-%m-%d %H:%M} UTC, nothing to do"
    if one["status"] == "nothing open":
        return "nothing is open, nothing to close"
    lines = [
        f"{one['batch']}: {one['status']}, {one['rows_in']:,} rows in, {one['rows_used']:,} used, "
        f"{one['rows_dropped']:,} dropped, {one['n_vehicles']:,} vehicles, {one['passages']:,} passages, "
        f"{one['trips']:,} trips, {one['seconds']:.1f} s"
    ]
    if one["is_backfill"]:
        lines.append(
            "  older than what was in, so taken in alone: trips cut at its edges "
            f"{one['trips_cut_start']:,} at its start, {one['trips_cut_end']:,} at its end"
        )
    if one["dropped"]:
        lines.append(f"  dropped: {counts(one['dropped'])}")
    if one["rows_held"]:
        lines.append(f"  held for later: {one['rows_held']:,}")
    if one["unfinished"]:
        lines.append(f"  unfinished passages: {counts(one['unfinished'])}")
    return "\n".join(lines)
