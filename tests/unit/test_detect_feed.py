"""The door of detection: what `Detector.feed` refuses, and what its arguments may look like."""

from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from stream.config import load_settings
from stream.detect.carry import new_states
from stream.detect.clean import place_kernel
from stream.detect.fused import group_kernel, pass_kernel
from stream.detect.records import PASSAGE, SECTION, TRIP, UNFINISHED, Found
from stream.detect.run import Detector
from tests.grid import columns, drive, joined
from tests.oracle.streets import grid_streets

STREETS = grid_streets()
ROWS = drive([(60.0, 150.0), (400.0, 150.0)])


@pytest.fixture(scope="module")
def detector() -> Detector:
    """Give a detector on two threads."""
    return Detector(STREETS, load_settings(), threads=2)


def run(detector: Detector, *args: Any) -> Found:
    """Feed a vehicle and close."""
    states = new_states(1)
    return joined([detector.feed(states, *args), detector.close(states)])


@pytest.mark.parametrize("short", range(4))
def test_columns_of_unlike_length_are_refused(detector: Detector, short: int) -> None:
    """Each column must have a value for each ping; nothing is taken otherwise."""
    args = [c[:-1] if k == short else c for k, c in enumerate(columns(ROWS))]
    states = new_states(1)
    with pytest.raises(ValueError, match="unlike length"):
        detector.feed(states, *args)
    assert same(states, new_states(1))


@pytest.mark.parametrize("vehicle", [-1, 1, 2**31 - 1])
def test_vehicle_without_a_record_is_refused(detector: Detector, vehicle: int) -> None:
    """A vehicle is a row of the records: neither below the first nor beyond the last."""
    v, *rest = columns(ROWS)
    v[7] = vehicle
    states = new_states(1)
    with pytest.raises(ValueError, match="without a record"):
        detector.feed(states, v, *rest)
    assert same(states, new_states(1))


def test_any_vehicle_without_records_is_refused(detector: Detector) -> None:
    """With no records at all, no ping can be taken."""
    with pytest.raises(ValueError, match="without a record"):
        detector.feed(new_states(0), *columns(ROWS))


def same(a: NDArray[Any], b: NDArray[Any]) -> bool:
    """Tell whether records are the same, field by field (between fields they hold anything)."""
    assert a.dtype.names is not None
    return all(a[name].tobytes() == b[name].tobytes() for name in a.dtype.names)


def changed(kind: str) -> list[NDArray[Any]]:
    """Give the columns in another guise."""
    args = [np.repeat(c, 2)[::2] if kind == "strided" else c for c in columns(ROWS)]
    if kind == "wide":
        args[0] = args[0].astype(np.int64)
    for c in args:
        c.flags.writeable = kind != "frozen"
    return args


@pytest.mark.parametrize("kind", ["strided", "wide", "frozen"])
def test_columns_may_come_in_any_guise(detector: Detector, kind: str) -> None:
    """Views with steps, wider whole numbers and frozen arrays give the same, and compile nothing anew."""
    plain = run(detector, *columns(ROWS))
    compiled = [len(k.signatures) for k in (pass_kernel, place_kernel, group_kernel)]
    other = run(detector, *changed(kind))
    assert [len(k.signatures) for k in (pass_kernel, place_kernel, group_kernel)] == compiled
    assert len(plain.passages) == 2
    for name in ("passages", "sections", "unfinished", "trips"):
        assert same(getattr(plain, name), getattr(other, name))


def test_findings_have_their_stated_form(detector: Detector) -> None:
    """Records of the stated types, also where nothing was found."""
    for found in (run(detector, *columns(ROWS)), run(detector, *columns([]))):
        assert found.passages.dtype == PASSAGE
        assert found.sections.dtype == SECTION
        assert found.unfinished.dtype == UNFINISHED
        assert found.trips.dtype == TRIP
        assert found.dropped.dtype == np.int64


def test_streets_are_left_alone(detector: Detector) -> None:
    """Neither building the index nor feeding changes the streets."""
    before = {name: array.copy() for name, array in STREETS.arrays().items()}
    run(Detector(STREETS, load_settings(), threads=1), *columns(ROWS))
    for name, array in STREETS.arrays().items():
        assert before[name].tobytes() == array.tobytes(), name


def test_vehicles_without_pings_keep_their_records(detector: Detector) -> None:
    """Feeding one vehicle leaves the records of all others as they are."""
    states = new_states(5)
    detector.feed(states, *columns(ROWS, vehicle=3))
    assert same(states[[0, 1, 2, 4]], new_states(4))
    assert states["n_pings"].tolist() == [0, 0, 0, len(ROWS), 0]
