"""The commands that keep a store: take a batch back, roll old ones up, copy it to read."""

import sys
from datetime import date
from pathlib import Path
from typing import Annotated, Any

import typer

from stream.cli.say import Session
from stream.errors import ConfigError

_NAMED = 5


def retract(
    ctx: typer.Context,
    batch: Annotated[str, typer.Argument(metavar="BATCH", help="Name of the batch, else its number.")],
) -> None:
    """Take a batch back, with all that it gave."""
    from stream.store import Store
    from stream.store.retract import retract as take_back

    session: Session = ctx.obj
    run = session.settings().run
    with Store.open(session.store, memory_mb=run.memory_mb, threads=run.threads) as store:
        whole = take_back(store, batch)
    session.result({"store": str(session.store), **whole}, _retract_told(whole))


def _retract_told(whole: dict[str, Any]) -> str:
    lines = [
        f"{whole['batch']}: taken back, {whole['rows_in']:,} rows in, {whole['passages']:,} passages, "
        f"{whole['sections']:,} sections, {whole['trips']:,} trips"
    ]
    if whole["is_exact"]:
        lines.append("  the store is as if it had never been in")
    else:
        lines.append(
            f"  trips cut at its edges: {whole['trips_cut_start']:,} at its start, "
            f"{whole['trips_cut_end']:,} at its end; {whole['edge_passages']:,} passages that a later batch "
            "ended went with it"
        )
    return "\n".join(lines)


def compact(
    ctx: typer.Context,
    before: Annotated[
        str,
        typer.Option(metavar="DATE", help="Roll up what ended before this day, such as 2026-01-01 (UTC)."),
    ],
    yes: Annotated[bool, typer.Option("--yes", help="Don't ask, not even on a terminal.")] = False,
) -> None:
    """Roll the counts of old batches up by month."""
    try:
        day = date.fromisoformat(before)
    except ValueError as err:
        raise ConfigError(f"--before {before!r} is no day; write it as 2026-01-01") from err
    from stream.store import Store
    from stream.store.compact import compact as roll_up
    from stream.store.compact import plan

    session: Session = ctx.obj
    run = session.settings().run
    with Store.open(session.store, memory_mb=run.memory_mb, threads=run.threads) as store:
        months = plan(store, day)
        newly = [name for month in months for name in month.newly]
        if newly:
            session.note(_warned(newly, [month.month for month in months]))
            if sys.stdin.isatty() and not yes and not typer.confirm("go on?", err=True):
                session.note("nothing was changed")
                raise typer.Exit(1)
        whole = roll_up(store, months)
    session.result({"store": str(session.store), "before": before, **whole}, _compact_told(whole, before))


def _warned(newly: list[str], months: list[str]) -> str:
    shown = ", ".join(newly[:_NAMED]) + (f" and {len(newly) - _NAMED} more" if len(newly) > _NAMED else "")
    return (
        f"{len(newly)} batches are rolled up into {', '.join(months)}: {shown}\n"
        "what becomes impossible: to retract them. Passages, trips and quantiles stay, and the same "
        "deliveries are still known"
    )


def _compact_told(whole: dict[str, Any], before: str) -> str:
    if not whole["n_batches"]:
        return f"nothing to roll up before {before}"
    lines = [f"{whole['n_batches']} batches rolled up before {before}"]
    kinds = ("histogram_rows", "moment_rows", "carry_rows")
    lines += [f"  {k.replace('_', ' ')}: {whole[f'{k}_before']:,} -> {whole[k]:,}" for k in kinds]
    lines.append("  the file keeps its size: the room is used again by later batches")
    return "\n".join(lines)


def snapshot(
    ctx: typer.Context,
    to: Annotated[Path, typer.Option(metavar="FILE", help="The copy; an older one is replaced.")],
) -> None:
    """Copy the store, to read the copy while a long ingest runs."""
    session: Session = ctx.obj
    size = copy(session, to)
    whole = {"store": str(session.store), "file": str(to), "size_bytes": size}
    session.result(whole, f"{to}: a copy of {session.store}, {size / 1e6:,.1f} MB; read it with --store {to}")


def copy(session: Session, to: Path) -> int:
    """Copy the session's store and give the size in bytes."""
    from stream.store.snapshot import snapshot as copy_store

    return copy_store(session.store, to)
