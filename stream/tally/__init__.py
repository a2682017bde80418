"""Counting: fixed bins, dimensions, unimpeded times, exact sums."""

from stream.tally.bins import (
    BINS_DIGEST,
    EDGES_MS,
    N_BINS,
    bin_of,
    ladder_ms,
    lower_ms,
    mid_ms,
    quantile_ms,
    upper_ms,
)
from stream.tally.count import Adder, Counts, add_counts, count_passages, count_sections, stratum_number
from stream.tally.ranks import limit_ranks
from stream.tally.reference import pace_ms, traversal_ms, unimpeded_ms
from stream.tally.strata import DIMENSIONS, check_tallies, dimension, needed_columns, with_local_time

__all__ = [
    "BINS_DIGEST",
    "DIMENSIONS",
    "EDGES_MS",
    "N_BINS",
    "Adder",
    "Counts",
    "add_counts",
    "bin_of",
    "check_tallies",
    "count_passages",
    "count_sections",
    "dimension",
    "ladder_ms",
    "limit_ranks",
    "lower_ms",
    "mid_ms",
    "needed_columns",
    "pace_ms",
    "quantile_ms",
    "stratum_number",
    "traversal_ms",
    "unimpeded_ms",
    "upper_ms",
    "with_local_time",
]
