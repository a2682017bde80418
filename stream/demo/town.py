"""The invented town: a plan of our own at an invented place in open water; no real street, no real name.

Centre: a grid under signals with one-way pairs. Outskirts: a dual carriageway, a roundabout, a
mini-roundabout, priority junctions on wide roads, dead ends, and a stub of a motorway with its ramps.
"""

import math

from stream.demo.plan import Plan

LON, LAT = 4.0, 55.0  # in the North Sea: nobody lives there
TIME_ZONE = "Etc/GMT-1"  # one hour ahead of UTC, no summer time
UTC_OFFSET_S = 3600
TURN_DEG = 9.0

COLUMN_M = (-365.0, -246.0, -121.0, 0.0, 117.0, 238.0, 352.0)
ROW_M = (-296.0, -184.0, -75.0, 38.0, 149.0, 262.0)
# Class, limit and direction (1 as numbered, -1 against, 0 both ways) of each column and row.
COLUMN_ROAD = (
    ("tertiary", 40, 0),
    ("tertiary", 40, 1),
    ("tertiary", 40, -1),
    ("secondary", 50, 0),
    ("residential", 30, 0),
    ("tertiary", 40, 0),
    ("residential", 30, 0),
)
ROW_ROAD = (
    ("tertiary", 40, 0),
    ("residential", 30, 0),
    ("secondary", 50, 0),
    ("tertiary", 40, -1),
    ("tertiary", 40, 1),
    ("tertiary", 40, 0),
)
SIGNAL_COLUMNS = (1, 2, 3, 5)
SIGNAL_ROWS = (0, 2, 3, 4, 5)
RING_M = 17.0


def _key(column: int, row: int) -> str:
    return f"g{column}.{row}"


def _centre(plan: Plan) -> None:
    """Lay the grid: streets, signals (some on the node, some on the stop lines), yields, restrictions."""
    for c, x in enumerate(COLUMN_M):
        for r, y in enumerate(ROW_M):
            shift = ((c * 5 + r * 3) % 7 - 3, (c * 2 + r * 5) % 7 - 3)
            plan.node(_key(c, r), x + 1.5 * shift[0], y + 1.5 * shift[1])
    columns = [[_key(c, r) for r in range(len(ROW_M))] for c in range(len(COLUMN_M))]
    rows = [list(row) for row in zip(*columns, strict=True)]
    for kind, lines, roads in (("Column", columns, COLUMN_ROAD), ("Row", rows, ROW_ROAD)):
        for i, (nodes, (highway, kmh, sense)) in enumerate(zip(lines, roads, strict=True)):
            one_way = {"oneway": "yes"} if sense else {}
            plan.way(nodes if sense >= 0 else nodes[::-1], highway, kmh, name=f"{kind} {i}", **one_way)
    for c in SIGNAL_COLUMNS:
        for r in SIGNAL_ROWS:
            plan.signals[_key(c, r)] = _key(c, r)
    plan.banned[_key(2, 2), _key(3, 2), _key(3, 3)] = "no_left_turn"
    plan.banned[_key(4, 2), _key(3, 2), _key(3, 1)] = "no_left_turn"
    plan.banned[_key(3, 4), _key(3, 5), _key(4, 5)] = "no_right_turn"
    plan.banned[_key(5, 0), _key(5, 1), _key(5, 2)] = "only_straight_on"


def _west(plan: Plan) -> None:
    """Lay the roundabout with a flared arm, its roads, and a dead end with a side street."""
    x, y = -800.0, -75.0
    ring = [
        plan.node(f"o{i}", x + RING_M * math.cos(i * math.pi / 4), y + RING_M * math.sin(i * math.pi / 4))
        for i in range(8)
    ]
    plan.way([*ring, ring[0]], "secondary", 30, junction="roundabout")
    plan.node("w1", -640.0, -65.0)
    plan.way(["o0", "w1", _key(0, 2)], "secondary", 60, name="West Road")
    plan.way(["w1", _key(0, 0)], "tertiary", 50, name="West Fork")
    for a, b in ((_key(0, 0), _key(0, 2)), (_key(0, 2), _key(0, 0))):
        plan.banned[a, "w1", b] = "no_right_turn" if a == _key(0, 0) else "no_left_turn"
    plan.banned["w1", _key(0, 0), _key(0, 1)] = "no_left_turn"
    plan.banned[_key(0, 1), _key(0, 0), "w1"] = "no_right_turn"
    plan.node("w2", x - 30.0, y)
    plan.node("w3", -1110.0, -90.0)
    plan.node("w4", -1420.0, -40.0)
    plan.way(["w2", "o5"], "secondary", 50, oneway="yes")
    plan.way(["o3", "w2"], "secondary", 50, oneway="yes")
    plan.way(["w2", "w3"], "secondary", 60, name="Far West Road")
    plan.way(["w3", "w4"], "secondary", 60, name="Far West Road")
    plan.way(plan.bent("w3", plan.node("w5", -1090.0, 240.0), 25.0), "residential", 30)
    plan.node("n1", -800.0, 520.0)
    plan.node("n2", -790.0, 850.0)
    plan.node("s1", -800.0, -520.0)
    plan.way(["o2", *plan.bent("o2", "n1", 18.0)[1:]], "tertiary", 50, name="Ring Lane")
    plan.way(["n1", "n2"], "tertiary", 50, name="Ring Lane")
    plan.way(plan.bent("o6", "s1", -20.0), "tertiary", 50, name="Ring Lane")


