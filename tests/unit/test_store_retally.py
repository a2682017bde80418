"""Counting anew: what changes, what is refused, and counts worked out by hand on the stand-in's junctions.

Vehicle a has 31 pings, ten seconds apart, from 22:13:20 UTC, and so 12 passages of 10 s each. With gates 60 m
from the mouths, 10 m inside and 10 m/s the unimpeded time is 13 s and the delay -3 s.
"""

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import duckdb
import polars as pl
import pytest

from stream.config import Settings
from stream.errors import ConfigError, InputError, StoreError
from stream.ingest import ingest
from stream.network import build_network
from stream.store import Store, put_network
from stream.store.audit import run_audit
from stream.store.ladder import quantile_rows
from stream.store.ledger import network_config
from stream.store.retally import retally
from tests.archive import T0, drive, dump, write
from tests.stand_in import install, plan

Make = Callable[..., Settings]


@pytest.fixture
def path(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, settings: Settings) -> Path:
    """Give a store with one vehicle's 12 passages in."""
    install(monkeypatch.setattr)
    made = tmp_path / "s.duckdb"
    with Store.open(made, create=True) as store:
        put_network(store, plan(), network_config(settings))
    ingest(made, [write(tmp_path / "1.csv", drive("a", 31))], settings, close=True)
    return made


def rows(path: Path, query: str) -> list[tuple[Any, ...]]:
    """Ask the file itself."""
    with duckdb.connect(str(path), read_only=True) as con:
        return con.execute(query).fetchall()


def again(path: Path, settings: Settings, zones: Path | None = None) -> dict[str, Any]:
    """Open, count anew, close."""
    with Store.open(path) as store:
        return retally(store, settings, zones)


def test_new_tally_has_counts_worked_out_by_hand(path: Path, make_settings: Make) -> None:
    """Twelve passages of 10 s, 3 s below the unimpeded time, all of them after midnight of Helsinki."""
    new = make_settings({"tallies": {"hour": {"value": "delay", "dimensions": ["weekday", "hour"]}}})
    told = again(path, new)
    assert told["tallies"] == {"hour": 1}
    assert (told["batches"], told["passages"], told["passages_rewritten"]) == (1, 12, 0)
    assert rows(path, "select tally, value, dimensions from tally") == [
        ("hour", "delay", ["weekday", "hour"])
    ]
    # T0 is a Tuesday, 22:13:20 UTC: Wednesday 0:13 in Helsinki (UTC+2).
    wanted = [("hour", "hour", "0"), ("hour", "weekday", "3")]
    assert rows(path, "select tally, dimension, value from stratum order by dimension") == wanted
    assert rows(path, "select n, sum, sum_sq from moment") == [(12, 12 * -3000, 12 * 9_000_000)]
    assert rows(path, "select sum(n) from histogram") == [(12,)]


def test_new_bands_and_day_types_reach_the_passages(path: Path, make_settings: Make) -> None:
    """The passages bear the new names, and so do the strata."""
    days = {"midweek": [3], "others": [1, 2, 4, 5, 6, 7]}
    told = again(path, make_settings({"time.bands": {"any": 0}, "time.day_types": days}))
    assert told["passages_rewritten"] == 12
    assert rows(path, "select distinct day_type, time_band from passage") == [("midweek", "any")]
    named = "select distinct value from stratum where dimension in ('day_type', 'time_band') order by value"
    assert rows(path, named) == [("any",), ("midweek",)]
    assert [key.partition(":")[0] for key in told["changed"]] == [
        *(f"time.bands.{name}" for name in ("am_peak", "any", "evening", "midday", "night", "pm_peak")),
        *(f"time.day_types.{name}" for name in ("midweek", "others", "saturday", "sunday", "weekday")),
    ]


def test_shorter_sections_are_counted_when_asked(path: Path, make_settings: Make) -> None:
    """Six sections of 250 m: none reaches 300 m, all reach 200 m; 10 s over 250 m are 40 s per km."""
    assert again(path, make_settings({"sections.min_m": 300}))["tallies"]["section"] == 0
    assert again(path, make_settings({"sections.min_m": 200}))["tallies"]["section"] == 1
    assert rows(path, "select n, sum from moment where tally = 'section'") == [(6, 6 * 40_000)]


