"""The audit finds damage: each kind is planted in a sound store, and what must see it is named."""

from pathlib import Path

import duckdb
import pytest

from stream.config import Settings
from stream.ingest import ingest
from stream.store import Store, put_network
from stream.store.audit import run_audit
from stream.store.ledger import network_config
from tests.archive import archive, drive, write
from tests.stand_in import install, plan

# What is done to the store, and which audits must find it.
DAMAGE = {
    "update batch_count set n = n + 1 where reason = 'duplicate'": {"rows_accounted"},
    "delete from batch_count where reason = 'outside_area'": {"rows_accounted"},
    "update trip set passage_us = passage_us + 1, other_us = other_us - 1 where n_passages > 2": {
        "time_conserved"
    },
    "update trip set other_us = other_us + 1": {"time_conserved"},
    "update trip set last_gate_at = last_gate_at + interval 1 microsecond": {"time_conserved"},
    "update section set to_at = to_at + interval 1 microsecond": {"time_conserved"},
    "delete from section where path_m > 0": {"time_conserved", "counted_again"},
    "delete from passage where entry_at = (select min(entry_at) from passage)": {
        "time_conserved",
        "histogram_is_passages",
        "counted_again",
    },
    "insert into passage select * from passage order by entry_at limit 1": {
        "key_twice",
        "taken_twice",
        "time_conserved",
        "histogram_is_passages",
        "counted_again",
    },
    "insert into carry select * from carry order by vehicle limit 1": {"key_twice"},
    "update carry set replaced_by = null where replaced_by is not null": {"key_twice", "open_trips"},
    "update span set batch_id = 9": {"no_orphan"},
    "update batch set rolled_into = 1 where batch_id = 2": {"histogram_is_passages", "counted_again"},
    "update histogram set bin_ix = bin_ix + 1": {"counted_again"},
    "update histogram set n = n + 1 where tally = 'angle'": {"histogram_is_passages", "counted_again"},
    "update moment set sum = sum + 1 where tally = 'movement'": {"histogram_is_passages", "counted_again"},
    "update moment set sum_sq = sum_sq + 1 where tally = 'section'": {"counted_again"},
    "delete from moment where tally = 'maneuver'": {"histogram_is_passages", "no_orphan", "counted_again"},
    "update stratum set value = 'west' where dimension = 'zone' and tally = 'angle'": {"counted_again"},
    "delete from stratum where tally = 'movement'": {"no_orphan", "counted_again"},
    "delete from tally where tally = 'section'": {"no_orphan"},
    "delete from reference": {"no_orphan"},
    "update passage set arm_out = 7 where junction_id = 2": {"no_orphan", "counted_again"},
    "update unfinished set junction_id = 99": {"no_orphan"},
    "update passage set delay_ms = delay_ms + 1 where junction_id = 1": {
        "delay_follows",
        "histogram_is_passages",
        "counted_again",
    },
    "update passage set traversal_ms = traversal_ms + 1": {"delay_follows"},
    "update passage set gate_in_m = gate_in_m + 1": {"delay_follows"},
    "update passage set time_band = 'noon' where junction_id = 2": {"local_time"},
    "update section set duration_ms = duration_ms + 1": {"duration_follows", "counted_again"},
    "delete from trip where n_passages > 2": {"open_trips"},
    "update trip set trip_id = trip_id + 1": {"open_trips", "time_conserved"},
    "update trip set unfinished_us = unfinished_us + 1, other_us = other_us - 1 where other_us > 0": {
        "unfinished_follows"
    },
    "update unfinished set entry_at = entry_at - interval 1 hour": {"unfinished_follows"},
    "update batch set config_digest = 'x' where batch_id = 1": {"ledger_agrees", "digests_again"},
    "update batch set content_digest = 'x' where batch_id = 1": {"ledger_agrees"},
    "update batch set network_digest = 'x' where batch_id = 1": {"ledger_agrees"},
    "update network set network_digest = 'x'": {"ledger_agrees", "digests_again"},
    "update movement set maneuver = 'left' where maneuver = 'through'": {"digests_again", "counted_again"},
    "update junction set time_zone = 'Asia/Tokyo'": {"digests_again", "counted_again", "local_time"},
    "update arm set limit_in_kmh = 20": {"digests_again", "delay_follows"},
    "delete from network_blob": {"digests_again"},
    "update meta set value = 'x' where key = 'bins'": {"digests_again"},
    """update meta set value = replace(value, '"min_m": 50.0', '"min_m": 300.0') where key = 'config'""": {
        "digests_again",
        "counted_again",
    },
    "update meta set value = replace(value, '50.0', '300.0') where key = 'config'": {"digests_again"},
    "update meta set value = 'x' where key = 'config'": {"digests_again"},
}