def _east(plan: Plan) -> None:
    """Lay the dual carriageway: a crossing under signals, one of minor roads, and its two ends."""
    names = {"e1": (470.0, -75.0), "e9": (1290.0, -75.0), "e10": (1600.0, -110.0)}
    south = {"a1": (520.0, -84.0), "a2": (620.0, -84.0), "a3": (900.0, -84.0), "a4": (1240.0, -84.0)}
    north = {"b1": (520.0, -66.0), "b2": (620.0, -66.0), "b3": (900.0, -66.0), "b4": (1240.0, -66.0)}
    for key, (x, y) in {**names, **south, **north}.items():
        plan.node(key, x, y)
    plan.way([_key(6, 2), "e1"], "secondary", 50, name="Boulevard")
    plan.way(["e1", *south, "e9"], "primary", 60, name="Boulevard", oneway="yes")
    plan.way(["e9", *reversed(north), "e1"], "primary", 60, name="Boulevard", oneway="yes")
    plan.way(["e9", "e10"], "primary", 70, name="East Road")
    plan.node("m1", 620.0, 520.0)
    plan.node("m2", 620.0, 850.0)
    plan.node("m3", 620.0, -520.0)
    plan.node("m4", 630.0, -800.0)
    plan.way(["m4", "m3", "a2", "b2", "m1", "m2"], "tertiary", 50, name="East Lane")
    plan.node("k1", 905.0, -400.0)
    plan.node("k2", 900.0, 520.0)
    plan.way(["k1", "a3", "b3", "k2"], "unclassified", None, name="Field Lane")
    plan.banned["b1", "e1", "a1"] = "no_u_turn"
    plan.banned["a4", "e9", "b4"] = "no_u_turn"
    plan.signals["a2"] = plan.signals["b2"] = "a2"


def _north(plan: Plan) -> None:
    """Lay the wide road to the motorway, the cross roads and the houses between them."""
    for key, y in {"p1": 520.0, "p2": 850.0, "p3": 1370.0, "p4": 1620.0, "p5": 1920.0}.items():
        plan.node(key, 0.0, y)
    plan.way([_key(3, 5), "p1", "p2"], "primary", 60, name="North Road")
    plan.way(["p2", "p3"], "primary", 80, name="North Road")
    plan.way(["p3", "p4"], "primary", 80, name="North Road", bridge="yes", layer="1")
    plan.way(["p4", "p5"], "primary", 80, name="North Road")
    plan.node("q1", -250.0, 520.0, highway="mini_roundabout")
    if plan.is_left:
        plan.tags["q1"]["direction"] = "clockwise"
    plan.way(["n1", "q1", "p1"], "tertiary", 50, name="Cross Lane")
    plan.node("h1", 310.0, 520.0)
    plan.way(["p1", "h1", "m1", "k2"], "tertiary", 50, name="Cross Lane")
    plan.way(plan.bent(_key(1, 5), "q1", 9.0), "tertiary", 40)
    plan.way(["q1", plan.node("q2", -240.0, 700.0)], "residential", 30)
    plan.node("h2", 310.0, 850.0)
    plan.way(
        ["n2", *plan.bent("n2", "p2", -35.0)[1:-1], "p2", "h2", "m2"], "unclassified", None, name="Upper Lane"
    )
    for key, (x, y) in {
        "h3": (310.0, 690.0),
        "h4": (155.0, 700.0),
        "h5": (465.0, 685.0),
        "h6": (620.0, 690.0),
    }.items():
        plan.node(key, x, y)
    m = next(w for w in plan.ways if w.nodes[-1] == "m2" and "m1" in w.nodes)
    m.nodes.insert(m.nodes.index("m1") + 1, "h6")
    plan.way(["h1", "h3", "h2"], "residential", 30)
    plan.way(["h4", "h3", "h5", "h6"], "residential", 30)
    plan.way(["h4", plan.node("h7", 150.0, 790.0)], "residential", 30)
    plan.way(["h4", plan.node("h8", 60.0, 640.0)], "residential", 30)
    plan.way(["h5", plan.node("h9", 470.0, 610.0)], "living_street", 15)


