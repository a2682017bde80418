"""What OSM tags mean to a car. Source of the rules: the OSM wiki pages of the keys (METHODS.md section 2)."""

import math

import pytest

from stream.network import raw
from stream.network.tags import read_sign, read_turn, read_way, speed_kmh

CLASSES = frozenset(("motorway", "motorway_link", "primary", "residential"))
BOTH = raw.ALONG | raw.AGAINST


@pytest.mark.parametrize(
    ("text", "kmh"),
    [
        ("50", 50.0),
        (" 30 ", 30.0),
        ("27.5", 27.5),
        ("30 mph", 48.280),  # 1 mph = 1.609344 km/h (international yard and pound, 1959)
        ("50 mph", 80.467),
        ("70 mph", 112.654),
        ("30mph", 48.280),
        ("10 knots", 18.520),  # 1 knot = 1.852 km/h (SI brochure)
        ("60 km/h", 60.0),
    ],
)
def test_speed_with_a_known_unit_is_a_number(text: str, kmh: float) -> None:
    """A plain number is km/h; miles and knots are turned into it (OSM wiki, key maxspeed)."""
    assert speed_kmh(text) == pytest.approx(kmh, abs=5e-4)


@pytest.mark.parametrize(
    "text",
    [None, "", "none", "walk", "signals", "DE:urban", "50;30", "fast", "0", "-5", "1.2.3", "999", "30 mi"],
)
def test_speed_that_is_no_number_is_nan(text: str | None) -> None:
    """Words, lists, zero and unknown units give no limit, so the class default holds."""
    assert math.isnan(speed_kmh(text))


@pytest.mark.parametrize(
    ("tags", "directions"),
    [
        ({}, BOTH),
        ({"oneway": "yes"}, raw.ALONG),
        ({"oneway": "true"}, raw.ALONG),
        ({"oneway": "1"}, raw.ALONG),
        ({"oneway": "-1"}, raw.AGAINST),
        ({"oneway": "reverse"}, raw.AGAINST),
        ({"oneway": "no"}, BOTH),
        ({"highway": "motorway"}, raw.ALONG),
        ({"highway": "motorway", "oneway": "no"}, BOTH),
        ({"highway": "motorway_link"}, BOTH),
        ({"junction": "roundabout"}, raw.ALONG),
        ({"junction": "roundabout", "oneway": "-1"}, raw.AGAINST),
        ({"junction": "circular"}, BOTH),
        ({"junction": "circular", "oneway": "yes"}, raw.ALONG),
        ({"vehicle:backward": "no"}, raw.ALONG),
        ({"motor_vehicle:forward": "no"}, raw.AGAINST),
        ({"oneway": "yes", "oneway:motor_vehicle": "no"}, BOTH),
    ],
)
def test_direction_follows_oneway_and_what_implies_it(tags: dict[str, str], directions: int) -> None:
    """One-way is stated, or implied by motorways and roundabouts, but not by circular rings or links."""
    way = read_way({"highway": "primary", **tags}, CLASSES)
    assert (way.reason, way.open) == ("", directions)


@pytest.mark.parametrize(
    ("tags", "reason"),
    [
        ({"highway": "service"}, "class"),
        ({"highway": "track"}, "class"),
        ({"highway": "footway"}, "class"),
        ({"area": "yes"}, "area"),
        ({"access": "no"}, "access"),
        ({"access": "private"}, "access"),
        ({"vehicle": "no"}, "access"),
        ({"motor_vehicle": "private"}, "access"),
        ({"motorcar": "no", "motor_vehicle": "yes"}, "access"),
        ({"motor_vehicle": "agricultural;forestry"}, "access"),
        ({"oneway": "reversible"}, "direction_changes"),
        ({"oneway": "alternating"}, "direction_changes"),
        ({"vehicle:forward": "no", "vehicle:backward": "no"}, "access"),
        ({"oneway": "yes", "motor_vehicle:forward": "no"}, "access"),
    ],
)
def test_way_that_no_car_may_use_is_left_out_with_its_reason(tags: dict[str, str], reason: str) -> None:
    """Each way that is left out says why, so that the report can count it."""
    assert read_way({"highway": "primary", **tags}, CLASSES).reason == reason


@pytest.mark.parametrize(
    "tags",
    [
        {"access": "no", "vehicle": "yes"},
        {"vehicle": "no", "motor_vehicle": "yes"},
        {"access": "private", "motor_vehicle": "designated"},
        {"motor_vehicle": "no", "motorcar": "yes"},
        {"bicycle": "no", "foot": "no"},
        {"motor_vehicle": "agricultural;destination"},
    ],
)
def test_more_specific_access_wins(tags: dict[str, str]) -> None:
    """Access < vehicle < motor_vehicle < motorcar (OSM wiki, key access)."""
    assert read_way({"highway": "residential", **tags}, CLASSES).reason == ""


def test_destination_and_permissive_are_open_and_noted() -> None:
    """Roads for destination traffic stay roads, counted apart."""
    assert read_way({"highway": "primary", "access": "permissive"}, CLASSES).is_limited
    assert read_way({"highway": "primary", "motor_vehicle": "destination"}, CLASSES).is_limited
    assert not read_way({"highway": "primary"}, CLASSES).is_limited


def test_service_road_is_taken_when_listed() -> None:
    """The configured classes decide, nothing else."""
    assert read_way({"highway": "service"}, frozenset(("service",))).reason == ""


