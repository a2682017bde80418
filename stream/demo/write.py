"""Pings as a fleet of receivers delivers them: mixed intervals, noise, rare faults; one file a day."""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import polars as pl

from stream.demo.track import Tracks, sample

FAULTS = ("duplicate", "null_island", "jump")


@dataclass(frozen=True)
class Receivers:
    """What receivers do to positions.

    Attributes
    ----------
    intervals : s between pings, with the share of vehicles
    sigma_m, tau_s : position error per axis, first-order Gauss-Markov
    faults : share of pings by kind, keys of FAULTS
    """

    intervals: dict[float, float]
    sigma_m: float
    tau_s: float
    faults: dict[str, float]


def vehicle_intervals(
    receivers: Receivers, n: int, seed: int
) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    """Draw each vehicle's interval, s; a vehicle keeps it over all days."""
    share = np.array(list(receivers.intervals.values()))
    return np.random.default_rng(seed).choice(
        np.array(list(receivers.intervals), np.float64), n, p=share / share.sum()
    )


def add_faults(
    pings: pl.DataFrame, shares: dict[str, float], seed: int
) -> tuple[pl.DataFrame, dict[str, int]]:
    """Spoil some pings, each at most once, and tell how many of each kind.

    Returns
    -------
    The pings in order of time (a duplicate right behind its first), and the number of each fault.
    """
    rng = np.random.default_rng(seed)
    counts = {kind: round(shares[kind] * pings.height) for kind in FAULTS}
    chosen = rng.choice(pings.height, sum(counts.values()), replace=False)
    cuts = np.cumsum(list(counts.values()))
    twice, null, jump = np.split(chosen, cuts)[:3]
    lon, lat = pings["lon"].to_numpy().copy(), pings["lat"].to_numpy().copy()
    angle, far_m = rng.uniform(0.0, 2.0 * np.pi, jump.size), rng.uniform(1000.0, 9000.0, jump.size)
    lon[jump] += far_m * np.cos(angle) / (111_320.0 * np.cos(np.radians(lat[jump])))
    lat[jump] += far_m * np.sin(angle) / 111_320.0
    lon[null], lat[null] = 0.0, 0.0
    spoilt = pings.with_columns(lon=lon, lat=lat)
    again = spoilt[np.sort(twice)]
    return pl.concat([spoilt, again]).sort("ts", "vehicle_id", maintain_order=True), counts


def receive(
    tracks: Tracks, receivers: Receivers, interval_s: np.ndarray[tuple[int], np.dtype[np.float64]], seed: int
) -> tuple[pl.DataFrame, dict[str, int]]:
    """Sample one day's tracks and spoil a few pings.

    Returns
    -------
    The pings in order of time, coordinates to 1e-7 degree, and the number of each fault among them.
    """
    pings = sample(tracks, interval_s[tracks.vehicle_ix], receivers.sigma_m, receivers.tau_s, seed)
    return add_faults(pings.with_columns(pl.col("lon", "lat").round(7)), receivers.faults, seed + 1)


def write_pings(pings: pl.DataFrame, path: Path) -> None:
    """Write pings to a Parquet file: vehicle_id, ts (us, UTC), lon, lat."""
    pings.write_parquet(path, compression="zstd", row_group_size=200_000)
