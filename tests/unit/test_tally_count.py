"""Counting into strata, and adding counts."""

from collections.abc import Callable

import polars as pl
import pytest

from stream.config import Settings
from stream.errors import ConfigError
from stream.tally import Counts, add_counts, count_passages, count_sections, stratum_number


def movement_only(make_settings: Callable[..., Settings]) -> Settings:
    """Keep one small tally."""
    return make_settings(
        {"tallies": {"movement": {"value": "delay", "dimensions": ["junction_id", "arm_in"]}}}
    )


def test_moments_are_exact_beyond_64_bits(make_settings: Callable[..., Settings]) -> None:
    """Sums of squares past 2^63 keep every digit: 600 000 values of 4 000 001 ms."""
    n, value = 600_000, 4_000_001
    rows = pl.DataFrame({"delay_ms": [value] * n, "junction_id": 5, "arm_in": 1})
    got = count_passages(rows, movement_only(make_settings)).moment.to_dicts()
    number = stratum_number("movement", {"junction_id": "5", "arm_in": "1"})
    wanted = {
        "tally": "movement",
        "stratum_id": number,
        "n": n,
        "sum": n * value,
        "sum_sq": n * value * value,
    }
    assert got == [wanted]
    assert got[0]["sum_sq"] > 2**63


def test_strata_say_what_they_are(make_settings: Callable[..., Settings]) -> None:
    """Each stratum has one row per dimension, as text."""
    rows = pl.DataFrame({"delay_ms": [1, 2], "junction_id": [5, -6], "arm_in": [1, 0]})
    got = count_passages(rows, movement_only(make_settings)).stratum
    seen = {(r["dimension"], r["value"]) for r in got.to_dicts()}
    assert seen == {("junction_id", "5"), ("junction_id", "-6"), ("arm_in", "1"), ("arm_in", "0")}
    assert got["stratum_id"].min() >= 0


def test_stratum_number_does_not_depend_on_the_order_of_dimensions() -> None:
    """The same values are the same stratum however the YAML lists them; another tally has its own."""
    one = stratum_number("t", {"a": "1", "b": "2"})
    assert one == stratum_number("t", {"b": "2", "a": "1"})
    assert one != stratum_number("u", {"a": "1", "b": "2"})
    assert one != stratum_number("t", {"a": "2", "b": "1"})
    assert 0 <= one < 2**63


def test_short_sections_are_left_out(settings: Settings) -> None:
    """A section below sections.min_m enters no pace histogram; one of exactly that length does."""
    rows = pl.DataFrame(
        {"duration_ms": [5_000, 5_000], "path_m": [49.99, 50.0], "zone": "centre", "class": "secondary"}
    )
    got = count_sections(rows, settings).moment.to_dicts()
    assert [(m["tally"], m["n"], m["sum"]) for m in got] == [("section", 1, 100_000)]


def test_sections_of_no_length_have_no_pace(make_settings: Callable[..., Settings]) -> None:
    """With no lower limit a section of length 0 is still left out rather than divided by."""
    rows = pl.DataFrame({"duration_ms": [5_000], "path_m": [0.0], "zone": "", "class": "secondary"})
    assert count_sections(rows, make_settings({"sections.min_m": 0})).equals(Counts.empty())


def test_no_rows_give_empty_counts(settings: Settings) -> None:
    """Nothing counted equals nothing."""
    rows = pl.DataFrame(schema={"delay_ms": pl.Int32, "zone": pl.String})
    assert count_passages(rows, settings).equals(Counts.empty())
    assert add_counts([]).equals(Counts.empty())


def test_empty_is_neutral(make_settings: Callable[..., Settings]) -> None:
    """Adding nothing changes nothing."""
    rows = pl.DataFrame({"delay_ms": [1, -2], "junction_id": [5, 5], "arm_in": [1, 2]})
    counts = count_passages(rows, movement_only(make_settings))
    assert (counts + Counts.empty()).equals(counts)
    assert (Counts.empty() + counts).equals(counts)


def test_two_strata_on_one_number_are_refused() -> None:
    """Counts that would mix two strata are not added."""

    def stratum(value: str) -> Counts:
        row = {"tally": ["t"], "stratum_id": [1], "dimension": ["zone"], "value": [value]}
        return Counts(pl.DataFrame(row), Counts.empty().histogram, Counts.empty().moment)

    with pytest.raises(RuntimeError, match="two strata fall on one number"):
        stratum("a") + stratum("b")


def test_unknown_dimension_is_refused_before_counting(make_settings: Callable[..., Settings]) -> None:
    """A tally by something that there is not is an error of the configuration."""
    own = make_settings({"tallies": {"mine": {"value": "delay", "dimensions": ["zones"]}}})
    with pytest.raises(ConfigError, match="did you mean zone"):
        count_passages(pl.DataFrame({"delay_ms": [1]}), own)
