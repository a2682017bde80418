"""How far a batch has come, as the caller of `ingest` is told after each chunk."""

from collections.abc import Callable
from dataclasses import dataclass


@dataclass(frozen=True)
class Progress:
    """One look at a batch on its way.

    Attributes
    ----------
    batch, batch_ix, n_batches : its name, and which of how many it is (from 0)
    rows, passages : read and found so far
    done, total : of the source, both in its own unit; total 0 where it isn't known
    seconds : since the batch began
    """

    batch: str
    batch_ix: int
    n_batches: int
    rows: int
    passages: int
    done: int
    total: int
    seconds: float


Tell = Callable[[Progress], None]
