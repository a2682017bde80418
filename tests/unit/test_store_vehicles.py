"""Names of vehicles and numbers of trips."""

import hashlib
import hmac
import stat
from pathlib import Path

import numpy as np
import pytest

from stream.config import Settings, load_settings
from stream.errors import StoreError
from stream.store.vehicles import PLAIN, VehicleNames, key_path, name_code, trip_id, vehicle_names


def _saved(store: Path, settings: Settings) -> VehicleNames:
    """Make a key as the first batch does."""
    names = vehicle_names(store, settings, None)
    names.save()
    return names


def test_key_is_made_once_for_its_owner_only(tmp_path: Path) -> None:
    """A new key is written when saved, for its owner only; the second use finds it."""
    store = tmp_path / "town.duckdb"
    first = vehicle_names(store, load_settings(), None)
    assert list(tmp_path.iterdir()) == []
    first.save()
    first.save()
    key = tmp_path / "town.duckdb.key"
    assert stat.S_IMODE(key.stat().st_mode) == 0o600
    assert len(bytes.fromhex(key.read_text())) == 32
    again = vehicle_names(store, load_settings(), first.key_id)
    assert (again.key_id, again.secret, again.unsaved) == (first.key_id, first.secret, None)


def test_key_made_meanwhile_is_not_written_over(tmp_path: Path) -> None:
    """Two processes that both think of a key: the second to write is refused, and the first key stays."""
    store = tmp_path / "s.duckdb"
    one, two = vehicle_names(store, load_settings(), None), vehicle_names(store, load_settings(), None)
    one.save()
    kept = (tmp_path / "s.duckdb.key").read_text()
    with pytest.raises(StoreError, match=r"s\.duckdb\.key: key file can't be used \(File exists\)"):
        two.save()
    assert (tmp_path / "s.duckdb.key").read_text() == kept


def test_name_is_a_keyed_hash(tmp_path: Path) -> None:
    """A name is the first 16 hexadecimal digits of HMAC-SHA-256 under the key (RFC 2104, FIPS 180-4)."""
    names = _saved(tmp_path / "s.duckdb", load_settings())
    secret = bytes.fromhex((tmp_path / "s.duckdb.key").read_text())
    wanted = hmac.new(secret, b"bus 7", hashlib.sha256).hexdigest()[:16]
    assert names.names(["bus 7", "bus 7"]) == [wanted, wanted]
    assert names.name("bus 8") != wanted


def test_two_keys_give_other_names(tmp_path: Path) -> None:
    """Names under another key can't be joined to the first."""
    one = vehicle_names(tmp_path / "a.duckdb", load_settings(), None)
    two = vehicle_names(tmp_path / "b.duckdb", load_settings(), None)
    assert one.key_id != two.key_id
    assert one.name("v") != two.name("v")


def test_plain_ids_stay_as_given(tmp_path: Path) -> None:
    """With privacy.plain_ids the id is the name, and no key file is made."""
    settings = load_settings(over={"privacy": {"plain_ids": True}})
    names = vehicle_names(tmp_path / "s.duckdb", settings, None)
    assert names.key_id == PLAIN
    assert names.names(["b", "a"]) == ["b", "a"]
    assert list(tmp_path.iterdir()) == []


def test_configured_key_file_comes_first(tmp_path: Path) -> None:
    """privacy.key_file names the key; the one beside the store is not looked at."""
    chosen = tmp_path / "chosen.key"
    settings = load_settings(over={"privacy": {"key_file": str(chosen)}})
    assert key_path(tmp_path / "s.duckdb", settings) == chosen
    _saved(tmp_path / "s.duckdb", settings)
    assert [p.name for p in tmp_path.iterdir()] == ["chosen.key"]


def test_missing_key_of_a_known_store_is_refused(tmp_path: Path) -> None:
    """A store that has names never gets a new key in silence."""
    with pytest.raises(StoreError, match=r"s\.duckdb\.key: the key of the store is missing; put it back"):
        vehicle_names(tmp_path / "s.duckdb", load_settings(), "0123456789abcdef")
    assert list(tmp_path.iterdir()) == []


def test_other_key_is_refused(tmp_path: Path) -> None:
    """A store keeps to the key it was made with, and says which one it wants."""
    store = tmp_path / "s.duckdb"
    _saved(store, load_settings())
    with pytest.raises(StoreError, match="named with the key 0123456789abcdef"):
        vehicle_names(store, load_settings(), "0123456789abcdef")


def test_plain_ids_and_hashes_do_not_mix(tmp_path: Path) -> None:
    """A store with plain ids refuses hashes, and the other way round."""
    store = tmp_path / "s.duckdb"
    plain = load_settings(over={"privacy": {"plain_ids": True}})
    with pytest.raises(StoreError, match="named with ids as given"):
        vehicle_names(store, load_settings(), PLAIN)
    with pytest.raises(StoreError, match="this configuration has ids as given"):
        vehicle_names(store, plain, "0123456789abcdef")


@pytest.mark.parametrize(("text", "told"), [("hello", "is no key file"), ("abcd\n", "too short")])
def test_unusable_key_file_is_refused(tmp_path: Path, text: str, told: str) -> None:
    """A key file that is no hexadecimal text, or too short, is named with the mend."""
    (tmp_path / "s.duckdb.key").write_text(text)
    with pytest.raises(StoreError, match=told):
        vehicle_names(tmp_path / "s.duckdb", load_settings(), None)


def _trip_id_plain(name: str, start_us: int) -> int:
    """Compute the trip number with Python integers."""
    full = 2**64
    code = int.from_bytes(hashlib.sha256(name.encode()).digest()[:8], "little")

    def mix(x: int) -> int:
        x = (x ^ (x >> 30)) * 0xBF58476D1CE4E5B9 % full
        x = (x ^ (x >> 27)) * 0x94D049BB133111EB % full
        return x ^ (x >> 31)

    golden = 0x9E3779B97F4A7C15
    return mix(((mix((start_us + golden) % full) ^ code) + golden) % full) >> 1


def test_trip_id_is_that_of_plain_integers() -> None:
    """The number of a trip is the stated mix, computed a second time with Python's integers."""
    names = ["a", "b", "0123456789abcdef"]
    starts = np.array([0, 1_700_000_000_000_000, 2**62], dtype=np.int64)
    got = trip_id(name_code(names), starts)
    assert got.tolist() == [_trip_id_plain(n, int(s)) for n, s in zip(names, starts, strict=True)]


def test_trip_ids_of_many_trips_differ() -> None:
    """100 000 trips of 100 vehicles get 100 000 numbers, none negative."""
    code = np.repeat(name_code([f"v{i}" for i in range(100)]), 1000)
    starts = np.tile(np.arange(1000, dtype=np.int64) * 1_000_000, 100)
    got = trip_id(code, starts)
    assert len(np.unique(got)) == 100_000
    assert got.min() >= 0


def test_no_names_have_no_codes() -> None:
    """An empty list of names gives an empty array."""
    assert name_code([]).tolist() == []
