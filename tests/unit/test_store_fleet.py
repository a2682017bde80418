"""Vehicles of a batch and the states they bring from earlier ones."""

from pathlib import Path
from typing import Any

import numpy as np
import pytest

from stream.config import Settings
from stream.detect.carry import MAX_COLUMNS, MAX_KEPT, STATE, held_rows, new_states
from stream.errors import StoreError
from stream.store import Store
from stream.store.files import statement
from stream.store.fleet import Fleet
from stream.store.vehicles import PLAIN, VehicleNames

NAMER = VehicleNames(PLAIN, b"")


def _filled(seed: int, n: int) -> Any:
    """Make states whose every used field holds something of its own."""
    random = np.random.default_rng(seed)
    states = new_states(n)
    states["n_kept"] = random.integers(0, MAX_KEPT + 1, n)
    states["n_columns"] = random.integers(0, MAX_COLUMNS + 1, n)
    for name in STATE.names or ():
        if name in ("n_kept", "n_columns"):
            continue
        kind = STATE[name].base
        shape = states[name].shape
        high = 2 if kind in (np.uint8, np.int8) else 10**9
        values = random.integers(0, high, shape).astype(kind)
        if states[name].ndim > 1:
            used = states["n_kept"] if STATE[name].shape == (MAX_KEPT,) else states["n_columns"]
            if name == "cost":
                used = np.where(states["n_columns"] > 0, STATE[name].shape[0], 0)
            beyond = np.arange(STATE[name].shape[0]) >= used[:, None]
            values[beyond] = 0
        states[name] = values
    return states


def test_carry_has_a_column_for_each_field() -> None:
    """The table, its insert and its load name the fields of the record, in order, and nothing else."""
    fields = list(STATE.names or ())
    kinds = {
        "int64": "bigint",
        "int32": "integer",
        "int8": "tinyint",
        "uint8": "utinyint",
        "float64": "double",
        "float32": "float",
    }
    wanted = [(n, kinds[STATE[n].base.name] + ("[]" if STATE[n].shape else "")) for n in fields]
    wanted += [("waiting_us", "bigint[]"), ("waiting_lon", "double[]"), ("waiting_lat", "double[]")]
    assert [("vehicle", "varchar"), *wanted] == list(statement("carry/put_carry").incoming)
    lines = statement("schema/080_carry").text.splitlines()
    columns = [line.split()[:2] for line in lines if line.startswith("    ") and "--" not in line]
    assert [list(pair) for pair in wanted] == columns[4:]


def test_states_come_back_as_they_were(fresh_store: Store) -> None:
    """Every field of every vehicle passes through the store unchanged, whatever the order of asking."""
    states = _filled(4, 50)
    names = [f"v{i}" for i in range(50)]
    first = Fleet(fresh_store, NAMER)
    first.grow(names)
    assert first.held_before == 0
    first.states[:] = states
    first.put_carry(1)
    second = Fleet(fresh_store, NAMER)
    second.grow(names[::-1][:20])
    second.grow([*names[::-1][:20], "new", *names[:5]])
    assert [*names[::-1][:20], "new", *names[:5]] == second.names
    wanted = np.concatenate([states[::-1][:20], new_states(1), states[:5]])
    differ = [n for n in STATE.names or () if not np.array_equal(wanted[n], second.states[n])]
    assert differ == []
    assert held_rows(wanted) == second.held_before


def test_newest_state_counts_and_those_before_are_kept(fresh_store: Store) -> None:
    """A vehicle's newest state is loaded; each one before names the batch that replaced it."""
    for batch_id, t_us in ((1, 100), (2, 200), (3, 300)):
        fleet = Fleet(fresh_store, NAMER)
        fleet.grow(["a"] if batch_id > 1 else ["a", "b"])
        fleet.states["t_us"] = t_us
        fleet.put_carry(batch_id)
    fleet = Fleet(fresh_store, NAMER)
    fleet.grow(["b", "a"])
    assert fleet.states["t_us"].tolist() == [100, 300]
    kept = fresh_store._con.execute(
        "select vehicle, batch_id, replaced_by from carry order by all"
    ).fetchall()
    assert kept == [("a", 1, 2), ("a", 2, 3), ("a", 3, None), ("b", 1, None)]


def test_open_vehicles_are_added_once(fresh_store: Store) -> None:
    """To close a store, all vehicles with something open or held join the batch, each once."""
    fleet = Fleet(fresh_store, NAMER)
    fleet.grow(["idle", "moving", "held", "seen"])
    fleet.states["mode"] = [0, 1, 0, 1]
    fleet.states["is_held"] = [0, 0, 1, 0]
    fleet.put_carry(1)
    later = Fleet(fresh_store, NAMER)
    later.grow(["seen"])
    later.add_open()
    assert later.names == ["seen", "held", "moving"]


def test_carry_of_another_form_is_refused(fresh_store: Store) -> None:
    """States written by another version are not guessed at; the refusal names both forms."""
    fleet = Fleet(fresh_store, NAMER)
    fleet.grow(["a"])
    fleet.put_carry(1)
    fresh_store._con.execute("update carry set carry_version = 99").fetchall()
    with pytest.raises(StoreError, match=r"carried in form \[99\], this program reads form \d+; end it with"):
        Fleet(fresh_store, NAMER).grow(["a"])


def test_names_depend_on_the_key_only(tmp_path: Path, settings: Settings, fresh_store: Store) -> None:
    """Codes for trip numbers follow the stored name, so that a trip keeps its number from batch to batch."""
    one, two = Fleet(fresh_store, NAMER), Fleet(fresh_store, NAMER)
    one.grow(["a", "b"])
    two.grow(["b"])
    assert one.codes[1] == two.codes[0]
    assert one.codes[0] != one.codes[1]


def test_pings_held_back_wait_in_the_store(fresh_store: Store) -> None:
    """Pings that wait for later ones come back with their vehicle, before those that follow, to the bit."""
    late_us = 10_000_000
    first = Fleet(fresh_store, NAMER, late_us)
    first.grow(["a", "b", "c"])
    vehicle_ix = np.array([1, 0, 1, 1], np.int32)
    t_us = np.array([5, 7, 3, 4], np.int64) * 1_000_000
    lon = np.array([0.1, 1 / 3, 10.000000012345, -1e-9])
    free = first.in_order((vehicle_ix, t_us, lon, lon + 50))
    assert len(free[0]) == 0
    assert (first.held_before, first.held_now) == (0, 4)
    first.put_carry(1)
    second = Fleet(fresh_store, NAMER, late_us)
    second.grow(["b"])
    assert (second.held_before, second.held_now) == (3, 3)
    later = np.array([20_000_000], np.int64)
    free = second.in_order((np.zeros(1, np.int32), later, np.array([0.5]), np.array([0.5])))
    assert free[1].tolist() == [3_000_000, 4_000_000, 5_000_000]
    assert free[2].tolist() == [lon[2], lon[3], lon[0]]
    second.put_carry(2)
    third = Fleet(fresh_store, NAMER, late_us)
    third.add_open()
    assert third.names == ["a", "b"]
    assert third.let_go()[1].tolist() == [7_000_000, 20_000_000]
    assert third.held_now == 0
