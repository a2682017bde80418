"""What is found depends on each vehicle's pings alone: not on cuts, carry, weave or threads, to the bit."""

from itertools import pairwise
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import settings as hypothesis_settings
from hypothesis import strategies as st

from stream.config import load_settings
from stream.detect.carry import MAX_KEPT, STATE, carry_columns, held_rows, new_states, states_from_columns
from stream.detect.records import Found
from stream.detect.run import Detector
from tests.grid import Row, columns, drive, end_s, joined, row, stand
from tests.oracle.audit import check_all, check_counts
from tests.oracle.streets import grid_streets

SETTINGS = load_settings()
STREETS = grid_streets(5, 150.0)
THREADS = (1, 2, 3, 5)
N_VEHICLES = 7


def life(seed: int) -> list[Row]:
    """Give one vehicle's pings: drives, stands, silences, outliers, doubles, late and unreadable ones."""
    rng = np.random.default_rng(seed)
    at = 150.0 * rng.integers(0, 5, 2)
    rows = [row(float(rng.integers(0, 50)), *at)]
    every_s = float(rng.choice([1.0, 2.0, 5.0, 10.0]))
    for _ in range(int(rng.integers(8, 22))):
        to = at.copy()
        axis = int(rng.integers(2))
        to[axis] = np.clip(to[axis] + 75.0 * rng.choice([-2, -1, 1, 2, 4]), 0.0, 600.0)
        if not np.array_equal(at, to):
            rows += drive(
                [tuple(at), tuple(to)], float(rng.choice([3.0, 8.0, 13.0])), every_s, end_s(rows) + 1.0
            )
        at = to
        wait = rng.choice([0, 0, 20, 100, 310, 930], p=[0.3, 0.2, 0.2, 0.2, 0.05, 0.05])
        rows += stand(tuple(at), end_s(rows), float(wait), float(rng.choice([3.0, 10.0])))
        if rng.random() < 0.15:
            rows.append(row(end_s(rows) + float(rng.choice([100, 121, 900])), *at))
    noise = 2e-5 * rng.normal(0.0, rng.choice([0.0, 1.0, 2.0, 5.0]), (len(rows), 2))
    out: list[Row] = []
    for (t_us, lon, lat), (dx, dy) in zip(rows, noise.tolist(), strict=True):
        out.append((t_us, lon + dx, lat + dy))
        what = rng.random()
        if what < 0.01:
            out.append(out[-1])
        elif what < 0.02:
            out.append((t_us + 100_000, 5.02, 52.0))
        elif what < 0.03:
            out.append((t_us - 3_000_000, lon, lat))
        elif what < 0.04:
            out.append((t_us, float("nan"), lat))
    return out


LIVES = [life(seed) for seed in range(N_VEHICLES)]
N_PINGS = sum(len(rows) for rows in LIVES)


@pytest.fixture(scope="module")
def detectors() -> dict[int, Detector]:
    """Give a detector for each number of threads; each remembers what it searched from test to test."""
    return {n: Detector(STREETS, SETTINGS, threads=n) for n in THREADS}


@pytest.fixture(scope="module")
def whole() -> Found:
    """Give what each vehicle gives alone, at once, on one thread of a detector that never saw another."""
    parts = []
    for vehicle, rows in enumerate(LIVES):
        detector = Detector(STREETS, SETTINGS, threads=1)
        states = new_states(N_VEHICLES)
        parts.append(detector.feed(states, *columns(rows, vehicle)))
        parts.append(detector.close(states))
    return joined(parts)


def assert_same(a: Found, b: Found) -> None:
    """Compare two findings to the bit."""
    for name in ("passages", "sections", "unfinished", "trips"):
        left, right = getattr(a, name), getattr(b, name)
        assert left.dtype.names is not None
        for field in left.dtype.names:
            assert left[field].tobytes() == right[field].tobytes(), f"{name}.{field}"
    assert a.dropped.tolist() == b.dropped.tolist()
    assert a.n_used == b.n_used


def woven(seed: int) -> tuple[Any, ...]:
    """Interleave the vehicles at random, each in its own order."""
    labels = np.repeat(np.arange(N_VEHICLES), [len(rows) for rows in LIVES])
    np.random.default_rng(seed).shuffle(labels)
    every = [iter(rows) for rows in LIVES]
    t_us, lon, lat = zip(*(next(every[v]) for v in labels.tolist()), strict=True)
    return labels.astype(np.int32), np.array(t_us, np.int64), np.array(lon), np.array(lat)


