"""Take batches in: read, detect, tally, commit; each as a whole or not at all."""

from stream.ingest.progress import Progress
from stream.ingest.run import ingest

__all__ = ["Progress", "ingest"]
