"""What OpenStreetMap tags mean to a car: direction, access, speed limits, signs, turn restrictions.

Pure functions over a tag mapping; each gives a value or a named reason for leaving a thing out.
Source: the OSM wiki pages of the keys, as summed up in METHODS.md section 2.
"""

from collections.abc import Mapping
from typing import NamedTuple

from stream.network import raw

Tags = Mapping[str, str]

# More specific keys come first and win over those after them.
VEHICLES = ("motorcar", "motor_vehicle", "vehicle", "access")
_NOT_PUBLIC = ("no", "private", "permit", "residents", "delivery", "military", "emergency")
_OTHERS_ONLY = ("agricultural", "forestry", "bus", "psv", "taxi", "hov", "hgv", "bicycle", "foot")
CLOSED = frozenset((*_NOT_PUBLIC, *_OTHERS_ONLY, "use_sidepath", "dismount"))
LIMITED = frozenset(("destination", "permissive", "customers"))
OPPOSITE = frozenset(("-1", "reverse"))
YES = frozenset(("yes", "true", "1"))
NO = frozenset(("no", "false", "0"))
CHANGING = frozenset(("reversible", "alternating"))
# Values of `traffic_signals` that are no signal of a junction.
OTHER_SIGNALS = frozenset(
    ("emergency", "blinker", "blink_mode", "ramp_meter", "level_crossing", "bridge", "tunnel", "no")
)
CAR_EXCEPTIONS = frozenset(("motorcar", "motor_vehicle", "vehicle", "car"))
SPEED_UNITS_KMH = {"": 1.0, "km/h": 1.0, "kmh": 1.0, "kph": 1.0, "mph": 1.609344, "knots": 1.852}


class Way(NamedTuple):
    """What a car needs to know of a way; `reason` says why it may not use it, '' if it may."""

    reason: str
    open: int = 0
    ring: int = raw.RING_NONE
    limit_along_kmh: float = float("nan")
    limit_against_kmh: float = float("nan")
    is_limited: bool = False
    has_unread_limit: bool = False


def speed_kmh(text: str | None) -> float:
    """Read a `maxspeed` value; NaN where it is no number with a known unit.

    Examples: ``50`` is km/h, ``30 mph`` 48.280, ``10 knots`` 18.52; ``none``, ``walk``, ``signals`` and
    ``DE:urban`` are no numbers.
    """
    if text is None:
        return float("nan")
    text = text.strip().lower()
    digits = text.rstrip("abcdefghijklmnopqrstuvwxyz/ ")
    factor = SPEED_UNITS_KMH.get(text[len(digits) :].strip())
    plain = digits.replace(".", "", 1)
    if factor is None or not (plain.isascii() and plain.isdigit()):
        return float("nan")
    value = float(digits) * factor
    return value if 0 < value <= 400 else float("nan")


def _access(tags: Tags, suffix: str) -> str | None:
    """Give the value of the most specific access key that is set, None if none is."""
    for key in VEHICLES:
        value = tags.get(key + suffix)
        if value is not None:
            return value
    return None


def _directions(tags: Tags, highway: str, ring: int) -> int:
    """Give the directions that `oneway` and what implies it leave open; 0 where they change."""
    value = next((tags[k] for k in ("oneway:motorcar", "oneway:motor_vehicle", "oneway") if k in tags), None)
    if value is None:
        implied = highway == "motorway" or ring == raw.RING_ROUNDABOUT
        return raw.ALONG if implied else raw.ALONG | raw.AGAINST
    if value in CHANGING:
        return 0
    if value in OPPOSITE:
        return raw.AGAINST
    return raw.ALONG if value in YES else raw.ALONG | raw.AGAINST


def _closed_directions(tags: Tags) -> int:
    """Give the directions closed by access keys with :forward and :backward."""
    closed = 0
    for suffix, bit in ((":forward", raw.ALONG), (":backward", raw.AGAINST)):
        if (_access(tags, suffix) or "yes") in CLOSED:
            closed |= bit
    return closed