def test_same_configuration_changes_nothing(path: Path, settings: Settings) -> None:
    """Counted anew as it was counted before, the store holds what it held."""
    before = dump(path)
    assert again(path, settings)["changed"] == []
    assert dump(path) == before


def test_damaged_counts_are_mended(path: Path, settings: Settings) -> None:
    """What the audit finds wrong in histograms is right again: the passages decide."""
    before = dump(path)
    with duckdb.connect(str(path)) as con:
        con.execute("update histogram set n = n + 1")
        con.execute("delete from stratum where tally = 'angle'")
    again(path, settings)
    assert dump(path) == before


def test_other_bins_are_refused_until_counted_anew(path: Path, tmp_path: Path, settings: Settings) -> None:
    """Histograms in the bins of another version are neither shown nor added to; retally makes them ours."""
    before = dump(path)
    edges = "create or replace view bin as select 0 as bin_ix, 0 as lower_ms, 1 as upper_ms, 0.5 as mid_ms"
    with duckdb.connect(str(path)) as con:
        con.execute("update meta set value = 'wider' where key = 'bins'").fetchall()
        con.execute("update histogram set bin_ix = bin_ix // 2").fetchall()
        con.execute(edges).fetchall()
    with pytest.raises(StoreError, match="have the bins wider, this program counts in"):
        ingest(path, [write(tmp_path / "2.csv", drive("a", 31, T0 + 86_400))], settings)
    with Store.open(path) as store:
        with pytest.raises(StoreError, match="run `turntally retally`"):
            quantile_rows(store, "maneuver", ["maneuver"], {}, settings)
        retally(store, settings)
        assert quantile_rows(store, "maneuver", ["maneuver"], {}, settings)
    assert dump(path) == before
    # The bin of -3 s: 250 ms wide, its lower edge is part of it (DESIGN, section 7).
    held = "select distinct lower_ms, upper_ms from histogram join bin using (bin_ix) where tally = 'angle'"
    assert rows(path, held) == [(-3000, -2750)]


@pytest.mark.parametrize(
    ("key", "value"),
    [
        ("follow.sigma_m", 9),
        ("clean.max_speed_kmh", 200),
        ("trips.dwell_s", 301),
        ("passages.slow_kmh", 6),
        ("gates.entry_m", 70),
        ("network.cluster_m", 26),
        ("network.default_kmh", {"road": 41}),
        ("network.classes", ["road"]),
    ],
)
def test_keys_that_need_pings_are_refused(path: Path, make_settings: Make, key: str, value: object) -> None:
    """A key that shapes the roads or what is found is named, with its values, and nothing changes."""
    before = dump(path)
    with pytest.raises(StoreError, match=rf"stored passages can't be counted anew.*\n  {key}\S*: .* -> "):
        again(path, make_settings({key: value, "sections.min_m": 10}))
    assert dump(path) == before


def test_ingest_of_other_tallies_names_retally(path: Path, tmp_path: Path, make_settings: Make) -> None:
    """Ingest refuses other bands with `retally` as the mend, and takes the day in once that has run."""
    new = make_settings({"time.bands": {"any": 0}})
    late = write(tmp_path / "2.csv", drive("a", 31, T0 + 86_400))
    with pytest.raises(StoreError, match="run `turntally retally`"):
        ingest(path, [late], new)
    again(path, new)
    (report,) = ingest(path, [late], new, close=True)
    assert report["status"] == "taken in"
    digests = rows(path, "select distinct config_digest from batch")
    assert digests == [(new.digest(),)]


def test_zone_keys_need_the_zones(path: Path, make_settings: Make) -> None:
    """Which zones had a time zone of their own is not stored, so another default asks for the file again."""
    with pytest.raises(StoreError, match=r"network.time_zone: auto -> Asia/Kolkata\nname the file of zones"):
        again(path, make_settings({"network.time_zone": "Asia/Kolkata"}))


