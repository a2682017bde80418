"""The command that builds the streets."""

from pathlib import Path
from typing import Annotated

import typer

from stream.cli.bars import Bars
from stream.cli.say import Session, counts


def network(
    ctx: typer.Context,
    extract: Annotated[
        Path,
        typer.Argument(
            metavar="EXTRACT",
            help="OpenStreetMap extract (.osm.pbf, .osm, .osm.gz, .osm.bz2) or road lines of your own "
            "(.geojson, .parquet).",
        ),
    ],
    zones: Annotated[
        Path | None,
        typer.Option(
            metavar="FILE", help="GeoJSON polygons with a name; the first that holds a junction counts."
        ),
    ] = None,
) -> None:
    """Build junctions, arms and gates from an extract."""
    from stream.network import build_network
    from stream.store import Store, put_network
    from stream.store.ledger import network_config

    session: Session = ctx.obj
    settings = session.settings()
    run = settings.run
    if session.store.exists():  # told now if it can't be written, not after a long build
        Store.open(session.store, create=True).close()
    with Bars(session) as bars:
        built = build_network(extract, zones, settings, lambda what, n: bars.show(what, n, 0, f"{n:,}"))
    with Store.open(session.store, create=True, memory_mb=run.memory_mb, threads=run.threads) as store:
        put_network(store, built, network_config(settings))
    head = {"extract": str(extract), "store": str(session.store), "network_digest": built.digest}
    session.result({**head, "counts": built.report}, _told(head, built.report))


def _told(head: dict[str, str], report: dict[str, dict[str, int]]) -> str:
    width = max(map(len, report))
    lines = [f"network {head['network_digest'][:12]} of {head['extract']} is in {head['store']}"]
    for part, numbers in report.items():
        lines.append(f"  {part.replace('_', ' '):{width}}  {counts(numbers, is_sorted=False)}")
    return "\n".join(lines)
