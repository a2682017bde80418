"""Where a store's figures come from, and whom to credit for the streets."""

from dataclasses import dataclass

from stream.store.database import Store

ATTRIBUTION = "© OpenStreetMap contributors"
LICENCE = "Open Database License (ODbL) 1.0"


@dataclass(frozen=True)
class Origin:
    """Where the figures come from.

    Attributes
    ----------
    network_digest, reference_ids : the streets and the cruise speeds that delays rest on
    is_osm : whether the streets come from OpenStreetMap
    """

    network_digest: str
    reference_ids: tuple[int, ...]
    is_osm: bool


def origin_of(store: Store) -> Origin:
    """Read where a store's figures come from; the store holds a network."""
    told = store.rows("export/origin")[0]
    return Origin(told["network_digest"], tuple(told["reference_ids"]), told["is_osm"])