def read_way(tags: Tags, classes: frozenset[str]) -> Way:
    """Judge a way by its tags.

    Parameters
    ----------
    tags
        Of a way that has a `highway` key.
    classes
        Highway values taken as roads.
    """
    highway = tags["highway"]
    if highway not in classes:
        return Way("class")
    if tags.get("area") in YES:
        return Way("area")
    access = _access(tags, "")
    if access is not None and set(access.split(";")) <= CLOSED:
        return Way("access")
    junction = tags.get("junction")
    ring = {"roundabout": raw.RING_ROUNDABOUT, "circular": raw.RING_CIRCULAR}.get(
        junction or "", raw.RING_NONE
    )
    directions = _directions(tags, highway, ring)
    if directions == 0:
        return Way("direction_changes")
    directions &= ~_closed_directions(tags)
    if directions == 0:
        return Way("access")
    both = speed_kmh(tags.get("maxspeed"))
    along, against = speed_kmh(tags.get("maxspeed:forward")), speed_kmh(tags.get("maxspeed:backward"))
    return Way(
        "",
        directions,
        ring,
        both if along != along else along,
        both if against != against else against,
        access in LIMITED,
        both != both and "maxspeed" in tags,
    )


def _governs(value: str | None) -> int:
    return {"forward": raw.GOVERNS_ALONG, "backward": raw.GOVERNS_AGAINST}.get(value or "", 0)


def read_sign(tags: Tags) -> int:
    """Give the sign bits of a node, 0 where it carries no sign that matters.

    The direction bits hold only on a node of exactly one way; the caller clears them elsewhere.
    """
    kind = tags.get("highway")
    if kind == "traffic_signals":
        if tags.get("traffic_signals") in OTHER_SIGNALS:
            return 0
        only_for_walkers = tags.get("traffic_signals") in ("pedestrian_crossing", "crossing")
        sign = raw.CROSSING_SIGNALS if only_for_walkers else raw.SIGNALS
        return sign | _governs(tags.get("traffic_signals:direction", tags.get("direction")))
    if kind in ("stop", "give_way"):
        sign = raw.STOP if kind == "stop" else raw.GIVE_WAY
        return sign | _governs(tags.get(f"{kind}:direction", tags.get("direction")))
    if kind == "mini_roundabout":
        return raw.MINI_ROUNDABOUT | (raw.MINI_CLOCKWISE if tags.get("direction") == "clockwise" else 0)
    has_crossing_signals = tags.get("crossing") == "traffic_signals" or tags.get("crossing:signals") in YES
    return raw.CROSSING_SIGNALS if kind == "crossing" and has_crossing_signals else 0


class Turn(NamedTuple):
    """What a restriction relation says to cars; `reason` says why it is left out, '' if it is not."""

    reason: str
    is_only: bool = False
    is_reversal: bool = False
    is_timed: bool = False


def _kind(value: str) -> Turn | None:
    """Read a restriction value such as no_left_turn."""
    verb, _, what = value.partition("_")
    known = ("left_turn", "right_turn", "straight_on", "u_turn", "entry", "exit")
    if verb not in ("no", "only") or what not in known or (verb == "only" and what in ("entry", "exit")):
        return None
    return Turn("", verb == "only", what == "u_turn")


def read_turn(tags: Tags) -> Turn:
    """Judge a relation of type restriction by its tags.

    A value in `restriction:motorcar` and its likes wins over the plain `restriction`; a condition
    (`no_left_turn @ (Mo-Fr 07:00-09:00)`, or the older keys `hour_on` and `day_on`) makes it timed.
    """
    exempt = {part.strip() for part in tags.get("except", "").split(";")}
    if exempt & CAR_EXCEPTIONS:
        return Turn("cars_exempt")
    for key in ("restriction:motorcar", "restriction:motor_vehicle", "restriction:vehicle", "restriction"):
        if key in tags:
            turn = _kind(tags[key].strip())
            has_hours = any(f"{what}_on" in tags for what in ("hour", "day"))
            return turn._replace(is_timed=has_hours) if turn else Turn("unknown_value")
        timed = tags.get(key + ":conditional")
        if timed is not None:
            turn = _kind(timed.partition("@")[0].strip())
            return turn._replace(is_timed=True) if turn else Turn("unknown_value")
    is_other = any(key.startswith("restriction:") for key in tags)
    return Turn("other_vehicles" if is_other else "unknown_value")
