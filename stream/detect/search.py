"""Route lengths between edges: bounded shortest paths, searched when first asked for and remembered.

Guarantee: a row depends on its edge and reach alone, never on what was asked before; so the answers are
the same whatever the memory holds. Each thread has a memory of its own.
"""

from typing import Any

import numpy as np

from stream.kernel import kernel, spliced
from stream.network.model import F64, I32, NONE
from stream.network.routes import StreetIndex

ROUTE = np.dtype(
    [
        ("target", np.int32),  # edge; -1 empty
        ("before", np.int32),  # the edge before it on the route; -1: follows the source at once
        ("metres", np.float32),  # from the source's end to the target's start
        ("cost", np.float32),  # log units of the turns
    ]
)
SHORT_M = 350.0  # reach of the rows for short steps
MAX_LABELS = 1024
_LABEL_ROOM = 2048  # power of two, twice the labels
_MEMORY = 1 << 21  # routes kept by a thread: 32 MB
_ROWS = 1 << 17  # row slots, power of two
TURN_M = 12.0  # metres that a log unit of turn cost weighs in choosing among routes
_GOLDEN = 0x9E3779B1


def routes_dtype(n_rows: int, n_routes: int) -> np.dtype[Any]:
    """Lay out a thread's memory of rows, and the room to search in.

    Parameters
    ----------
    n_rows
        Slots for rows, a power of two; half of them are used at most.
    n_routes
        Routes remembered; more than the largest row takes.
    """
    return np.dtype(
        [
            ("row_key", np.int64, (n_rows,)),  # 2 * edge + is_long; -1 empty
            ("row_start", np.int32, (n_rows,)),
            ("row_size", np.int32, (n_rows,)),  # power of two
            ("route", ROUTE, (n_routes,)),
            ("used", np.int64, (3,)),  # routes used, rows used, searches made
            ("label_edge", np.int32, (MAX_LABELS,)),
            ("label_before", np.int32, (MAX_LABELS,)),
            ("label_m", np.float64, (MAX_LABELS,)),
            ("label_cost", np.float64, (MAX_LABELS,)),
            ("label_done", np.uint8, (MAX_LABELS,)),
            ("label_at", np.int32, (_LABEL_ROOM,)),  # hash of edges to labels
            ("heap_rank", np.float64, (4 * MAX_LABELS,)),
            ("heap_label", np.int32, (4 * MAX_LABELS,)),
        ],
        align=True,
    )


ROUTES = routes_dtype(_ROWS, _MEMORY)
Routes = Any  # record of ROUTES


def forget(routes: Routes) -> None:
    """Empty a memory."""
    routes["row_key"] = NONE
    routes["label_at"] = NONE
    routes["used"] = 0


@kernel
def push(heap_rank: F64, heap_label: I32, n: int, rank: float, label: int) -> int:
    """Put a label on a binary heap; give the new size."""
    at = n
    while at > 0:
        up = (at - 1) >> 1
        if heap_rank[up] <= rank:
            break
        heap_rank[at] = heap_rank[up]
        heap_label[at] = heap_label[up]
        at = up
    heap_rank[at] = rank
    heap_label[at] = label
    return n + 1


@kernel
def pop(heap_rank: F64, heap_label: I32, n: int) -> int:
    """Take the least label off a heap of n > 0; the heap then holds n - 1."""
    top = heap_label[0]
    n -= 1
    rank = heap_rank[n]
    label = heap_label[n]
    at = 0
    while True:
        down = 2 * at + 1
        if down >= n:
            break
        if down + 1 < n and heap_rank[down + 1] < heap_rank[down]:
            down += 1
        if heap_rank[down] >= rank:
            break
        heap_rank[at] = heap_rank[down]
        heap_label[at] = heap_label[down]
        at = down
    heap_rank[at] = rank
    heap_label[at] = label
    return top


