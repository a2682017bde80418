"""The command that builds the streets."""

from pathlib import Path
from typing import Annotated, Any

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
    with Bars(session) as bars:
        built = build_network(extract, zones, settings, bars.show)
    with Store.open(session.store, create=True, memory_mb=settings.run.memory_mb) as store:
        put_network(store, built, network_config(settings))
    whole = {
        "extract": str(extract),
        "store": str(session.store),
        "network_digest": built.digest,
        **built.report,
    }
    session.result(whole, _told(whole))


def _told(whole: dict[str, Any]) -> str:
    lines = [f"network {whole['network_digest']} from {whole['extract']} is in {whole['store']}"]
    for key, value in whole.items():
        if isinstance(value, dict):
            lines.append(f"  {key.replace('_', ' ')}: {counts(value)}")
        elif key not in ("extract", "store", "network_digest"):
            lines.append(
                f"  {key.replace('_', ' ')}: {value:,}" if isinstance(value, int) else f"  {key}: {value}"
            )
    return "\n".join(lines)
