"""Drives trips along their routes: path, speed caps and holds into tracks; knows nothing of detection."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stream.demo.draw import seeds
from stream.demo.holds import (
    LATERAL,
    NEXT,
    PARK_S,
    SHARE,
    START_S,
    D,
    K,
    N,
    S,
    T,
    V,
    go_kernel,
    hold_kernel,
    keep_kernel,
    stand_kernel,
)
from stream.demo.motion import brakeable_kernel
from stream.demo.path import caps_kernel, lay_paths
from stream.demo.roads import Roads, roads_of
from stream.demo.route import routes
from stream.demo.track import Tracks
from stream.kernel import kernel
from stream.network.model import Streets

F64 = NDArray[np.float64]
I32 = NDArray[np.int32]
I64 = NDArray[np.int64]
U8 = NDArray[np.uint8]

KNOTS_AN_EDGE = 8  # first guess of knots for each edge driven


@dataclass(frozen=True)
class Trips:
    """What each trip is asked to do; T trips, those of a vehicle one after another.

    Attributes
    ----------
    names : tuple of str;  vehicle_ix : int32[T];  start_us : int64[T]
    origin : int32[T];  goes_on : uint8[T];  reach_s : float64[T]    see `route.routes`
    start_share, end_share : float64[T]   share of the first and last edge where the trip starts and ends
    driver : float64[T, 7]        columns of `holds`: share of the limit driven, rates, side force, clock ...
    """

    names: tuple[str, ...]
    vehicle_ix: I32
    start_us: I64
    origin: I32
    goes_on: U8
    reach_s: F64
    start_share: F64
    end_share: F64
    driver: F64


@kernel
def drive_kernel(
    trip: int, n_trips: int, route_start: I64, succ: I32, point_start: I64, lon: F64, lat: F64, m: F64,
    mps: F64, node_start: I64, node_m: F64, driver: F64, kind: NDArray[np.int8], rule: F64, level: F64,
    seed: I64, at_m: F64, cap: F64, brake: F64, w: F64, car: F64, now: F64, room: int, t_s: F64, s_m: F64,
    time_start: I64,
) -> int:  # fmt: skip
    """Drive trips from `trip` on until fewer than `room` knots are free; returns the first not driven.

    level : float64[24], how strong the other traffic is in each hour of START_S's clock.
    """
    while trip < n_trips:
        n = time_start[trip]
        first, last = point_start[trip], point_start[trip + 1]
        if n + room > t_s.size:
            return trip
        for c in range(car.size):
            car[c] = driver[trip, c]
        n_pieces = caps_kernel(lon, lat, m, mps, first, last, car[SHARE], car[LATERAL], at_m, cap)
        brakeable_kernel(at_m, cap, n_pieces, car[D], brake)
        t_s[n], s_m[n] = 0.0, 0.0
        now[T], now[S], now[V], now[K], now[N] = 0.0, 0.0, 0.0, 0.0, n + 1
        nodes = node_start[trip]
        for q in range(node_start[trip + 1] - nodes):
            r = succ[route_start[trip] + q]
            if kind[r] != 0:
                hour = math.floor((car[START_S] + now[T]) / 3600.0) % 24
                hold_kernel(
                    kind[r], node_m[nodes + q], rule, r, level[hour], at_m, cap, brake, car, w, t_s, s_m, now,
                    seed, trip,
                )  # fmt: skip
        go_kernel(m[last - 1], 0.0, at_m, cap, brake, car, w, t_s, s_m, now)
        keep_kernel(now)
        stand_kernel(now[T] + car[PARK_S], t_s, s_m, now)
        trip += 1
        time_start[trip] = int(now[N])
    return trip


def drive(roads: Roads, trips: Trips, level: F64, seed: int) -> Tracks:
    """Drive the trips; one that finds no way only moves a little along its edge.

    Parameters
    ----------
    level : float64[24]   strength of the other traffic by hour of the drivers' clock
    seed : same seed, same tracks
    """
    n = trips.vehicle_ix.size
    start, edge, succ = routes(roads, trips.goes_on, trips.origin, trips.reach_s)
    paths = lay_paths(roads, start, edge, trips.goes_on, (trips.start_share, trips.end_share))
    longest = int(np.diff(paths.point_start).max()) * 2 + 8
    at_m, cap, brake, w = (np.zeros(longest) for _ in range(4))
    car, now = np.zeros(trips.driver.shape[1]), np.zeros(2 * NEXT)
    state = seeds(n, np.random.default_rng(seed))
    time_start = np.zeros(n + 1, np.int64)
    room = 4096 + 60 * longest
    t_s = np.zeros(KNOTS_AN_EDGE * edge.size + 2 * room)
    s_m = np.zeros(t_s.size)
    done = 0
    while done < n:
        done = drive_kernel(
            done, n, start, succ, paths.point_start, paths.lon, paths.lat, paths.m, paths.mps,
            paths.node_start, paths.node_m, trips.driver, roads.kind, roads.rule, level, state, at_m, cap,
            brake, w, car, now, room, t_s, s_m, time_start,
        )  # fmt: skip
        if done < n:
            t_s = np.concatenate([t_s, np.zeros(t_s.size)])
            s_m = np.concatenate([s_m, np.zeros(s_m.size)])
    knots = int(time_start[n])
    t_us = np.repeat(trips.start_us, np.diff(time_start)) + np.round(t_s[:knots] * 1e6).astype(np.int64)
    return Tracks(
        names=trips.names,
        vehicle_ix=trips.vehicle_ix,
        node_start=paths.node_start,
        node_id=roads.node_id[paths.node],
        node_lon=roads.node_lon[paths.node],
        node_lat=roads.node_lat[paths.node],
        node_m=paths.node_m,
        step_way=paths.way,
        point_start=paths.point_start,
        point_lon=paths.lon,
        point_lat=paths.lat,
        point_m=paths.m,
        time_start=time_start,
        t_us=t_us,
        s_m=s_m[:knots],
    )


def drivers(n: int, rng: np.random.Generator) -> F64:
    """Draw drivers: share of the limit, rates, side force, clock 0, random others, no parking.

    Rates: METHODS.md section 6, ordinary starts 1.0 to 1.5 and stops 1.5 to 2.5 m/s^2.
    """
    return np.column_stack(
        [
            np.clip(rng.normal(0.98, 0.07, n), 0.75, 1.2),
            rng.uniform(1.0, 1.5, n),
            rng.uniform(1.5, 2.5, n),
            rng.uniform(1.8, 3.2, n),
            np.zeros(n),
            np.ones(n),
            np.zeros(n),
        ]
    )


def drive_network(
    streets: Streets,
    n_trips: int,
    seed: int,
    stop_share: float = 0.4,
    wait_max_s: float = 45.0,
    back_max_m: float = 45.0,
) -> Tracks:
    """Drive random routes along any built network, with stops of random length before random junctions.

    Parameters
    ----------
    n_trips : one vehicle each
    stop_share : share of junctions with a stop, at 1 to 1 + back_max_m before the mouth, up to wait_max_s

    Returns
    -------
    Tracks whose nodes are the network's graph nodes
    """
    rng = np.random.default_rng(seed)
    roads = roads_of(streets, stop_share, wait_max_s, back_max_m)
    open_edges = np.flatnonzero(roads.is_open & (np.diff(roads.succ_start) > 0))
    start_s = np.sort(rng.uniform(6 * 3600, 20 * 3600, n_trips))
    driver = drivers(n_trips, rng)
    driver[:, START_S] = start_s
    monday_us = 1_780_272_000_000_000  # 2026-06-01T00:00:00Z
    trips = Trips(
        names=tuple(f"n{i:06d}" for i in range(n_trips)),
        vehicle_ix=np.arange(n_trips, dtype=np.int32),
        start_us=monday_us + np.round(start_s * 1e6).astype(np.int64),
        origin=rng.choice(open_edges, n_trips).astype(np.int32),
        goes_on=np.zeros(n_trips, np.uint8),
        reach_s=rng.uniform(120.0, 600.0, n_trips),
        start_share=rng.uniform(0.05, 0.6, n_trips),
        end_share=rng.uniform(0.4, 0.95, n_trips),
        driver=driver,
    )
    return drive(roads, trips, np.ones(24), seed + 1)
