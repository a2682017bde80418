"""Who drives when: the trips of a day for a fleet of equipped vehicles in the town."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stream.demo.drive import Trips, drivers
from stream.demo.holds import PARK_S, START_S
from stream.demo.roads import Roads

F64 = NDArray[np.float64]

REST_S = 1500.0  # s at least from the start of a trip to the start of the vehicle's next one
FIRST_S, LAST_S = 5 * 3600.0, 22 * 3600.0  # local clock between which trips start


@dataclass(frozen=True)
class Fleet:
    """How many vehicles drive, and how.

    Attributes
    ----------
    vehicles, trips_a_day : number, and mean trips of each a day
    reach_s : shortest and longest time to a goal without waits, s
    park_share, park_s : share of trips after which the receiver stays on, and for how long, s
    """

    vehicles: int
    trips_a_day: float
    reach_s: tuple[float, float]
    park_share: float
    park_s: tuple[float, float]


def vehicle_names(n: int) -> tuple[str, ...]:
    """Name the vehicles."""
    return tuple(f"car{i:04d}" for i in range(n))


def _starts(fleet: Fleet, level: F64, rng: np.random.Generator) -> tuple[NDArray[np.int32], F64]:
    """Draw the starts of a day: more trips in the hours when the other traffic is strong."""
    hours = np.arange(24) + 0.5
    weight = np.where((hours * 3600 > FIRST_S) & (hours * 3600 < LAST_S), level, 0.0)
    n = np.minimum(rng.poisson(fleet.trips_a_day, fleet.vehicles), 30)
    vehicle = np.repeat(np.arange(fleet.vehicles), n)
    hour = rng.choice(24, vehicle.size, p=weight / weight.sum())
    start = (hour + rng.random(vehicle.size)) * 3600.0
    order = np.lexsort((start, vehicle))
    vehicle, start = vehicle[order], start[order]
    for i in range(1, start.size):
        if vehicle[i] == vehicle[i - 1]:
            start[i] = max(start[i], start[i - 1] + REST_S)
    keep = start < LAST_S + 1800.0
    return vehicle[keep].astype(np.int32), start[keep]


def day_trips(roads: Roads, fleet: Fleet, level: F64, midnight_us: int, seed: int) -> Trips:
    """Draw the trips of one local day.

    Parameters
    ----------
    level : float64[24]   how busy each local hour is
    midnight_us : int     local midnight, UTC epoch

    Returns
    -------
    Trips by vehicle, then start; each goes on where the vehicle's last one ended.
    """
    rng = np.random.default_rng(seed)
    vehicle, start_s = _starts(fleet, level, rng)
    n = vehicle.size
    driver = drivers(n, rng)
    driver[:, START_S] = start_s
    is_parked = rng.random(n) < fleet.park_share
    driver[:, PARK_S] = np.where(is_parked, rng.uniform(*fleet.park_s, n), 0.0)
    weight = roads.edge_m * roads.is_open * (np.diff(roads.succ_start) > 0)
    return Trips(
        names=vehicle_names(fleet.vehicles),
        vehicle_ix=vehicle,
        start_us=midnight_us + np.round(start_s * 1e6).astype(np.int64),
        origin=rng.choice(roads.edge_m.size, n, p=weight / weight.sum()).astype(np.int32),
        goes_on=np.concatenate([[0], vehicle[1:] == vehicle[:-1]]).astype(np.uint8),
        reach_s=rng.uniform(*fleet.reach_s, n),
        start_share=rng.uniform(0.2, 0.8, n),
        end_share=rng.uniform(0.2, 0.8, n),
        driver=driver,
    )