def _south(plan: Plan) -> None:
    """Lay the southern roads: a wide road with minor crossings, and a lane of houses."""
    plan.node("t1", 0.0, -520.0)
    plan.node("t2", 10.0, -800.0)
    plan.node("t3", 30.0, -1180.0)
    plan.node("t0", 2.0, -575.0)
    plan.node("v4", 190.0, -800.0)
    plan.way([_key(3, 0), "t1"], "primary", 60, name="South Road")
    plan.way(["t0", "v4"], "tertiary", 50, name="South Fork", oneway="yes")
    plan.banned["t0", "v4", "t2"] = "no_right_turn"
    plan.banned["t2", "t0", "v4"] = "no_right_turn"
    plan.way(["t1", "t0", "t2", *plan.bent("t2", "t3", 22.0)[1:]], "primary", 70, name="South Road")
    plan.node("u1", -400.0, -520.0)
    plan.node("v1", 245.0, -520.0)
    plan.node("v2", 250.0, -800.0)
    plan.way(["s1", "u1", "t1", "v1", "m3"], "tertiary", 50, name="Lower Lane")
    plan.way(["t2", "v4", "v2", "m4"], "unclassified", None, name="Mill Lane")
    plan.way([_key(5, 0), "v1", "v2"], "residential", 30)
    plan.way(plan.bent(_key(0, 0), "u1", 15.0), "residential", 30)
    plan.way(["v2", plan.node("v3", 255.0, -960.0)], "residential", 30)
    plan.way(["u1", plan.node("u2", -410.0, -700.0)], "residential", 30)


def _motorway(plan: Plan) -> None:
    """Lay two carriageways under the North Road and the four ramps."""
    for sense, y, join in ((1, 1478.0, "p3"), (-1, 1512.0, "p4")):
        name = "x" if sense > 0 else "y"
        stations = (-1700.0, -620.0, -300.0, 0.0, 300.0, 620.0, 1700.0)
        keys = [plan.node(f"{name}{i}", sense * x, y) for i, x in enumerate(stations)]
        plan.way(keys, "motorway", 100, oneway="yes", ref=f"X{1 if sense > 0 else 2}")
        side = -1.0 if sense > 0 else 1.0
        off = [
            plan.node(f"{name}f{i}", sense * x, y + side * d)
            for i, (x, d) in enumerate(((-450.0, 22.0), (-160.0, 88.0)))
        ]
        on = [
            plan.node(f"{name}n{i}", sense * x, y + side * d)
            for i, (x, d) in enumerate(((160.0, 88.0), (450.0, 22.0)))
        ]
        plan.way([keys[1], *off, join], "motorway_link", 60, oneway="yes")
        plan.way([join, *on, keys[5]], "motorway_link", 60, oneway="yes")


# Approaches that yield: (node before, junction).
STOPS = (
    ("n2~p2~19", "p2"),
    ("h2", "p2"),
    ("u1", "t1"),
    ("v1", "t1"),
    ("v4", "t2"),
    ("k1", "a3"),
    ("k2", "b3"),
)
YIELDS = (
    ("q1", "p1"),
    ("h1", "p1"),
    ("q1", "n1"),
    (_key(0, 0), "w1"),
    ("t0", "v4"),
    ("h3", "h1"),
    ("h3", "h2"),
    ("h5", "h6"),
    ("xf1", "p3"),
    ("yf1", "p4"),
    ("w3~w5~1", "w3"),
    ("v2", "v1"),
    (_key(5, 0), "v1"),
    ("u2", "u1"),
    ("h1", "m1"),
    ("k2", "m1"),
    ("v1", "m3"),
    ("v2", "m4"),
    *((_key(c, r + d), _key(c, r)) for c in (0, 4, 6) for r in (2, 4) for d in (-1, 1)),
)
SIGNALS_ON_LINES = (_key(3, 2), _key(5, 2), _key(2, 4), _key(1, 0))


def _rules(plan: Plan) -> None:
    """Put the signs: signals on stop lines here and there, stop and give way on minor approaches."""
    for key in plan.signals:
        if key in SIGNALS_ON_LINES:
            for before, junction in plan.approaches(key):
                plan.line(before, junction, "traffic_signals")
        else:
            plan.tags.setdefault(key, {})["highway"] = "traffic_signals"
    for before, junction in STOPS:
        plan.line(before, junction, "stop")
    for before, junction in YIELDS:
        plan.line(before, junction, "give_way")


def build_plan(is_left: bool) -> Plan:
    """Draw the whole town, for right-hand traffic or mirrored for left-hand traffic."""
    plan = Plan(LON, LAT, TURN_DEG, is_left)
    _centre(plan)
    _west(plan)
    _east(plan)
    _north(plan)
    _south(plan)
    _motorway(plan)
    _rules(plan)
    plan.split()
    plan.zones = [
        ("centre", [(-430.0, -350.0), (420.0, -350.0), (420.0, 330.0), (-430.0, 330.0)]),
        ("outskirts", [(-1800.0, -1300.0), (1800.0, -1300.0), (1800.0, 2000.0), (-1800.0, 2000.0)]),
    ]
    return plan