def saved(states: Any) -> Any:
    """Carry the records through their columns, as the store does."""
    return states_from_columns(carry_columns(states))


def run(detector: Detector, args: tuple[Any, ...], cuts: list[int], is_saved: bool) -> Found:
    """Feed in chunks, each from a carry that may have been away; check the counts of each."""
    states = new_states(N_VEHICLES)
    parts = []
    for a, b in pairwise([0, *cuts, len(args[0])]):
        before = held_rows(states)
        states = saved(states) if is_saved else states
        parts.append(detector.feed(states, *(column[a:b] for column in args)))
        check_counts(parts[-1], b - a, held_rows(states) - before)
    states = saved(states) if is_saved else states
    return joined([*parts, detector.close(states)])


def test_lives_are_full_of_events(whole: Found) -> None:
    """The vehicles of this file meet what the other tests are about, and it makes sense."""
    check_all(whole, STREETS)
    assert len(whole.passages) > 30
    assert len(whole.sections) > 15
    assert len(set(whole.unfinished["reason"].tolist())) >= 3
    assert len(set(whole.trips["end_reason"].tolist())) >= 3
    assert (whole.dropped > 0).sum() >= 4


@hypothesis_settings(deadline=None, max_examples=40)
@given(
    seed=st.integers(0, 10**6),
    threads=st.sampled_from(THREADS),
    cuts=st.lists(st.integers(0, N_PINGS), max_size=12).map(sorted),
    is_saved=st.booleans(),
)
def test_any_cut_weave_and_threads_give_the_same(
    detectors: dict[int, Detector], whole: Found, seed: int, threads: int, cuts: list[int], is_saved: bool
) -> None:
    """Chunks cut anywhere (empty ones too), vehicles interleaved at will, any threads: the same rows."""
    assert_same(whole, run(detectors[threads], woven(seed), cuts, is_saved))


def test_one_ping_a_chunk_gives_the_same(detectors: dict[int, Detector], whole: Found) -> None:
    """The hardest cut: every ping a chunk of its own, each from a saved carry."""
    assert_same(whole, run(detectors[1], woven(5), list(range(1, N_PINGS)), is_saved=True))


@pytest.mark.parametrize("threads", THREADS)
def test_rows_come_in_the_same_order_for_any_threads(detectors: dict[int, Detector], threads: int) -> None:
    """Within one feed rows stand by vehicle and in the order they were found, whatever the threads."""
    one, many = (d.feed(new_states(N_VEHICLES), *woven(8)) for d in (detectors[1], detectors[threads]))
    assert_same(one, many)
    assert one.passages["vehicle_ix"].tolist() == sorted(one.passages["vehicle_ix"].tolist())


def test_inputs_are_left_alone(detectors: dict[int, Detector]) -> None:
    """Feeding changes the records alone, and not the columns."""
    args = woven(2)
    before = [column.copy() for column in args]
    detectors[3].feed(new_states(N_VEHICLES), *args)
    for old, new in zip(before, args, strict=True):
        assert old.tobytes() == new.tobytes()


def test_carry_survives_its_columns(detectors: dict[int, Detector]) -> None:
    """Columns made of records, records made of columns, columns again: the same; unused room is not kept."""
    states = new_states(N_VEHICLES)
    detectors[1].feed(states, *(column[: N_PINGS // 2] for column in woven(3)))
    assert states["n_columns"].max() > 1
    first, second = carry_columns(states), carry_columns(saved(states))
    assert set(first) == set(second) == set(STATE.names or ())
    for name, value in first.items():
        # A list is its values and how many each record has.
        left, right = (v if isinstance(v, tuple) else (v,) for v in (value, second[name]))
        assert [part.tobytes() for part in left] == [part.tobytes() for part in right], name


def test_carry_of_another_form_is_refused(detectors: dict[int, Detector]) -> None:
    """A missing column and a list longer than its room are told by name."""
    whole_columns = carry_columns(new_states(2))
    missing = {name: value for name, value in whole_columns.items() if name != "reach_m"}
    with pytest.raises(ValueError, match="reach_m"):
        states_from_columns(missing)
    long = {**whole_columns, "arrive_us": (np.zeros(MAX_KEPT + 3, np.int64), np.array([0, MAX_KEPT + 3]))}
    with pytest.raises(ValueError, match=rf"arrive_us.*vehicle 1.*{MAX_KEPT + 3}.*{MAX_KEPT}"):
        states_from_columns(long)
