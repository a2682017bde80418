"""Routes of drivers: the quickest way by each driver's own taste, to a place a random time away."""

import numpy as np
from numpy.typing import NDArray

from stream.demo.roads import Roads
from stream.kernel import kernel

F64 = NDArray[np.float64]
I32 = NDArray[np.int32]
I64 = NDArray[np.int64]
U8 = NDArray[np.uint8]


@kernel
def push_kernel(heap_cost: F64, heap_edge: I32, n: int, cost: float, edge: int) -> int:
    """Put an entry into the binary heap of n entries; returns n + 1."""
    i = n
    while i > 0:
        up = (i - 1) >> 1
        if heap_cost[up] <= cost:
            break
        heap_cost[i], heap_edge[i] = heap_cost[up], heap_edge[up]
        i = up
    heap_cost[i], heap_edge[i] = cost, edge
    return n + 1


@kernel
def pop_kernel(heap_cost: F64, heap_edge: I32, n: int) -> int:
    """Take the top entry off the heap (the caller has read it); returns n - 1."""
    n -= 1
    cost, edge = heap_cost[n], heap_edge[n]
    i = 0
    while True:
        down = 2 * i + 1
        if down >= n:
            break
        if down + 1 < n and heap_cost[down + 1] < heap_cost[down]:
            down += 1
        if heap_cost[down] >= cost:
            break
        heap_cost[i], heap_edge[i] = heap_cost[down], heap_edge[down]
        i = down
    heap_cost[i], heap_edge[i] = cost, edge
    return n


@kernel
def search_kernel(
    trip: int, origin: int, reach_s: float, edge_m: F64, edge_mps: F64, is_open: U8, succ_start: I32,
    succ_edge: I32, succ_turn: F64, dist: F64, back_succ: I32, back_edge: I32, heap_cost: F64, heap_edge: I32,
    touched: I32,
) -> int:  # fmt: skip
    """Search from an edge until edges reach_s away are settled; returns the open edge found there, or -1.

    Shortest paths over directed edges by Dijkstra 1959; each driver weighs each edge by 0.7 to 1.3.
    The rows of dist it used are set back to infinity before it returns.
    """
    n, n_touched, goal = 1, 1, -1
    dist[origin], back_edge[origin], touched[0] = 0.0, -1, origin
    heap_cost[0], heap_edge[0] = 0.0, origin
    while n > 0:
        cost, edge = heap_cost[0], heap_edge[0]
        n = pop_kernel(heap_cost, heap_edge, n)
        if cost > dist[edge]:
            continue
        if is_open[edge] == 1 and edge != origin:
            goal = edge
            if cost >= reach_s:
                break
        for r in range(succ_start[edge], succ_start[edge + 1]):
            e = succ_edge[r]
            taste = 0.7 + 0.6 * ((e * 7919 + trip * 104729) % 1009) / 1009.0
            c = cost + taste * edge_m[e] / edge_mps[e] + 4.0 * abs(succ_turn[r]) / 90.0
            if c < dist[e]:
                if dist[e] == np.inf:
                    touched[n_touched] = e
                    n_touched += 1
                dist[e], back_succ[e], back_edge[e] = c, r, edge
                n = push_kernel(heap_cost, heap_edge, n, c, e)
    for i in range(n_touched):
        dist[touched[i]] = np.inf
    return goal


@kernel
def routes_kernel(
    trip: int, n_trips: int, goes_on: U8, origin: I32, reach_s: F64, edge_m: F64, edge_mps: F64,
    is_open: U8, succ_start: I32, succ_edge: I32, succ_turn: F64, dist: F64, back_succ: I32, back_edge: I32,
    heap_cost: F64, heap_edge: I32, touched: I32, start_out: I64, edge_out: I32, succ_out: I32,
) -> int:  # fmt: skip
    """Route trips from `trip` on until the output is full; returns the first trip not routed.

    A trip that goes on starts on the edge where the trip before it ended, if that leads anywhere.
    succ_out[k] is the successor taken after edge k (-1 at the last). A trip without a way has one edge.
    """
    size = edge_out.size
    while trip < n_trips:
        begin = start_out[trip]
        first = origin[trip]
        if goes_on[trip] == 1 and begin > 0:
            last = edge_out[begin - 1]
            if succ_start[last + 1] > succ_start[last]:
                first = last
        goal = search_kernel(
            trip, first, reach_s[trip], edge_m, edge_mps, is_open, succ_start, succ_edge, succ_turn, dist,
            back_succ, back_edge, heap_cost, heap_edge, touched,
        )  # fmt: skip
        count, e = 1, goal
        while e >= 0 and back_edge[e] >= 0:
            e = back_edge[e]
            count += 1
        if begin + count > size:
            return trip
        edge_out[begin], succ_out[begin + count - 1] = first, -1
        e = goal
        for k in range(begin + count - 1, begin, -1):
            edge_out[k], succ_out[k - 1] = e, back_succ[e]
            e = back_edge[e]
        trip += 1
        start_out[trip] = begin + count
    return trip


def routes(roads: Roads, goes_on: U8, origin: I32, reach_s: F64) -> tuple[I64, I32, I32]:
    """Find a route for each trip.

    Parameters
    ----------
    goes_on : uint8[T]     1 where the trip starts on the edge where the one before it ended
    origin : int32[T]      edge where it starts otherwise
    reach_s : float64[T]   travel time without waits after which any open edge will do

    Returns
    -------
    start int64[T + 1], edge int32, successor taken int32: routes laid end to end
    """
    n_edges, n_succ, n = roads.edge_m.size, roads.succ_edge.size, goes_on.size
    scratch = (
        np.full(n_edges, np.inf),
        np.zeros(n_edges, np.int32),
        np.zeros(n_edges, np.int32),
        np.zeros(n_succ + 1),
        np.zeros(n_succ + 1, np.int32),
        np.zeros(n_edges, np.int32),
    )
    start = np.zeros(n + 1, np.int64)
    edge = np.zeros(64 * n + 1024, np.int32)
    succ = np.zeros(edge.size, np.int32)
    done = 0
    while done < n:
        done = routes_kernel(
            done, n, goes_on, origin, reach_s, roads.edge_m, roads.edge_mps, roads.is_open, roads.succ_start,
            roads.succ_edge, roads.succ_turn_deg, *scratch, start, edge, succ,
        )  # fmt: skip
        if done < n:
            edge = np.concatenate([edge, np.zeros(edge.size, np.int32)])
            succ = np.concatenate([succ, np.zeros(succ.size, np.int32)])
    used = int(start[n])
    return start, edge[:used], succ[:used]
