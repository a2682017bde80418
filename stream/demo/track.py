"""Tracks: what drivers really did, exactly; and the pings a receiver would have made of them.

A track is its path (shape and nodes by chainage) and its position along the path over time, piecewise
linear between knots. The same track answers for its pings and for its truth.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import polars as pl
from numpy.typing import NDArray

from stream.demo.roads import metres_per_degree
from stream.kernel import kernel

F64 = NDArray[np.float64]
I32 = NDArray[np.int32]
I64 = NDArray[np.int64]


@dataclass(frozen=True)
class Tracks:
    """T trips of V vehicles, laid end to end; trip i owns rows start[i] .. start[i + 1] of each table.

    Attributes
    ----------
    names : tuple of str, length V
    vehicle_ix : int32[T]             trips of a vehicle follow each other in time
    node_start : int64[T + 1]; node_id : int64; node_lon, node_lat : float64; node_m : float64
        nodes passed, with chainage along the path
    step_way : int64                  way driven on to reach that node
    point_start : int64[T + 1]; point_lon, point_lat, point_m : float64    the path, from 0 m on
    time_start : int64[T + 1]; t_us : int64; s_m : float64                 place over time, non-decreasing
    """

    names: tuple[str, ...]
    vehicle_ix: I32
    node_start: I64
    node_id: I64
    node_lon: F64
    node_lat: F64
    node_m: F64
    step_way: I64
    point_start: I64
    point_lon: F64
    point_lat: F64
    point_m: F64
    time_start: I64
    t_us: I64
    s_m: F64

    @property
    def n_trips(self) -> int:
        """Number of trips."""
        return self.vehicle_ix.size


@kernel
def count_kernel(time_start: I64, t_us: I64, interval_us: I64, phase_us: I64, count_out: I64) -> None:
    """Count the sampling instants (phase modulo interval) within each trip."""
    for i in range(count_out.size):
        first, last, step = t_us[time_start[i]], t_us[time_start[i + 1] - 1], interval_us[i]
        k0 = -((phase_us[i] - first) // step)
        k1 = (last - phase_us[i]) // step
        count_out[i] = max(k1 - k0 + 1, 0)


@kernel
def positions_kernel(
    time_start: I64, t_us: I64, s_m: F64, point_start: I64, point_lon: F64, point_lat: F64, point_m: F64,
    interval_us: I64, phase_us: I64, out_start: I64, t_out: I64, lon_out: F64, lat_out: F64,
) -> None:  # fmt: skip
    """Fill the time and true position of each sampling instant."""
    for i in range(interval_us.size):
        j, p = time_start[i], point_start[i]
        k = -((phase_us[i] - t_us[j]) // interval_us[i])
        t = phase_us[i] + k * interval_us[i]
        for row in range(out_start[i], out_start[i + 1]):
            while j + 2 < time_start[i + 1] and t_us[j + 1] < t:
                j += 1
            span = t_us[j + 1] - t_us[j]
            s = s_m[j + 1] if span == 0 else s_m[j] + (s_m[j + 1] - s_m[j]) * ((t - t_us[j]) / span)
            while p + 2 < point_start[i + 1] and point_m[p + 1] < s:
                p += 1
            length = point_m[p + 1] - point_m[p]
            f = 0.0 if length <= 0.0 else (s - point_m[p]) / length
            turn = point_lon[p + 1] - point_lon[p]
            turn -= 360.0 * math.floor((turn + 180.0) / 360.0)
            t_out[row] = t
            lon_out[row] = point_lon[p] + f * turn
            lat_out[row] = point_lat[p] + f * (point_lat[p + 1] - point_lat[p])
            t += interval_us[i]


@kernel
def noise_kernel(
    out_start: I64, interval_us: I64, tau_us: float, sigma_m: float, east: F64, north: F64
) -> None:
    """Turn unit normal draws into first-order Gauss-Markov error in metres, in place, trip by trip.

    x[k + 1] = r x[k] + sigma sqrt(1 - r^2) n, r = exp(-interval / tau). Source: METHODS.md section 4.
    """
    for i in range(interval_us.size):
        r = math.exp(-interval_us[i] / tau_us)
        fresh = sigma_m * math.sqrt(1.0 - r * r)
        for row in range(out_start[i], out_start[i + 1]):
            if row == out_start[i]:
                east[row] *= sigma_m
                north[row] *= sigma_m
            else:
                east[row] = r * east[row - 1] + fresh * east[row]
                north[row] = r * north[row - 1] + fresh * north[row]


def sample(
    tracks: Tracks, interval_s: float | Sequence[float] | F64, sigma_m: float, tau_s: float, seed: int
) -> pl.DataFrame:
    """Give the pings of receivers that sample the tracks, with correlated position error.

    Parameters
    ----------
    interval_s : s between pings, one for all trips or one a trip; each vehicle has its own phase
    sigma_m : standard deviation of the error per axis, 0 for none
    tau_s : time constant of the error, s
    seed : same seed, same pings

    Returns
    -------
    vehicle_id (str), ts (datetime, us, UTC), lon, lat (degrees, WGS 84), in order of time, then vehicle
    """
    rng = np.random.default_rng(seed)
    n = tracks.n_trips
    interval_us = np.broadcast_to(np.round(np.asarray(interval_s, np.float64) * 1e6), (n,)).astype(np.int64)
    phase_s = rng.random(len(tracks.names))[tracks.vehicle_ix]
    phase_us = (np.floor(phase_s * interval_us / 1000.0) * 1000).astype(np.int64)
    count = np.zeros(n, np.int64)
    count_kernel(tracks.time_start, tracks.t_us, interval_us, phase_us, count)
    start = np.concatenate([[0], np.cumsum(count)]).astype(np.int64)
    total = int(start[-1])
    t_us, lon, lat = np.zeros(total, np.int64), np.zeros(total), np.zeros(total)
    positions_kernel(
        tracks.time_start, tracks.t_us, tracks.s_m, tracks.point_start, tracks.point_lon, tracks.point_lat,
        tracks.point_m, interval_us, phase_us, start, t_us, lon, lat,
    )  # fmt: skip
    if sigma_m > 0.0:
        east, north = rng.standard_normal(total), rng.standard_normal(total)
        noise_kernel(start, interval_us, tau_s * 1e6, sigma_m, east, north)
        k_lon, k_lat = metres_per_degree(lat)
        lon, lat = lon + east / k_lon, lat + north / k_lat
    lon = (lon + 180.0) % 360.0 - 180.0 if total and np.abs(lon).max() > 180.0 else lon
    vehicle = np.repeat(tracks.vehicle_ix, count).astype(np.uint32)
    frame = pl.DataFrame(
        {
            "vehicle_id": pl.Series(vehicle).cast(pl.UInt32),
            "ts": pl.Series(t_us).cast(pl.Datetime("us", "UTC")),
            "lon": lon,
            "lat": lat,
        }
    ).sort("ts", "vehicle_id", maintain_order=True)
    names = pl.Series("vehicle_id", list(tracks.names), dtype=pl.String)
    return frame.with_columns(names.gather(frame["vehicle_id"]))
