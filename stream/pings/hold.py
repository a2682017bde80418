"""Pings held back until they are in order of time.

Guarantee: what comes out, and in which order, depends on the sequence of pings put in, not on how it was cut.
A vehicle's newest ping is always held, so the held pings are the whole state.
"""

import numpy as np
from numpy.typing import NDArray

from stream.kernel import kernel

Codes = NDArray[np.int32]
Times = NDArray[np.int64]
Floats = NDArray[np.float64]
Pings = tuple[Codes, Times, Floats, Floats]


@kernel
def release_kernel(
    vehicle_ix: Codes,
    t_us: Times,
    by_vehicle: NDArray[np.int64],
    lateness_us: int,
    newest: Times,
    release_out: Times,
) -> int:
    """Find the ping whose arrival sets each ping free.

    Parameters
    ----------
    vehicle_ix, t_us : [n]      in order of arrival
    by_vehicle : int64[n]       positions sorted by vehicle, then arrival
    lateness_us : int64
    newest : int64[n]           room to work in
    release_out : int64[n]      written: position of the first ping, not before the ping itself, at which the
                                vehicle's newest time has passed it by lateness_us; n where there is none yet

    Returns
    -------
    n_free : int64              how many are set free
    """
    n = len(t_us)
    n_free = 0
    start = 0
    while start < n:
        vehicle = vehicle_ix[by_vehicle[start]]
        stop = start
        top = t_us[by_vehicle[start]]
        while stop < n and vehicle_ix[by_vehicle[stop]] == vehicle:
            top = max(top, t_us[by_vehicle[stop]])
            newest[stop] = top
            stop += 1
        for k in range(start, stop):
            wanted = t_us[by_vehicle[k]] + lateness_us
            low, high = k, stop
            while low < high:
                middle = (low + high) // 2
                if newest[middle] >= wanted:
                    high = middle
                else:
                    low = middle + 1
            release_out[by_vehicle[k]] = by_vehicle[low] if low < stop else n
            n_free += low < stop
        start = stop
    return n_free


class HoldBack:
    """Holds each vehicle's pings until its newest is later by `lateness_us`; gives them in order of time.

    A ping later still passes through at once: it comes out of order, for cleaning to count.
    """

    def __init__(self, lateness_us: int, held: Pings | None = None) -> None:
        """Start empty, or from what an earlier one gave as `held()`.

        Parameters
        ----------
        lateness_us
            At least 1.
        held
            vehicle_ix, t_us, lon, lat, in order of arrival.

        Raises
        ------
        ValueError
            lateness_us is below 1 (hold nothing back then).
        """
        if lateness_us < 1:
            raise ValueError(f"lateness_us is {lateness_us}; hold back only where it is at least 1")
        self._lateness_us = lateness_us
        self._held = held if held is not None else _nothing()

    def __len__(self) -> int:
        """Count the pings held."""
        return len(self._held[1])

    def held(self) -> Pings:
        """Give what is held: vehicle_ix, t_us, lon, lat, in order of arrival."""
        return self._held

    def push(self, vehicle_ix: Codes, t_us: Times, lon: Floats, lat: Floats) -> Pings:
        """Put pings in, in order of arrival, and take those out that they set free.

        Returns
        -------
        vehicle_ix, t_us, lon, lat of the pings set free: in the order of the arrivals that set them free,
        then of their time, then of their own arrival.
        """
        old = self._held
        vehicle = np.concatenate([old[0], vehicle_ix])
        times = np.concatenate([old[1], t_us])
        degrees = (np.concatenate([old[2], lon]), np.concatenate([old[3], lat]))
        n = len(times)
        by_vehicle = np.argsort(vehicle, kind="stable")
        release = np.empty(n, dtype=np.int64)
        release_kernel(vehicle, times, by_vehicle, self._lateness_us, np.empty(n, dtype=np.int64), release)
        is_held = release == n
        self._held = (vehicle[is_held], times[is_held], degrees[0][is_held], degrees[1][is_held])
        free = np.flatnonzero(~is_held)
        free = free[np.lexsort((times[free], release[free]))]
        return vehicle[free], times[free], degrees[0][free], degrees[1][free]

    def flush(self) -> Pings:
        """Take out all that is held, in order of time, then of arrival."""
        vehicle_ix, t_us, lon, lat = self._held
        self._held = _nothing()
        order = np.argsort(t_us, kind="stable")
        return vehicle_ix[order], t_us[order], lon[order], lat[order]


def _nothing() -> Pings:
    return np.zeros(0, np.int32), np.zeros(0, np.int64), np.zeros(0), np.zeros(0)
