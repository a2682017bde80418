"""The streets, built once: from an extract to frozen arrays and tables."""

from stream.network.built import Built, build_network, network_digest, streets_from_blobs, streets_to_blobs
from stream.network.relabel import relabel

__all__ = [
    "Built",
    "build_network",
    "network_digest",
    "relabel",
    "streets_from_blobs",
    "streets_to_blobs",
]
