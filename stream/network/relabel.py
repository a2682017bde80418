"""Zones, driving sides, time zones and maneuvers given anew to a network that stands: no road, arm, gate or
movement changes.

Guarantee: the tables are, to the bit, those that a build with these zones and keys would give.
"""

from pathlib import Path

import polars as pl

from stream.config import Settings
from stream.network.movements import maneuver_of
from stream.network.tables import link_zones, side_of, zone_columns, zone_table
from stream.network.zones import read_zones

Tables = dict[str, pl.DataFrame]


def relabel(tables: Tables, settings: Settings, seen_side: str, zones: Path | None) -> Tables:
    """Give the tables of a network with other zones, or other limits between the maneuvers.

    Parameters
    ----------
    tables
        junction, arm, link, movement and zone, as built. Not changed.
    settings
        Read are `network.time_zone`, `network.driving_side` and the keys under `maneuver`.
    seen_side
        Driving side that the network's own rings tell.
    zones
        GeoJSON polygons; None keeps the zones that are there, with their sides and time zones.

    Raises
    ------
    InputError
        The polygons can't be used.
    """
    out = {**tables, "movement": _maneuvers(tables["movement"], settings)}
    if zones is None and tables["zone"].height:
        return out
    areas = None if zones is None else read_zones(zones, settings)
    side = side_of(settings.network, seen_side)
    junction, link = tables["junction"], tables["link"]
    places = junction["lon"].to_numpy(), junction["lat"].to_numpy()
    names, sides, times = zone_columns(*places, areas, side, settings.network)
    out["junction"] = junction.with_columns(
        pl.Series("zone", names, pl.String),
        pl.Series("driving_side", sides, pl.String),
        pl.Series("time_zone", times, pl.String),
    )
    placed = link_zones(link["lon"].to_numpy(), link["lat"].to_numpy(), areas)
    out["link"] = link.with_columns(placed.alias("zone"))
    out["zone"] = zone_table(areas, side)
    return out


def _maneuvers(movement: pl.DataFrame, settings: Settings) -> pl.DataFrame:
    names = [maneuver_of(angle, settings.maneuver) for angle in movement["turn_deg"].to_list()]
    return movement.with_columns(pl.Series("maneuver", names, pl.String))