def test_limit_by_direction_wins() -> None:
    """maxspeed:forward and :backward win over maxspeed, each for its direction."""
    way = read_way({"highway": "primary", "maxspeed": "60", "maxspeed:backward": "30 mph"}, CLASSES)
    assert way.limit_along_kmh == 60.0
    assert way.limit_against_kmh == pytest.approx(48.28032)


def test_limit_that_is_no_number_is_noted() -> None:
    """A limit in words is no limit, but it is counted; an absent one is not."""
    assert read_way({"highway": "primary", "maxspeed": "DE:urban"}, CLASSES).has_unread_limit
    assert not read_way({"highway": "primary"}, CLASSES).has_unread_limit


@pytest.mark.parametrize(
    ("tags", "sign"),
    [
        ({"highway": "traffic_signals"}, raw.SIGNALS),
        (
            {"highway": "traffic_signals", "traffic_signals:direction": "backward"},
            raw.SIGNALS | raw.GOVERNS_AGAINST,
        ),
        ({"highway": "traffic_signals", "crossing": "traffic_signals"}, raw.SIGNALS),
        ({"highway": "traffic_signals", "traffic_signals": "emergency"}, 0),
        ({"highway": "traffic_signals", "traffic_signals": "ramp_meter"}, 0),
        ({"highway": "traffic_signals", "traffic_signals": "blinker"}, 0),
        ({"highway": "traffic_signals", "traffic_signals": "pedestrian_crossing"}, raw.CROSSING_SIGNALS),
        ({"highway": "crossing", "crossing": "traffic_signals"}, raw.CROSSING_SIGNALS),
        (
            {"highway": "crossing", "crossing": "uncontrolled", "crossing:signals": "yes"},
            raw.CROSSING_SIGNALS,
        ),
        ({"highway": "crossing", "crossing": "zebra"}, 0),
        ({"highway": "stop"}, raw.STOP),
        ({"highway": "stop", "direction": "forward"}, raw.STOP | raw.GOVERNS_ALONG),
        ({"highway": "stop", "direction": "both"}, raw.STOP),
        ({"highway": "give_way", "direction": "backward"}, raw.GIVE_WAY | raw.GOVERNS_AGAINST),
        ({"highway": "mini_roundabout"}, raw.MINI_ROUNDABOUT),
        ({"highway": "mini_roundabout", "direction": "clockwise"}, raw.MINI_ROUNDABOUT | raw.MINI_CLOCKWISE),
        ({"highway": "bus_stop"}, 0),
        ({"barrier": "gate"}, 0),
    ],
)
def test_node_tags_give_signs(tags: dict[str, str], sign: int) -> None:
    """Signals, stop, give way, crossing signals and mini-roundabouts, with the direction they govern."""
    assert read_sign(tags) == sign


@pytest.mark.parametrize("what", ["left_turn", "right_turn", "straight_on", "u_turn"])
@pytest.mark.parametrize("verb", ["no", "only"])
def test_restriction_values_are_read(verb: str, what: str) -> None:
    """no_* forbids a movement, only_* forbids all others (OSM wiki, relation restriction)."""
    turn = read_turn({"type": "restriction", "restriction": f"{verb}_{what}"})
    assert (turn.reason, turn.is_only, turn.is_reversal) == ("", verb == "only", what == "u_turn")


@pytest.mark.parametrize(
    ("tags", "reason"),
    [
        ({"restriction": "no_left_turn", "except": "psv;motorcar"}, "cars_exempt"),
        ({"restriction": "no_left_turn", "except": "motor_vehicle"}, "cars_exempt"),
        ({"restriction:hgv": "no_left_turn"}, "other_vehicles"),
        ({"restriction:bus": "only_straight_on"}, "other_vehicles"),
        ({"restriction:hgv:conditional": "no_left_turn @ (weight>7.5)"}, "other_vehicles"),
        ({"restriction": "give_way"}, "unknown_value"),
        ({"restriction": "only_entry"}, "unknown_value"),
        ({"restriction:conditional": "whenever"}, "unknown_value"),
        ({}, "unknown_value"),
    ],
)
def test_restriction_not_for_cars_is_left_out_with_its_reason(tags: dict[str, str], reason: str) -> None:
    """Exemptions and restrictions of other vehicles don't bind cars."""
    assert read_turn({"type": "restriction", **tags}).reason == reason


@pytest.mark.parametrize(
    ("tags", "is_timed"),
    [
        ({"restriction": "no_left_turn"}, False),
        ({"restriction": "no_left_turn", "except": "psv;bicycle"}, False),
        ({"restriction:motorcar": "no_left_turn"}, False),
        ({"restriction:conditional": "no_left_turn @ (Mo-Fr 07:00-09:00)"}, True),
        ({"restriction:motor_vehicle:conditional": "no_left_turn @ (Mo-Fr 07:00-09:00)"}, True),
        ({"restriction": "no_left_turn", "hour_on": "07:00", "hour_off": "09:00"}, True),
    ],
)
def test_restriction_with_a_condition_is_timed(tags: dict[str, str], is_timed: bool) -> None:
    """A conditional restriction is kept as timed, not as banned."""
    turn = read_turn({"type": "restriction", **tags})
    assert (turn.reason, turn.is_timed) == ("", is_timed)
