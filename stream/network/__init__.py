"""The streets, built once: from an extract to frozen arrays and tables."""

from stream.network.built import Built, build_network, streets_from_blobs, streets_to_blobs

__all__ = ["Built", "build_network", "streets_from_blobs", "streets_to_blobs"]