@spliced
def search_kernel(index: StreetIndex, source: int, reach_m: float, routes: Routes) -> int:
    """Search the routes from the end of an edge: to every edge whose start lies within the reach.

    The least metres + TURN_M * turn cost wins (Dijkstra 1959). Labels are written to `routes`.

    Returns
    -------
    n : int    labels, at most MAX_LABELS; edges beyond are out of reach
    """
    label_at = routes.label_at
    mask = label_at.shape[0] - 1
    n = 0
    size = 0
    current = NONE
    metres = 0.0
    cost = 0.0
    edge = source
    while True:
        first = index.edge[edge].succ
        for k in range(first, first + index.edge[edge].n_succ):
            to = index.succ_edge[k]
            to_cost = cost + index.succ_cost[k]
            at = (to * _GOLDEN >> 7) & mask
            while label_at[at] != NONE and routes.label_edge[label_at[at]] != to:
                at = (at + 1) & mask
            label = label_at[at]
            rank = metres + TURN_M * to_cost
            if label == NONE:
                if n == MAX_LABELS:
                    continue
                label = n
                n += 1
                label_at[at] = label
                routes.label_edge[label] = to
                routes.label_done[label] = 0
            elif (
                routes.label_done[label] or routes.label_m[label] + TURN_M * routes.label_cost[label] <= rank
            ):
                continue
            routes.label_m[label] = metres
            routes.label_cost[label] = to_cost
            routes.label_before[label] = current
            if size < routes.heap_rank.shape[0]:
                size = push(routes.heap_rank, routes.heap_label, size, rank, label)
        current = NONE
        while size > 0:
            label = pop(routes.heap_rank, routes.heap_label, size)
            size -= 1
            if routes.label_done[label]:
                continue
            routes.label_done[label] = 1
            further = routes.label_m[label] + index.edge[routes.label_edge[label]].length
            if further < reach_m:
                current = label
                metres = further
                cost = routes.label_cost[label]
                edge = routes.label_edge[label]
                break
        if current == NONE:
            break
    for i in range(label_at.shape[0]):
        label_at[i] = NONE
    return n


@kernel
def row_kernel(index: StreetIndex, source: int, is_long: int, reach_m: float, routes: Routes) -> int:
    """Give the slot of a row, searching it where it isn't remembered."""
    key = 2 * source + is_long
    mask = routes.row_key.shape[0] - 1
    slot = (key * _GOLDEN >> 5) & mask
    while routes.row_key[slot] != NONE:
        if routes.row_key[slot] == key:
            return slot
        slot = (slot + 1) & mask
    n = search_kernel(index, source, reach_m, routes)
    size = 4
    while size < n + n // 2 + 1:
        size *= 2
    if routes.used[0] + size > routes.route.shape[0] or routes.used[1] > mask // 2:
        routes.used[0] = 0
        routes.used[1] = 0
        for i in range(mask + 1):
            routes.row_key[i] = NONE
        slot = (key * _GOLDEN >> 5) & mask
    start = routes.used[0]
    routes.used[0] += size
    routes.used[1] += 1
    routes.used[2] += 1
    routes.row_key[slot] = key
    routes.row_start[slot] = start
    routes.row_size[slot] = size
    for i in range(start, start + size):
        routes.route[i].target = NONE
    for label in range(n):
        edge = routes.label_edge[label]
        at = (edge * _GOLDEN >> 7) & (size - 1)
        while routes.route[start + at].target != NONE:
            at = (at + 1) & (size - 1)
        r = routes.route[start + at]
        r.target = edge
        before = routes.label_before[label]
        r.before = routes.label_edge[before] if before != NONE else NONE
        r.metres = routes.label_m[label]
        r.cost = routes.label_cost[label]
    return slot


@kernel
def find_route(routes: Routes, slot: int, target: int) -> int:
    """Find a target in a row: the index in `routes.route`, or -1 out of reach."""
    start = routes.row_start[slot]
    mask = routes.row_size[slot] - 1
    at = (target * _GOLDEN >> 7) & mask
    while True:
        found = routes.route[start + at].target
        if found == target:
            return start + at
        if found == NONE:
            return NONE
        at = (at + 1) & mask
