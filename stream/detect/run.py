"""Detection as a function: pings of some vehicles and their records in, passages and the like out.

Guarantee: the same rows, in the same order, for any number of threads; the records hold the rest.
"""

import itertools
import os
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stream.config import Settings
from stream.detect.clean import place_kernel
from stream.detect.fused import CLOSE, group_kernel, pass_kernel
from stream.detect.parameters import parameters
from stream.detect.passages import N_PASSAGE, N_SECTION, N_TRIP, N_UNFINISHED, N_USED, OUT
from stream.detect.records import Found
from stream.detect.settle import new_work
from stream.network.model import I32, I64, Streets
from stream.network.routes import build_index

_Pings = tuple[I32, I64, I32, I32, NDArray[np.int8], I32]
_SHARES = 4  # pieces a thread takes, so that none waits long for another


class Detector:
    """The pass over one network with one set of settings; not to be used by two callers at once.

    Parameters
    ----------
    streets
        The network; not changed.
    settings
        Its parts `clean`, `trips`, `follow` and `passages` are used.
    threads
        Threads to use; 0 = all cores. The results don't depend on it.
    """

    def __init__(self, streets: Streets, settings: Settings, threads: int = 0) -> None:
        follow = settings.follow
        self._index = build_index(
            streets, follow.radius_m, follow.turn_cost, follow.reverse_cost, follow.banned_cost
        )
        self._parameters = parameters(settings)
        self._threads = threads or os.cpu_count() or 1
        self._rooms: list[tuple[NDArray[Any], NDArray[Any]]] = []

    def feed(
        self,
        states: NDArray[Any],
        vehicle_ix: NDArray[np.int32],
        t_us: NDArray[np.int64],
        lon: NDArray[np.float64],
        lat: NDArray[np.float64],
    ) -> Found:
        """Take pings; each vehicle's in time order (others count as late), vehicles in any order.

        Parameters
        ----------
        states : structured[v] of `carry.STATE`    changed in place
        vehicle_ix : int32[n]                      row in `states`
        t_us : int64[n]                            UTC epoch
        lon, lat : float64[n]                      degrees, WGS 84

        Raises
        ------
        ValueError
            Lengths differ, or a vehicle has no record.
        """
        n = len(vehicle_ix)
        if not n == len(t_us) == len(lon) == len(lat):
            raise ValueError("columns of unlike length")
        if n and not 0 <= int(vehicle_ix.min()) <= int(vehicle_ix.max()) < len(states):
            raise ValueError("a vehicle without a record")
        if n >= 2**31:
            raise ValueError("more pings at once than an order can number")
        # Frozen arrays are another type to the compiler: it would compile the whole pass once more for them.
        vehicle_ix = np.require(vehicle_ix, np.int32, ["C", "W"])
        t_us = np.require(t_us, np.int64, ["C", "W"])
        east, north = np.empty(n, np.int32), np.empty(n, np.int32)
        reason = np.empty(n, np.int8)
        degrees = (np.require(lon, np.float64, ["C", "W"]), np.require(lat, np.float64, ["C", "W"]))
        self._shared(
            lambda a, b: place_kernel(
                degrees[0][a:b], degrees[1][a:b], self._index, east[a:b], north[a:b], reason[a:b]
            ),
            _even(n, self._threads),
        )
        counts = np.bincount(vehicle_ix, minlength=len(states))
        end = np.cumsum(counts)
        order = np.empty(n, np.int32)
        group_kernel(vehicle_ix, end - counts, order)
        ends = np.unique(np.searchsorted(end, _even_ends(n, self._threads * _SHARES)))
        bounds = np.unique(np.concatenate([[0], end[np.minimum(ends, len(end) - 1)]])) if n else np.array([0])

        parts = [(int(a), int(b)) for a, b in itertools.pairwise(bounds)]
        return self._gather((vehicle_ix, t_us, east, north, reason, order), states, parts)

    def close(self, states: NDArray[Any]) -> Found:
        """End what is open: trips, passages, held pings. Pings that come later begin new trips."""
        n = len(states)
        nothing = np.zeros(n, np.int32)
        every = np.arange(n, dtype=np.int32)
        reason = np.full(n, CLOSE, np.int8)
        return self._gather(
            (every, np.zeros(n, np.int64), nothing, nothing, reason, every), states, _even(n, self._threads)
        )

    def _shared(self, task: Any, parts: list[tuple[int, int]]) -> None:
        if len(parts) < 2 or self._threads == 1:
            for a, b in parts:
                task(a, b)
            return
        with ThreadPoolExecutor(self._threads) as pool:
            list(pool.map(lambda part: task(*part), parts))

    def _gather(self, pings: _Pings, states: NDArray[Any], parts: list[tuple[int, int]]) -> Found:
        while len(self._rooms) < min(self._threads, max(len(parts), 1)):
            self._rooms.append((new_work(), np.zeros(1, OUT)))
        free = list(self._rooms)
        done: list[list[Found]] = [[] for _ in parts]

        def task(i: int) -> None:
            work, out = free.pop()
            at, end = parts[i]
            while at < end:
                out["n"] = 0
                out["dropped"] = 0
                at = pass_kernel(*pings, self._index, at, end, self._parameters, states, work, out)
                done[i].append(_taken(out[0]))
            free.append((work, out))

        if len(parts) < 2 or self._threads == 1:
            for i in range(len(parts)):
                task(i)
        else:
            with ThreadPoolExecutor(self._threads) as pool:
                list(pool.map(task, range(len(parts))))
        return _join([found for part in done for found in part])


def _even_ends(n: int, parts: int) -> NDArray[np.int64]:
    return (np.arange(1, parts + 1) * n) // parts


def _even(n: int, parts: int) -> list[tuple[int, int]]:
    ends = np.unique(np.concatenate([[0], _even_ends(n, parts)])).tolist()
    return list(itertools.pairwise(ends))


def _taken(out: Any) -> Found:
    """Copy the rows out of a block."""
    n = out["n"]
    return Found(
        out["passage"][: n[N_PASSAGE]].copy(),
        out["section"][: n[N_SECTION]].copy(),
        out["unfinished"][: n[N_UNFINISHED]].copy(),
        out["trip"][: n[N_TRIP]].copy(),
        out["dropped"].copy(),
        int(n[N_USED]),
    )


def _join(parts: list[Found]) -> Found:
    """Put the outputs of all parts after one another; each part is a range of vehicles, in their order."""
    nothing = _taken(np.zeros(1, OUT)[0])
    every = [nothing, *parts]
    return Found(
        np.concatenate([p.passages for p in every]),
        np.concatenate([p.sections for p in every]),
        np.concatenate([p.unfinished for p in every]),
        np.concatenate([p.trips for p in every]),
        np.add.reduce([p.dropped for p in every]),
        sum(p.n_used for p in every),
    )
