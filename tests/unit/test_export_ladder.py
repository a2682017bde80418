"""Quantile ladders against the passages they are made of, counted plainly."""

from collections.abc import Iterator
from fractions import Fraction
from pathlib import Path
from typing import Any

import polars as pl
import pytest

from stream.config import Settings, load_settings
from stream.errors import ConfigError, StoreError
from stream.export import quantile_rows
from stream.network import Built, build_network
from stream.store import Store
from stream.tally import EDGES_MS, N_BINS, lower_ms, mid_ms, upper_ms, with_local_time
from stream.tally.strata import DIMENSIONS, sector_of, value_of
from tests.filled import fill, found_at_random
from tests.oracle import tally as oracle

SEED = 20260327
TALLIES = {
    "maneuver": {
        "value": "delay",
        "dimensions": ["zone", "maneuver", "class_in", "class_out", "control", "day_type", "time_band"],
    },
    "clock": {"value": "delay", "dimensions": ["hour", "weekday", "month", "is_queued_at_gate", "is_banned"]},
    "angle": {"value": "delay", "dimensions": ["driving_side", "turn_sector"]},
    "movement": {"value": "delay", "dimensions": ["junction_id", "arm_in", "arm_out"]},
    "section": {"value": "pace", "dimensions": ["zone", "class", "day_type", "time_band", "hour"]},
}
DELAYS = [name for name, t in TALLIES.items() if t["value"] == "delay"]


@pytest.fixture(scope="module")
def own() -> Settings:
    """Give settings with tallies over every dimension."""
    return load_settings(over={"tallies": TALLIES, "privacy": {"plain_ids": True}})


@pytest.fixture(scope="module")
def built(town_osm: Path, own: Settings) -> Built:
    """Give the tiny town."""
    return build_network(town_osm, None, own)


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory, built: Built, own: Settings) -> Iterator[Store]:
    """Give a store with 1200 passages in two batches."""
    with Store.open(tmp_path_factory.mktemp("ladder") / "s.duckdb", create=True) as one:
        fill(one, built, own, found_at_random(built, 900, 25, SEED), "first")
        fill(one, built, own, found_at_random(built, 300, 40, SEED + 1), "second")
        yield one


@pytest.fixture(scope="module")
def passages(store: Store, own: Settings) -> pl.DataFrame:
    """Give the passages with the text of every dimension, the plain way."""
    parts = [
        pl.from_arrow(b) for b in store.batches("export/passages", {"min_passages": 0, "min_vehicles": 0})
    ]
    rows = pl.concat(p for p in parts if isinstance(p, pl.DataFrame))
    rows = rows.with_columns(
        pl.lit("Europe/Berlin").alias("time_zone"), pl.col("entry_at").dt.epoch("us").alias("us")
    )
    rows = with_local_time(rows, own.time, "us")
    named = {d for t in TALLIES.values() if t["value"] == "delay" for d in t["dimensions"]}
    return rows.with_columns(value_of(DIMENSIONS[d]).alias(f"={d}") for d in named)


@pytest.mark.parametrize("tally", DELAYS)
def test_each_line_is_the_passages_of_its_values(
    tally: str, store: Store, passages: pl.DataFrame, own: Settings
) -> None:
    """n, vehicles, mean and quantiles of every line are those of the passages with its values."""
    dims = TALLIES[tally]["dimensions"]
    lines = quantile_rows(store, tally, dims, None, own)
    assert sum(line["n"] for line in lines) == passages.height
    for line in lines:
        mine = passages.filter(pl.col(f"={d}") == line[d] for d in dims)
        delays = mine["delay_ms"].to_list()
        assert line["n"] == len(delays)
        assert line["vehicles"] == len(set(mine["vehicle"]))
        assert line["mean_s"] == pytest.approx(sum(delays) / len(delays) / 1000)
        for level in (5, 15, 50, 85, 95):
            wanted = oracle.order_statistic(delays, Fraction(level, 100)) / 1000
            assert abs(line[f"p{level}_s"] - wanted) <= max(0.125, abs(wanted) / 100)


def test_vehicles_of_merged_strata_are_counted_once(
    store: Store, passages: pl.DataFrame, own: Settings
) -> None:
    """One line for everything counts each vehicle once, not once a stratum."""
    (line,) = quantile_rows(store, "maneuver", [], None, own)
    assert line["n"] == passages.height
    assert line["vehicles"] == passages["vehicle"].n_unique()


def test_where_keeps_only_its_value(store: Store, passages: pl.DataFrame, own: Settings) -> None:
    """A condition on a dimension that is not shown still holds, for counts and for vehicles."""
    (line,) = quantile_rows(store, "maneuver", [], {"time_band": "am_peak"}, own)
    mine = passages.filter(pl.col("time_band") == "am_peak")
    assert (line["n"], line["vehicles"]) == (mine.height, mine["vehicle"].n_unique())


def test_limits_are_open_where_the_sample_is_small(store: Store, own: Settings) -> None:
    """A line of fewer than 72 passages has no upper limit of P95 (METHODS.md section 10)."""
    lines = quantile_rows(store, "movement", None, None, own)
    assert any(line["n"] < 72 for line in lines)
    assert any(line["n"] >= 72 for line in lines)
    for line in lines:
        assert (line["p95_upper_s"] is None) == (line["n"] < 72)


