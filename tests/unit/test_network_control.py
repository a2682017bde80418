"""What governs a junction, and on which side people drive. Rules: OSM wiki (METHODS.md section 2)."""

from pathlib import Path

import pytest

from stream.config import load_settings
from tests.sketch import Sketch, cross
from tests.unit.test_network_junctions import dual, jog, ring

SIGNALS = {"highway": "traffic_signals"}


def controls(sketch: Sketch, folder: Path) -> dict[int, str]:
    """Give the control of each junction by its id."""
    table = sketch.build(folder).tables["junction"]
    return dict(table.select("junction_id", "control").iter_rows())


def on_north_arm(at_m: float, tags: dict[str, str], **way: str) -> Sketch:
    """Give a cross with a tagged node up the northern arm, whose way is drawn away from the junction."""
    sketch = cross()
    sketch.node(61, 0, at_m, tags)
    sketch.way(12, [1, 61, 2], **way)
    return sketch


@pytest.mark.parametrize(
    ("tags", "control"),
    [
        (SIGNALS, "signals"),
        ({"highway": "stop"}, "stop"),
        ({"highway": "give_way"}, "give_way"),
        ({"highway": "crossing", "crossing": "traffic_signals"}, "crossing_signals"),
        ({"highway": "mini_roundabout"}, "roundabout"),
        ({"highway": "traffic_signals", "traffic_signals": "emergency"}, "none"),
        ({"highway": "stop", "stop": "all"}, "stop"),
        ({}, "none"),
    ],
)
def test_sign_on_the_junction_node_governs_it(tmp_path: Path, tags: dict[str, str], control: str) -> None:
    """Each sign gives its control; none gives none."""
    sketch = cross()
    sketch.node(1, 0, 0, tags)
    assert controls(sketch, tmp_path) == {1: control}


@pytest.mark.parametrize(("at_m", "control"), [(12.0, "signals"), (39.5, "signals"), (40.5, "none")])
def test_signals_at_a_stop_line_within_reach_govern(tmp_path: Path, at_m: float, control: str) -> None:
    """A signal node up an arm counts within `signal_reach_m` of the mouth, 40 m by default."""
    assert controls(on_north_arm(at_m, SIGNALS), tmp_path) == {1: control}


@pytest.mark.parametrize(
    ("value", "control"), [("backward", "signals"), ("forward", "none"), ("both", "signals")]
)
def test_direction_key_says_whom_a_stop_line_governs(tmp_path: Path, value: str, control: str) -> None:
    """The way leads away from the junction: only `backward` looks at drivers who come in."""
    sketch = on_north_arm(15.0, {**SIGNALS, "traffic_signals:direction": value})
    assert controls(sketch, tmp_path) == {1: control}


def test_sign_on_a_one_way_exit_does_not_govern(tmp_path: Path) -> None:
    """Signals past the junction, on a street that leads away, are no concern of those who enter."""
    assert controls(on_north_arm(15.0, SIGNALS, oneway="yes"), tmp_path) == {1: "none"}


@pytest.mark.parametrize(("at_m", "governed"), [(10.0, 1), (40.0, 2)])
def test_sign_without_direction_governs_the_nearer_junction(
    tmp_path: Path, at_m: float, governed: int
) -> None:
    """Between junctions 50 m apart, within reach of both, the nearer one has it."""
    sketch = jog(50)
    sketch.node(61, at_m, 0, {"highway": "give_way"})
    sketch.way(10, [3, 1, 61, 2, 4], {"highway": "primary"})
    found = controls(sketch, tmp_path)
    assert found == {1: "none", 2: "none"} | {governed: "give_way"}


def test_direction_key_wins_over_nearness(tmp_path: Path) -> None:
    """A stop sign 20 m from junction 1 that looks at drivers towards 2 governs 2."""
    sketch = jog(50)
    sketch.node(61, 20, 0, {"highway": "stop", "direction": "forward"})
    sketch.way(10, [3, 1, 61, 2, 4], {"highway": "primary"})
    assert controls(sketch, tmp_path) == {1: "none", 2: "stop"}


def test_signals_win_over_all_else(tmp_path: Path) -> None:
    """A junction with signals and a give-way sign (for turners, say) is signalled."""
    sketch = on_north_arm(15.0, {"highway": "give_way"})
    sketch.node(1, 0, 0, SIGNALS)
    assert controls(sketch, tmp_path) == {1: "signals"}


def test_signals_inside_a_cluster_govern_it(tmp_path: Path) -> None:
    """A signal node on any of a dual carriageway's crossings governs the whole junction."""
    sketch = dual()
    sketch.node(3, -7.5, -7.5, SIGNALS)
    assert controls(sketch, tmp_path) == {1: "signals"}


@pytest.mark.parametrize(("kind", "control"), [("roundabout", "roundabout"), ("circular", "none")])
def test_ring_is_its_own_control_only_with_right_of_way(tmp_path: Path, kind: str, control: str) -> None:
    """A roundabout's ring has the right of way; a circular one goes by its signs."""
    assert controls(ring(kind=kind), tmp_path) == {1: control}


def test_signals_at_a_roundabout_win(tmp_path: Path) -> None:
    """A signalled roundabout is a signalled junction."""
    sketch = ring()
    sketch.node(1, 15.0, 0.0, SIGNALS)
    assert controls(sketch, tmp_path) == {1: "signals"}


@pytest.mark.parametrize(("clockwise", "side"), [(False, "right"), (True, "left")])
def test_rings_tell_the_driving_side(tmp_path: Path, clockwise: bool, side: str) -> None:
    """Rings are drawn as driven: clockwise where people drive on the left (OSM wiki, junction=roundabout)."""
    built = ring(clockwise=clockwise).build(tmp_path)
    assert built.tables["junction"]["driving_side"].to_list() == [side]


@pytest.mark.parametrize(
    ("direction", "side"), [("clockwise", "left"), ("anticlockwise", "right"), ("", "right")]
)
def test_mini_roundabouts_tell_the_driving_side(tmp_path: Path, direction: str, side: str) -> None:
    """`direction=clockwise` on a mini-roundabout means driving on the left."""
    sketch = cross()
    sketch.node(1, 0, 0, {"highway": "mini_roundabout", **({"direction": direction} if direction else {})})
    assert sketch.build(tmp_path).tables["junction"]["driving_side"].to_list() == [side]


def test_configured_driving_side_wins(tmp_path: Path) -> None:
    """What the user says is not overruled by a ring."""
    settings = load_settings(over={"network": {"driving_side": "left"}})
    assert ring().build(tmp_path, settings).tables["junction"]["driving_side"].to_list() == ["left"]


def test_driving_side_is_right_when_nothing_tells(tmp_path: Path) -> None:
    """Most places drive on the right; the user can say otherwise."""
    assert cross().build(tmp_path).tables["junction"]["driving_side"].to_list() == ["right"]
