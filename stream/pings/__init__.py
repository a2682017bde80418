"""The archive, read in chunks of typed columns."""

from stream.pings.book import VehicleBook
from stream.pings.chunks import PingChunk
from stream.pings.files import content_digest, expand
from stream.pings.hold import HoldBack
from stream.pings.read import PingSource, open_source
from stream.pings.seal import Stamp, stamp, watched

__all__ = [
    "HoldBack",
    "PingChunk",
    "PingSource",
    "Stamp",
    "VehicleBook",
    "content_digest",
    "expand",
    "open_source",
    "stamp",
    "watched",
]
