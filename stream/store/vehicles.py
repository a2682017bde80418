"""Vehicle names in the store: keyed hashes, so that who lacks the key can't tell whose they are.

Guarantee: the same id under the same key gives the same name in every batch; a store never mixes names
made with two keys, or plain ids with hashes. The key stands in a file of its own, outside the store.

Source: keyed hash with a secret kept apart, METHODS.md section 14 (EDPB Guidelines 1/2020, 78).
"""

import hashlib
import hmac
import os
import secrets
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from stream.config import Settings
from stream.errors import StoreError

PLAIN = "plain"
_NAME_BYTES = 8
_KEY_BYTES = 32
_GOLDEN = np.uint64(0x9E37_79B9_7F4A_7C15)
_MIX1 = np.uint64(0xBF58_476D_1CE4_E5B9)
_MIX2 = np.uint64(0x94D0_49BB_1331_11EB)


@dataclass(frozen=True)
class VehicleNames:
    """How ids become names.

    Attributes
    ----------
    key_id : what the store keeps to know the key again; `plain` where ids stay as given
    secret : the key; empty for plain ids
    unsaved : where a new key must be written before any name made with it is kept; None for a key on file
    """

    key_id: str
    secret: bytes
    unsaved: Path | None = None

    def save(self) -> None:
        """Write a new key to its file, for its owner only; nothing to do for one on file.

        The file is there with the whole key or not at all, whatever ends the process.

        Raises
        ------
        StoreError
            The file can't be made, or another process made one meanwhile.
        """
        if self.unsaved is None or (self.unsaved.exists() and _read(self.unsaved) == self.secret):
            return
        try:
            _write_new(self.unsaved, self.secret.hex() + "\n")
        except OSError as err:
            raise _unusable(self.unsaved, err) from err

    def name(self, vehicle_id: str) -> str:
        """Give the name of one vehicle: 16 hexadecimal digits of HMAC-SHA-256, or the id as given."""
        if self.key_id == PLAIN:
            return vehicle_id
        return hmac.digest(self.secret, vehicle_id.encode(), "sha256")[:_NAME_BYTES].hex()

    def names(self, vehicle_ids: Sequence[str]) -> list[str]:
        """Give the names of many vehicles, in order.

        Raises
        ------
        StoreError
            Two ids of one call fall on one name (odds below 1 in 10^7 for a million vehicles).
        """
        made = [self.name(v) for v in vehicle_ids]
        if len(set(made)) != len(set(vehicle_ids)):
            raise StoreError("two vehicle ids fall on one hashed name; name another privacy.key_file")
        return made


def key_path(store_path: Path, settings: Settings) -> Path:
    """Find the key file: the configured one, else beside the store under the store's name."""
    return settings.privacy.key_file or store_path.with_name(store_path.name + ".key")


def _write_new(path: Path, text: str) -> None:
    """Make a file that must not be there, whole from its first moment."""
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        handle = os.open(part, os.O_WRONLY | os.O_CREAT | os.O_TRUNC, 0o600)
        with os.fdopen(handle, "w", encoding="ascii") as out:
            out.write(text)
            out.flush()
            os.fsync(out.fileno())
        try:
            path.hardlink_to(part)
        except FileExistsError:
            raise
        except OSError:  # a file system without links
            part.rename(path)
    finally:
        part.unlink(missing_ok=True)


def _unusable(path: Path, err: OSError) -> StoreError:
    return StoreError(f"{path}: key file can't be used ({err.strerror}); set privacy.key_file")


def _read(path: Path) -> bytes:
    try:
        secret = bytes.fromhex(path.read_text(encoding="ascii").strip())
    except (ValueError, UnicodeDecodeError) as err:
        raise StoreError(f"{path}: is no key file (hexadecimal digits); mend privacy.key_file") from err
    if len(secret) < _KEY_BYTES:
        raise StoreError(f"{path}: key of {len(secret)} bytes is too short; it takes {_KEY_BYTES}")
    return secret


def vehicle_names(store_path: Path, settings: Settings, known_key_id: str | None) -> VehicleNames:
    """Get the key that the store's names are made with; think of one when neither store nor file has it.

    Nothing is written: `VehicleNames.save` does that, before the first batch is committed.

    Parameters
    ----------
    store_path
        The store; its key stands beside it unless the configuration names another file.
    settings
        The keys under `privacy`.
    known_key_id
        What the store says of its key; None before the first batch.

    Raises
    ------
    StoreError
        The key is missing, unreadable, or not the one the store was made with.
    """
    if settings.privacy.plain_ids:
        names = VehicleNames(PLAIN, b"")
    elif known_key_id == PLAIN:
        raise _mixed(store_path, PLAIN, "keyed hashes")
    else:
        names = _keyed(key_path(store_path, settings), known_key_id)
    if known_key_id is not None and names.key_id != known_key_id:
        raise _mixed(store_path, known_key_id, names.key_id)
    return names


def _mixed(store_path: Path, known: str, now: str) -> StoreError:
    said = {PLAIN: "ids as given", "keyed hashes": "keyed hashes"}
    kept, has = said.get(known, f"the key {known}"), said.get(now, f"the key {now}")
    return StoreError(
        f"{store_path}: its vehicles are named with {kept}, this configuration has {has}; "
        "one vehicle would count as two: put back privacy.plain_ids and privacy.key_file"
    )


def _keyed(path: Path, known_key_id: str | None) -> VehicleNames:
    try:
        is_new = not path.exists()
        secret = secrets.token_bytes(_KEY_BYTES) if is_new else _read(path)
    except OSError as err:
        raise _unusable(path, err) from err
    if is_new and known_key_id is not None:
        raise StoreError(f"{path}: the key of the store is missing; put it back or set privacy.key_file")
    key_id = hashlib.sha256(b"key id of a store\n" + secret).hexdigest()[:16]
    return VehicleNames(key_id, secret, path if is_new else None)


def name_code(names: Sequence[str]) -> NDArray[np.uint64]:
    """Give each name a fixed 64-bit number: the first bytes of its SHA-256.

    Returns
    -------
    uint64[len(names)]
    """
    digests = b"".join(hashlib.sha256(n.encode()).digest()[:_NAME_BYTES] for n in names)
    return np.frombuffer(digests, dtype="<u8").astype(np.uint64)


def _mix(x: NDArray[np.uint64]) -> NDArray[np.uint64]:
    x = (x ^ (x >> np.uint64(30))) * _MIX1
    x = (x ^ (x >> np.uint64(27))) * _MIX2
    return x ^ (x >> np.uint64(31))


def trip_id(code: NDArray[np.uint64], trip_start_us: NDArray[np.int64]) -> NDArray[np.int64]:
    """Number trips from what they are, so that the same trip has the same number however it was cut.

    Parameters
    ----------
    code
        uint64[n], number of each trip's vehicle, from `name_code`.
    trip_start_us
        int64[n], the trip's first ping, UTC epoch.

    Returns
    -------
    int64[n], in [0, 2^63)

    Source: finalizer of SplitMix64 (Steele, Lea & Flood 2014, Fast Splittable Pseudorandom Number
    Generators), constants from memory; tables are keyed by vehicle and trip, so that two trips of
    different vehicles on one number do no harm.
    """
    mixed = _mix(trip_start_us.astype(np.uint64) + _GOLDEN) ^ code
    return (_mix(mixed + _GOLDEN) >> np.uint64(1)).astype(np.int64)
