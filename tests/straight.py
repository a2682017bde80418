"""One straight road with a rule in its middle, and vehicles that all drive alike: answers known by hand."""

import numpy as np

from stream.demo.drive import Trips, drive
from stream.demo.roads import Roads, chainages, metres_per_degree
from stream.demo.track import Tracks

LENGTH_M = 1000.0


def straight(kind: int, rule: dict[int, float], v_mps: float) -> Roads:
    """Lay a road of two edges, LENGTH_M each, eastward at 50 degrees north, with one rule between them."""
    k_lon, _ = metres_per_degree(np.array([50.0]))
    lon = 10.0 + np.array([0.0, LENGTH_M, 2.0 * LENGTH_M]) / k_lon[0]
    lat = np.full(3, 50.0)
    start = np.array([0, 2, 4], np.int64)
    points = np.array([0, 1, 1, 2])
    length = np.full(2, LENGTH_M)
    row = np.zeros((1, 8))
    for column, value in rule.items():
        row[0, column] = value
    return Roads(
        node_id=np.array([1, 2, 3], np.int64),
        node_lon=lon,
        node_lat=lat,
        edge_from=np.array([0, 1], np.int32),
        edge_to=np.array([1, 2], np.int32),
        edge_m=length,
        edge_mps=np.full(2, v_mps),
        edge_way=np.array([10, 11], np.int64),
        is_open=np.ones(2, np.uint8),
        point_start=start,
        point_lon=lon[points],
        point_lat=lat[points],
        point_m=chainages(start, lon[points], lat[points], length),
        succ_start=np.array([0, 1, 1], np.int32),
        succ_edge=np.array([1], np.int32),
        succ_turn_deg=np.zeros(1),
        kind=np.array([kind], np.int8),
        rule=row,
    )


def send(roads: Roads, start_s: np.ndarray, a: float, d: float, *, is_random: bool = False) -> Tracks:
    """Send vehicles that accelerate at a and brake at d from one end to the other, at given seconds."""
    n = start_s.size
    driver = np.zeros((n, 7))
    driver[:, :6] = np.column_stack(
        [np.ones(n), np.full(n, a), np.full(n, d), np.full(n, 2.5), start_s, np.full(n, float(is_random))]
    )
    trips = Trips(
        names=tuple(f"v{i}" for i in range(n)),
        vehicle_ix=np.arange(n, dtype=np.int32),
        start_us=np.round(start_s * 1e6).astype(np.int64),
        origin=np.zeros(n, np.int32),
        goes_on=np.zeros(n, np.uint8),
        reach_s=np.full(n, 1e6),
        start_share=np.zeros(n),
        end_share=np.ones(n),
        driver=driver,
    )
    return drive(roads, trips, np.ones(24), 7)


def seconds(tracks: Tracks) -> np.ndarray:
    """Give how long each trip took, s."""
    return (tracks.t_us[tracks.time_start[1:] - 1] - tracks.t_us[tracks.time_start[:-1]]) * 1e-6