def test_unknown_dimension_is_refused(path: Path, make_settings: Make) -> None:
    """A tally that can't be counted is refused before anything is done."""
    with pytest.raises(ConfigError, match="did you mean zone"):
        again(path, make_settings({"tallies": {"x": {"value": "delay", "dimensions": ["zones"]}}}))


def test_unusable_zones_are_refused(path: Path, tmp_path: Path, settings: Settings) -> None:
    """A file of zones that is none leaves the store as it was."""
    before = dump(path)
    (tmp_path / "z.geojson").write_text(json.dumps({"type": "FeatureCollection", "features": []}))
    with pytest.raises(InputError, match="draw each zone as a polygon"):
        again(path, settings, tmp_path / "z.geojson")
    assert dump(path) == before


@pytest.mark.parametrize("bands", [{"any": 0}, {"night": 0, "day": 6}])
def test_orphans_are_refused(path: Path, make_settings: Make, bands: dict[str, int]) -> None:
    """Passages on a movement that is not there are never left out without a word; nothing is changed."""
    with duckdb.connect(str(path)) as con:
        con.execute("update passage set arm_out = 7 where junction_id = 2")
    before = dump(path)
    with pytest.raises(StoreError, match="6 passages or sections name a movement"):
        again(path, make_settings({"time.bands": bands}))
    assert dump(path) == before


def test_delays_follow_the_reference_in_use(path: Path, settings: Settings) -> None:
    """Passages whose delays rest on another version get those of the version in use."""
    before = dump(path)
    with duckdb.connect(str(path)) as con:
        con.execute("insert into reference select 2, 'another', made_at from reference")
        con.execute("update passage set reference_id = 2, delay_ms = 5 where junction_id = 1")
    told = again(path, settings)
    assert told["passages_rewritten"] == 12
    assert dump(path)["passage"] == before["passage"]
    assert dump(path)["histogram"] == before["histogram"]


def test_store_without_batches_gets_its_zones(tmp_path: Path, town_osm: Path, make_settings: Make) -> None:
    """Before the first batch only the network changes, and is that of a build with the same zones."""
    old, new = make_settings(), make_settings({"network.driving_side": "left"})
    ring = [[9.99, 49.99], [10.002, 49.99], [10.002, 50.02], [9.99, 50.02], [9.99, 49.99]]
    area = {"type": "Polygon", "coordinates": [ring]}
    zone = {"type": "Feature", "properties": {"name": "west"}, "geometry": area}
    zones = tmp_path / "z.geojson"
    zones.write_text(json.dumps({"type": "FeatureCollection", "features": [zone]}))
    built = build_network(town_osm, zones, new)
    path = tmp_path / "s.duckdb"
    with Store.open(path, create=True) as store:
        put_network(store, build_network(town_osm, None, old), network_config(old))
        told = retally(store, new, zones)
        assert told["network_digest"] == built.digest
        assert (told["batches"], told["passages"], told["tallies"]) == (0, 0, {})
        assert store.frame("network/all_junction").equals(built.tables["junction"])
        assert set(built.tables["junction"]["driving_side"]) == {"left"}
        assert store.frame("network/all_link").filter(pl.col("zone") == "west").height > 0


def test_store_without_network_is_refused(fresh_store: Store, settings: Settings) -> None:
    """There is nothing to count on."""
    with pytest.raises(StoreError, match="holds no network"):
        retally(fresh_store, settings)


def test_read_only_store_is_refused(path: Path, settings: Settings) -> None:
    """A store opened for reading is left alone, and the error says so."""
    with Store.open(path, read_only=True) as store, pytest.raises(StoreError, match="opened for reading"):
        retally(store, settings)


def test_progress_reaches_all_rows(path: Path, make_settings: Make) -> None:
    """Passages are met twice where they are written anew, sections once."""
    seen: list[tuple[int, int]] = []
    with Store.open(path) as store:
        retally(store, make_settings({"time.bands": {"any": 0}}), progress=lambda *at: seen.append(at))
        assert [one for one in run_audit(store) if one["n_faults"]] == []
    assert seen == [(12, 30), (24, 30), (30, 30)]
