"""A tiny invented town, written as OSM XML: small enough to count by hand.

Plan (300 m between grid corners; ids of corners are 100 + 10 * column + row, row 0 in the south)::

    row 2   o-----o-----o-----o      residential, stubs of 150 m to the west and east
            |     |     |     |
    row 1   o-----S-----P-----R      secondary, signals at S, give-way from the side road at P,
            |     |     |     |      a roundabout of 24 m across in place of the corner R
    row 0   o-----o-----o-----o      residential, stubs as in row 2
           col 0  col 1 col 2 col 3  columns residential, with stubs to the south; col 2 is one-way northward

* Corners in columns 0, 1 and 2 (9 junctions) and (3,0), (3,2) are junctions of 3 or 4 roads; the ring is one.
* A restriction bans the left turn at S from the south to the west.
* A service road and a footway hang on (0,0) and are no roads; way 900 is a road far from all others.
"""

import math

ORIGIN_LON, ORIGIN_LAT = 10.0, 50.0
STEP_M = 300.0
STUB_M = 150.0
# WGS 84, metres per degree at 50 degrees north (geodesy.py is tested against pyproj elsewhere).
LON_M, LAT_M = 71_695.75, 111_229.06
COLUMNS, ROWS = 4, 3
SIGNALS, GIVE_WAY, ROUNDABOUT = (1, 1), (2, 1), (3, 1)
RING_RADIUS_M = 12.0


def corner_id(column: int, row: int) -> int:
    """Give the node id of a grid corner."""
    return 100 + 10 * column + row


def lon_lat(east_m: float, north_m: float) -> tuple[float, float]:
    """Give the coordinates of a point of the plan."""
    return ORIGIN_LON + east_m / LON_M, ORIGIN_LAT + north_m / LAT_M


def _ring() -> dict[int, tuple[float, float]]:
    """Give the eight ring nodes 301..308, anticlockwise from the east; 301, 303, 305, 307 meet roads."""
    x, y = ROUNDABOUT[0] * STEP_M, ROUNDABOUT[1] * STEP_M
    turn = math.pi / 4
    return {
        301 + i: (x + RING_RADIUS_M * math.cos(i * turn), y + RING_RADIUS_M * math.sin(i * turn))
        for i in range(8)
    }


def _nodes() -> dict[int, tuple[float, float]]:
    nodes = {
        corner_id(c, r): (c * STEP_M, r * STEP_M)
        for c in range(COLUMNS)
        for r in range(ROWS)
        if (c, r) != ROUNDABOUT
    }
    east = (COLUMNS - 1) * STEP_M + STUB_M
    for r in range(ROWS):
        nodes[200 + r] = (-STUB_M, r * STEP_M)
        nodes[210 + r] = (east, r * STEP_M)
    for c in range(COLUMNS):
        nodes[220 + c] = (c * STEP_M, -STUB_M)
    nodes |= _ring()
    nodes[401] = (2 * STEP_M, STEP_M - 15.0)  # give way, 15 m south of P on the one-way column
    nodes[501], nodes[502] = (-60.0, -60.0), (40.0, -90.0)
    nodes[601], nodes[602] = (5000.0, 0.0), (5400.0, 0.0)
    return nodes


def _way_nodes() -> dict[int, tuple[list[int], dict[str, str]]]:
    home = {"highway": "residential"}
    ways: dict[int, tuple[list[int], dict[str, str]]] = {}
    for r in (0, 2):
        row = [corner_id(c, r) for c in range(COLUMNS)]
        ways[700 + r] = ([200 + r, *row, 210 + r], home)
    main = {"highway": "secondary", "maxspeed": "50"}
    ways[701] = ([201, corner_id(0, 1), corner_id(1, 1), corner_id(2, 1), 305], main)
    ways[711] = ([301, 211], main)
    for c in (0, 1):
        ways[800 + c] = ([220 + c, *(corner_id(c, r) for r in range(ROWS))], home)
    one_way = [222, corner_id(2, 0), 401, corner_id(2, 1), corner_id(2, 2)]
    ways[802] = (one_way, {**home, "oneway": "yes", "maxspeed": "30"})
    ways[803] = ([223, corner_id(3, 0), 307], home)
    ways[813] = ([303, corner_id(3, 2)], home)
    ways[820] = ([*range(301, 309), 301], {"highway": "secondary", "junction": "roundabout"})
    ways[850] = ([corner_id(0, 0), 501], {"highway": "service"})
    ways[851] = ([corner_id(0, 0), 502], {"highway": "footway"})
    ways[900] = ([601, 602], home)
    return ways


def _split_at_signals(ways: dict[int, tuple[list[int], dict[str, str]]]) -> None:
    """Split the two roads that meet at S, so that the restriction has a way on each side."""
    middle = corner_id(*SIGNALS)
    for way, rest in ((701, 721), (801, 821)):
        nodes, tags = ways[way]
        at = nodes.index(middle)
        ways[way], ways[rest] = (nodes[: at + 1], tags), (nodes[at:], tags)


def town_xml() -> str:
    """Write the town as OSM XML.

    Way ids: rows 700, 701 (west of S) and 721 (east), 702, 711 (east of the ring); columns 800, 801 (south
    of S) and 821 (north), 802, 803 (south of the ring), 813 (north); ring 820; 850, 851 no roads; 900 apart.
    """
    tags = {corner_id(*SIGNALS): {"highway": "traffic_signals"}, 401: {"highway": "give_way"}}
    lines = ["<?xml version='1.0' encoding='UTF-8'?>", "<osm version='0.6'>"]
    for node, (east, north) in sorted(_nodes().items()):
        lon, lat = lon_lat(east, north)
        inner = "".join(f"<tag k='{k}' v='{v}'/>" for k, v in tags.get(node, {}).items())
        lines.append(f"<node id='{node}' version='1' lon='{lon:.7f}' lat='{lat:.7f}'>{inner}</node>")
    ways = _way_nodes()
    _split_at_signals(ways)
    for way, (nodes, way_tags) in sorted(ways.items()):
        inner = "".join(f"<nd ref='{n}'/>" for n in nodes)
        inner += "".join(f"<tag k='{k}' v='{v}'/>" for k, v in way_tags.items())
        lines.append(f"<way id='{way}' version='1'>{inner}</way>")
    lines.append(
        "<relation id='950' version='1'>"
        "<member type='way' ref='801' role='from'/>"
        f"<member type='node' ref='{corner_id(*SIGNALS)}' role='via'/>"
        "<member type='way' ref='701' role='to'/>"
        "<tag k='type' v='restriction'/><tag k='restriction' v='no_left_turn'/></relation>"
    )
    lines.append("</osm>")
    return "\n".join(lines) + "\n"