@pytest.fixture(autouse=True)
def _stand_in(monkeypatch: pytest.MonkeyPatch) -> None:
    """Let the network be the stand-in's."""
    install(monkeypatch.setattr)


@pytest.fixture(scope="module")
def sound(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Give a store with two batches, closed."""
    from stream.config import load_settings

    settings = load_settings()
    folder = tmp_path_factory.mktemp("sound")
    rows = sorted([*archive(), *drive("e", 7, 1_700_000_002)], key=lambda r: r[1])
    files = [write(folder / "1.csv", rows[:70]), write(folder / "2.csv", rows[70:])]
    path = folder / "s.duckdb"
    with pytest.MonkeyPatch.context() as patch:
        install(patch.setattr)
        with Store.open(path, create=True) as store:
            put_network(store, plan(), network_config(settings))
        ingest(path, files, settings, close=True)
    return path


def _found(path: Path) -> set[str]:
    with Store.open(path, read_only=True) as store:
        return {one["audit"] for one in run_audit(store) if one["n_faults"]}


def test_sound_store_passes_every_audit(sound: Path) -> None:
    """A store as ingest leaves it is sound, and there is something in it to be wrong."""
    assert _found(sound) == set()
    with duckdb.connect(str(sound), read_only=True) as con:
        tables = ("passage", "section", "unfinished", "trip", "histogram", "moment", "batch_count", "carry")
        filled = [con.execute(f"select count(*) > 0 from {t}").fetchall()[0][0] for t in tables]
    assert filled == [True] * len(tables)


@pytest.mark.parametrize("damage", DAMAGE)
def test_damage_is_found(sound: Path, tmp_path: Path, damage: str) -> None:
    """Every audit that must see this damage does, and no other is confused by it."""
    path = tmp_path / "s.duckdb"
    path.write_bytes(sound.read_bytes())
    with duckdb.connect(str(path)) as con:
        (changed,) = con.execute(damage).fetchall()[0]
    assert changed > 0
    assert _found(path) == DAMAGE[damage]


def test_batch_of_an_orphan_is_named(sound: Path, tmp_path: Path) -> None:
    """Rows of a batch that the ledger has not are reported with its number, table by table."""
    path = tmp_path / "s.duckdb"
    path.write_bytes(sound.read_bytes())
    with duckdb.connect(str(path)) as con:
        con.execute("delete from batch where batch_id = 2").fetchall()
    with Store.open(path, read_only=True) as store:
        (orphans,) = (one["faults"] for one in run_audit(store) if one["audit"] == "no_orphan")
    assert {f["missing"] for f in orphans} == {"batch 2"}
    assert {"passage", "trip", "histogram", "carry"} <= {f["table_name"] for f in orphans}


def test_store_without_batches_is_sound(fresh_store: Store, settings: Settings) -> None:
    """There is nothing wrong with a store that holds nothing."""
    assert settings.tallies
    audits = run_audit(fresh_store)
    assert {one["n_faults"] for one in audits} == {0}
    assert len(audits) >= 12
