"""The vehicles of one batch: their stored names, their state, and what they brought from earlier batches.

Guarantee: a vehicle goes on exactly where its last batch left it, with the pings that were held back for it;
each state's code is that of the batch's vehicle book. What a batch replaces is kept, to undo it.
"""

from collections.abc import Sequence
from typing import Any

import numpy as np
import polars as pl
import pyarrow as pa
from numpy.typing import NDArray

from stream.detect.carry import (
    CARRY_VERSION,
    carry_columns,
    held_rows,
    new_states,
    states_from_columns,
)
from stream.errors import StoreError
from stream.pings import HoldBack
from stream.store.database import Store
from stream.store.vehicles import VehicleNames, name_code

_PUT_ROWS = 20_000  # vehicles written at once, about 20 MB


Pings = tuple[NDArray[np.int32], NDArray[np.int64], NDArray[np.float64], NDArray[np.float64]]
_NO_PINGS: Pings = (np.zeros(0, np.int32), np.zeros(0, np.int64), np.zeros(0), np.zeros(0))
_WAITING = ("waiting_us", "waiting_lon", "waiting_lat")
NEVER_US = -(2**62)  # newest ping of a vehicle without one


class Fleet:
    """Vehicles seen so far, by the dense code of the batch's vehicle book.

    Attributes
    ----------
    names : stored name of each
    codes : uint64[n], fixed number of each name, for trip numbers
    newest_us : int64[n], newest ping of each that earlier batches in order brought; NEVER_US without one
    states : structured[n], detection's record of each loaded one; the pass changes it in place
    held_before : rows that waited for a decision, or were held back, when their vehicles were loaded
    """

    def __init__(self, store: Store, namer: VehicleNames, lateness_us: int = 0) -> None:
        """Start without vehicles; pings are held back until later ones by `lateness_us` have come."""
        self._store = store
        self._namer = namer
        self._known: set[str] = set()
        self.names: list[str] = []
        self.codes: NDArray[np.uint64] = np.zeros(0, dtype=np.uint64)
        self.newest_us: NDArray[np.int64] = np.zeros(0, dtype=np.int64)
        self.states: NDArray[Any] = new_states(0)
        self.held_before = 0
        self._lateness_us = lateness_us
        self._waiting: Pings = _NO_PINGS

    def grow(self, vehicle_ids: Sequence[str]) -> None:
        """Add the ids that are not in yet with their states; `vehicle_ids` begins with those that are.

        Raises
        ------
        StoreError
            Two ids fall on one name, or the carry is of another version.
        """
        self.meet(vehicle_ids)
        self.load()

    def meet(self, vehicle_ids: Sequence[str]) -> None:
        """Name the ids that are not in yet and find their newest pings; their states come with `load`.

        Raises
        ------
        StoreError
            Two ids fall on one name.
        """
        new = vehicle_ids[len(self.names) :]
        if new:
            self._meet(self._namer.names(new))

    def add_open(self) -> None:
        """Add every vehicle of the store that is not in yet and has something open or held."""
        rest = [row[0] for row in self._store.run("carry/all_open") if row[0] not in self._known]
        if rest:
            self._meet(rest)
            self.load()

    def _meet(self, names: list[str]) -> None:
        if not self._known.isdisjoint(names):
            raise StoreError("two vehicle ids fall on one hashed name; name another privacy.key_file")
        self._known.update(names)
        newest = np.full(len(names), NEVER_US, np.int64)
        asked = pl.DataFrame({"ix": np.arange(len(names)), "vehicle": names})
        found = self._store.frame("carry/newest_of", incoming=asked).drop_nulls()
        newest[found["ix"].to_numpy()] = found["newest_us"].to_numpy()
        self.names += names
        self.codes = np.concatenate([self.codes, name_code(names)])
        self.newest_us = np.concatenate([self.newest_us, newest])

    def load(self, *, is_alone: bool = False) -> None:
        """Give each vehicle met its state: as the last batch left it, or fresh where the batch stands alone.

        Raises
        ------
        StoreError
            The carry is of another version.
        """
        start = len(self.states)
        names = self.names[start:]
        if not names:
            return
        states = new_states(len(names))
        if not is_alone:
            asked = pl.DataFrame({"ix": np.arange(len(names)), "vehicle": names})
            held = self._store.frame("carry/load_carry", incoming=asked)
            if held.height:
                self._check_version(held)
                loaded = states_from_columns(_columns(held))
                self.held_before += held_rows(loaded)
                states[held["ix"].to_numpy()] = loaded
                self._wait_again(held, start)
        self.states = np.concatenate([self.states, states])

    def _wait_again(self, held: pl.DataFrame, start: int) -> None:
        """Put the pings that were held back for newly loaded vehicles before all that come."""
        pings = held.select(pl.col("ix") + start, *_WAITING).explode(*_WAITING).drop_nulls()
        self.held_before += pings.height
        t_us, lon, lat = (pings[name].to_numpy() for name in _WAITING)
        self._waiting = _joined((pings["ix"].cast(pl.Int32).to_numpy(), t_us, lon, lat), self._waiting)

    @property
    def has_states(self) -> bool:
        """Tell whether a state that an earlier batch left was loaded."""
        return bool((self.newest_us[: len(self.states)] > NEVER_US).any())

    @property
    def held_now(self) -> int:
        """Count the rows that wait for a decision or are held back."""
        return held_rows(self.states) + len(self._waiting[0])

    def in_order(self, pings: Pings) -> Pings:
        """Hold pings back until they are in order, as far as `lateness_us` says.

        Parameters
        ----------
        pings
            vehicle_ix, t_us, lon, lat, as they come.

        Returns
        -------
        The pings set free, of these and of those held back before.
        """
        if not self._lateness_us:
            return pings
        hold = HoldBack(self._lateness_us, self._waiting)
        free = hold.push(*pings)
        self._waiting = hold.held()
        return free

    def let_go(self) -> Pings:
        """Set all pings free that are held back."""
        if not self._lateness_us:
            return _NO_PINGS
        free = HoldBack(self._lateness_us, self._waiting).flush()
        self._waiting = _NO_PINGS
        return free

    def _check_version(self, held: pl.DataFrame) -> None:
        versions = set(held["carry_version"].to_list())
        if versions != {CARRY_VERSION}:
            raise StoreError(
                f"{self._store.path}: what is open was carried in form {sorted(versions)}, "
                f"this program reads form {CARRY_VERSION}; "
                "end it with `turntally ingest --close` of the version that wrote it"
            )

    def put_carry(self, batch_id: int) -> None:
        """Write the state of every vehicle as this batch leaves it; the state before it is kept."""
        said = {"batch_id": batch_id, "carry_version": CARRY_VERSION}
        for start in range(0, len(self.names), _PUT_ROWS):
            rows = slice(start, start + _PUT_ROWS)
            names = self.names[rows]
            columns = {**carry_columns(self.states[rows]), **self._lists(start, len(names))}
            series = {name: _series(column) for name, column in columns.items()}
            self._store.run(
                "carry/clear_superseded", {"batch_id": batch_id}, pl.DataFrame({"vehicle": names})
            )
            self._store.run("carry/put_carry", said, pl.DataFrame({"vehicle": names, **series}))

    def _lists(self, start: int, n: int) -> dict[str, Any]:
        """Give the pings held back, as values and how many each has, for vehicles start to start + n."""
        mine = (self._waiting[0] >= start) & (self._waiting[0] < start + n)
        order = np.argsort(self._waiting[0][mine], kind="stable")
        lengths = np.bincount(self._waiting[0][mine] - start, minlength=n)
        names = zip(_WAITING, self._waiting[1:], strict=True)
        return {name: (column[mine][order], lengths) for name, column in names}


def _joined(first: Pings, second: Pings) -> Pings:
    return (
        np.concatenate([first[0], second[0]]),
        np.concatenate([first[1], second[1]]),
        np.concatenate([first[2], second[2]]),
        np.concatenate([first[3], second[3]]),
    )


def _series(column: Any) -> pl.Series:
    """Make a column of plain values, or of lists from all their values and their lengths."""
    if not isinstance(column, tuple):
        return pl.Series(column)
    values, lengths = column
    offsets = np.concatenate([[0], np.cumsum(lengths)])
    lists = pa.LargeListArray.from_arrays(pa.array(offsets, pa.int64()), pa.array(values))
    return pl.Series(lists)


def _columns(held: pl.DataFrame) -> dict[str, Any]:
    """Take the columns of loaded states apart as `carry_columns` gives them."""
    out: dict[str, Any] = {}
    for name in held.columns:
        if name not in ("ix", "carry_version", *_WAITING):
            column = held[name]
            if column.dtype == pl.List:
                lists = column.to_arrow()
                out[name] = (lists.flatten().to_numpy(), column.list.len().cast(pl.Int64).to_numpy())
            else:
                out[name] = column.to_numpy()
    return out