def test_thin_lines_are_shown_and_marked(store: Store, own: Settings) -> None:
    """A stratum below the disclosure limits is in the list, with its mark."""
    lines = quantile_rows(store, "movement", None, None, own)
    thin = [line for line in lines if line["is_thin"]]
    assert thin
    assert all(line["is_thin"] == (line["n"] < 10 or line["vehicles"] < 5) for line in lines)


def test_paces_carry_their_unit(store: Store, own: Settings) -> None:
    """A tally of sections is in seconds per km and counts the long sections alone."""
    (line,) = quantile_rows(store, "section", [], None, own)
    rows = store._con.execute("select duration_ms, path_m, vehicle from section").fetchall()
    paths = [row for row in rows if row[1] >= 50]  # sections.min_m
    assert line["n"] == len(paths)
    assert line["vehicles"] == len({p[2] for p in paths})
    assert line["mean_s_per_km"] == pytest.approx(sum(d / m for d, m, _ in paths) / len(paths), abs=1e-3)
    assert "mean_s" not in line


def test_vehicles_of_sections_by_local_time(store: Store, own: Settings) -> None:
    """Bands and day types of sections are those of the histograms, so that every line has its vehicles."""
    lines = quantile_rows(store, "section", None, None, own)
    assert len({line["time_band"] for line in lines}) == 5
    assert all(1 <= line["vehicles"] <= line["n"] for line in lines)


def test_default_lines_are_zone_and_maneuver(store: Store, own: Settings) -> None:
    """Without --by the maneuver tally shows zone and maneuver, the other tallies all they have."""
    assert list(quantile_rows(store, "maneuver", None, None, own)[0])[:2] == ["zone", "maneuver"]
    assert list(quantile_rows(store, "angle", None, None, own)[0])[:3] == ["driving_side", "turn_sector", "n"]


def test_lines_stand_in_the_order_of_their_values(store: Store, own: Settings) -> None:
    """Sectors go by angle, hours by number, maneuvers from through to reverse, bands by the clock."""
    sectors = [r["turn_sector"] for r in quantile_rows(store, "angle", ["turn_sector"], None, own)]
    assert sectors == sorted(sectors, key=lambda s: int(s.partition("..")[0]))
    hours = [r["hour"] for r in quantile_rows(store, "clock", ["hour"], None, own)]
    assert hours == [str(h) for h in range(24)]
    maneuvers = [r["maneuver"] for r in quantile_rows(store, "maneuver", ["maneuver"], None, own)]
    assert maneuvers == ["through", "right", "left", "reverse"]
    bands = [r["time_band"] for r in quantile_rows(store, "maneuver", ["time_band"], None, own)]
    assert bands == ["night", "am_peak", "midday", "pm_peak", "evening"]


@pytest.mark.parametrize(
    ("tally", "by", "where", "told"),
    [
        ("manoeuvre", None, None, "did you mean maneuver"),
        ("maneuver", ["zones"], None, "--by zones.*did you mean zone"),
        ("maneuver", ["zone", "zone"], None, "stands twice"),
        ("angle", ["maneuver"], None, "tally angle has no such dimension"),
        ("maneuver", None, {"hour": "3"}, "--where hour"),
        ("maneuver", None, {"maneuver": "lefd"}, "did you mean left"),
    ],
)
def test_wrong_questions_name_the_nearest(
    tally: str, by: Any, where: Any, told: str, store: Store, own: Settings
) -> None:
    """An unknown tally, dimension or value is wrong usage, and the message helps."""
    with pytest.raises(ConfigError, match=told):
        quantile_rows(store, tally, by, where, own)


def test_store_without_counts_says_what_to_run(fresh_store: Store, settings: Settings) -> None:
    """Before the first batch there is nothing to show."""
    with pytest.raises(StoreError, match="turntally ingest"):
        quantile_rows(fresh_store, "maneuver", None, None, settings)


def test_bin_view_is_the_table_of_bins(fresh_store: Store) -> None:
    """The bins that SQL makes are those that Python counts with."""
    got = fresh_store._con.execute(
        "select bin_ix, lower_ms, upper_ms, mid_ms from bin order by bin_ix"
    ).fetchall()
    assert got == [(b, lower_ms(b), upper_ms(b), mid_ms(b)) for b in range(N_BINS)]
    assert len(EDGES_MS) == len(got) - 1


def test_ladder_view_agrees_with_the_lines(store: Store, own: Settings) -> None:
    """The view quantile_ladder gives the same quantiles, stratum by stratum."""
    lines = quantile_rows(store, "angle", None, None, own)
    query = "select n, p5_ms, p50_ms, p95_ms from quantile_ladder where tally = 'angle'"
    wanted = [(r["n"], *(round(r[f"p{p}_s"] * 1000, 1) for p in (5, 50, 95))) for r in lines]
    assert sorted(store._con.execute(query).fetchall()) == sorted(wanted)


def test_sector_in_sql_is_the_one_in_python(fresh_store: Store) -> None:
    """Both languages put every angle, limits included, into the same sector."""
    angles = [a / 4 for a in range(-719, 721)]
    frame = pl.DataFrame({"turn_deg": angles})
    wanted = frame.select(sector_of(pl.col("turn_deg"))).to_series().to_list()
    text = (Path(__file__).resolve().parents[2] / "sql/export/passage_vehicles.sql").read_text(
        encoding="utf-8"
    )
    start = text.index("(least(floor(p.turn_deg")
    formula = text[start : text.index("end as turn_sector")].replace("p.turn_deg", "a")
    rows = fresh_store._con.execute(f"select {formula} from unnest($a) as t(a)", {"a": angles}).fetchall()
    assert [r[0] for r in rows] == wanted
