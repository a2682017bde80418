"""Counts against the plain twin, and their algebra over random cuts."""

import itertools
from typing import Any

import numpy as np
import polars as pl
from hypothesis import given, settings
from hypothesis import strategies as st

from stream.config import load_settings
from stream.tally import Counts, bin_of, count_passages, stratum_number, with_local_time
from tests.oracle import tally as oracle

SETTINGS = load_settings()
ZONES = {"centre": "Europe/Helsinki", "harbour": "America/New_York", "": "UTC"}
CLASSES = st.sampled_from(["primary", "residential"])
DELAYS = st.one_of(
    st.integers(-12_000, 15_000),
    st.integers(-4_000_000, 4_000_000),
    st.sampled_from([0, -250, 250, 9_999, 10_000, 10_199, 10_200, -10_000, 3_599_999, 3_600_000]),
)
# Angles are bearings apart; a tenth of a subnormal number is 0, which no junction has to suffer.
ANGLES = st.floats(-179.9, 180, allow_subnormal=False)
PASSAGE = st.fixed_dictionaries(
    {
        "zone": st.sampled_from(list(ZONES)),
        "maneuver": st.sampled_from(["through", "left", "right"]),
        "class_in": CLASSES,
        "class_out": CLASSES,
        "control": st.sampled_from(["signals", "none"]),
        "driving_side": st.just("right"),
        "turn_deg": st.one_of(ANGLES, st.sampled_from([-170.0, -0.0, 0.0, 90.0, 180.0])),
        "junction_id": st.integers(-2, 3),
        "arm_in": st.integers(0, 2),
        "arm_out": st.integers(0, 2),
        "entry_us": st.integers(1_767_225_600_000_000, 1_798_761_599_999_999),
        "delay_ms": DELAYS,
    }
)
PASSAGES = st.lists(PASSAGE, min_size=1, max_size=60)


def frame_of(rows: list[dict[str, Any]]) -> pl.DataFrame:
    """Build the frame that ingest would count."""
    frame = pl.DataFrame(rows, schema_overrides={"delay_ms": pl.Int32, "turn_deg": pl.Float64})
    zones = frame["zone"].replace_strict(ZONES)
    return with_local_time(frame.with_columns(zones.alias("time_zone")), SETTINGS.time, "entry_us")


def count(rows: list[dict[str, Any]]) -> Counts:
    """Count rows with the default tallies."""
    return count_passages(frame_of(rows), SETTINGS) if rows else Counts.empty()


def copy_of(counts: Counts) -> Counts:
    """Copy the integers, to see later whether they moved."""
    return Counts(counts.stratum.clone(), counts.histogram.clone(), counts.moment.clone())


@settings(max_examples=60, deadline=None)
@given(PASSAGES)
def test_counts_match_the_plain_twin(rows: list[dict[str, Any]]) -> None:
    """Every cell and moment of every tally of delays is the one counted row by row."""
    told = frame_of(rows).select("hour", "weekday", "day_type", "time_band").to_dicts()
    full = [{**row, **extra} for row, extra in zip(rows, told, strict=True)]
    got = count(rows)
    for name, tally in SETTINGS.tallies.items():
        if tally.value != "delay":
            continue
        cells, moments = oracle.count(full, [r["delay_ms"] for r in rows], tally.dimensions)
        wanted = {(stratum_number(name, dict(s)), b): n for (s, b), n in cells.items()}
        mine = got.histogram.filter(tally=name)
        assert {(s, b): n for s, b, n in mine.select("stratum_id", "bin_ix", "n").iter_rows()} == wanted
        sums = {stratum_number(name, dict(s)): m for s, m in moments.items()}
        mine = got.moment.filter(tally=name)
        assert {s: m for s, *m in mine.select("stratum_id", "n", "sum", "sum_sq").iter_rows()} == {
            s: list(m) for s, m in sums.items()
        }
        named = {(stratum_number(name, dict(s)), *pair) for s in moments for pair in s}
        assert (
            set(got.stratum.filter(tally=name).select("stratum_id", "dimension", "value").iter_rows())
            == named
        )


@settings(max_examples=40, deadline=None)
@given(PASSAGES, st.lists(st.integers(0, 60), max_size=5), st.randoms(use_true_random=False))
def test_parts_add_up_to_the_whole(rows: list[dict[str, Any]], cuts: list[int], random: Any) -> None:
    """Cut anywhere and added in any order, the parts give the counts of the whole."""
    bounds = [0, *sorted(min(c, len(rows)) for c in cuts), len(rows)]
    parts = [count(rows[a:b]) for a, b in itertools.pairwise(bounds)]
    random.shuffle(parts)
    total = Counts.empty()
    for part in parts:
        total = total + part
    assert total.equals(count(rows))


@settings(max_examples=40, deadline=None)
@given(PASSAGES, PASSAGES, PASSAGES)
def test_addition_is_commutative_and_associative(
    a: list[dict[str, Any]], b: list[dict[str, Any]], c: list[dict[str, Any]]
) -> None:
    """The order of adding and bracketing does not matter."""
    x, y, z = count(a), count(b), count(c)
    assert (x + y).equals(y + x)
    assert ((x + y) + z).equals(x + (y + z))


@settings(max_examples=20, deadline=None)
@given(PASSAGES, PASSAGES)
def test_addition_leaves_its_arguments_alone(a: list[dict[str, Any]], b: list[dict[str, Any]]) -> None:
    """Both sides hold after an addition what they held before."""
    x, y = count(a), count(b)
    before = copy_of(x), copy_of(y)
    x + y
    assert x.equals(before[0])
    assert y.equals(before[1])


@settings(max_examples=100, deadline=None)
@given(st.lists(st.integers(-4_000_000, 4_000_000), min_size=1, max_size=40))
def test_bins_match_the_plain_twin(values_ms: list[int]) -> None:
    """A value's bin is the number of edges not above it."""
    edges = oracle.edges_ms()
    assert bin_of(np.array(values_ms)).tolist() == [oracle.bin_of(edges, v) for v in values_ms]
