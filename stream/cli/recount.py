"""The command that counts anew what is stored."""

from pathlib import Path
from typing import Annotated, Any

import typer

from stream.cli.bars import Bars
from stream.cli.say import Session, counts


def retally(
    ctx: typer.Context,
    zones: Annotated[
        Path | None,
        typer.Option(metavar="FILE", help="GeoJSON polygons that take the place of the store's zones."),
    ] = None,
) -> None:
    """Count anew under other tallies or zones."""
    from stream.store import Store
    from stream.store.retally import retally as count_anew

    session: Session = ctx.obj
    settings = session.settings()
    run = settings.run
    with (
        Store.open(session.store, memory_mb=run.memory_mb, threads=run.threads) as store,
        Bars(session) as bars,
    ):
        whole = count_anew(
            store, settings, zones, lambda done, total: bars.show("rows", done, total, f"{done:,}")
        )
    session.result({"store": str(session.store), **whole}, _told(whole))


def _told(whole: dict[str, Any]) -> str:
    rows = whole["passages"] + whole["sections"]
    rate = f", {rows / whole['seconds']:,.0f} rows/s" if whole["seconds"] else ""
    lines = [
        f"{whole['batches']:,} batches counted anew: {whole['passages']:,} passages, "
        f"{whole['sections']:,} sections, {whole['seconds']:.1f} s{rate}",
        f"  changed keys: {'; '.join(whole['changed']) or 'none'}",
        f"  strata: {counts(whole['tallies'], is_sorted=False)}",
    ]
    if whole["is_network_changed"]:
        lines.append(f"  zones or maneuvers changed: the network is {whole['network_digest'][:12]} now")
    if whole["passages_rewritten"]:
        lines.append(
            f"  day types, time bands and delays written anew: {whole['passages_rewritten']:,} passages"
        )
    return "\n".join(lines)
