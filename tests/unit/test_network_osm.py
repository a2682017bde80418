"""An extract into road ways: what is taken, what is cut, what is counted, and what bad files get."""

import bz2
import gzip
import re
from collections.abc import Callable
from pathlib import Path

import numpy as np
import osmium
import pytest

from stream.errors import InputError, NetworkError
from stream.network import raw
from stream.network.osm import read_osm
from tests.sketch import Sketch, cross

CLASSES = ("primary", "residential")


def taken(path: Path) -> raw.RawRoads:
    """Read an extract and hold the result to the guarantee of every reader."""
    roads = read_osm(path, CLASSES)
    roads.check()
    return roads


def references(roads: raw.RawRoads) -> list[tuple[int, list[int]]]:
    """Give (way id, node ids) of each way."""
    spans = zip(roads.ref_start[:-1].tolist(), roads.ref_start[1:].tolist(), strict=True)
    refs = [roads.node_id[roads.ref_node[a:b]].tolist() for a, b in spans]
    return list(zip(roads.way_id.tolist(), refs, strict=True))


def test_ways_come_with_class_direction_ring_and_limits(tmp_path: Path) -> None:
    """Each way carries what its tags say, in the order of the configured classes."""
    sketch = cross()
    sketch.way(12, [1, 2], {"highway": "primary", "oneway": "-1", "maxspeed": "30 mph"})
    sketch.way(13, [1, 3], {"highway": "residential", "junction": "circular", "maxspeed:forward": "40"})
    roads = taken(sketch.write(tmp_path))
    assert references(roads) == [(12, [1, 2]), (13, [1, 3]), (14, [1, 4]), (15, [1, 5])]
    assert roads.way_class.tolist() == [0, 1, 1, 1]
    assert roads.way_open.tolist() == [raw.AGAINST, 3, 3, 3]
    assert roads.way_ring.tolist() == [0, raw.RING_CIRCULAR, 0, 0]
    np.testing.assert_allclose(roads.way_limit_along_kmh, [48.28032, 40, np.nan, np.nan], rtol=1e-6)
    np.testing.assert_allclose(roads.way_limit_against_kmh, [48.28032, np.nan, np.nan, np.nan], rtol=1e-6)


def test_locations_are_those_of_the_file(tmp_path: Path) -> None:
    """Coordinates are kept as integers of 1e-7 degree, as in the file."""
    sketch = cross()
    roads = taken(sketch.write(tmp_path))
    for node, lon, lat in zip(roads.node_id, roads.node_lon_e7, roads.node_lat_e7, strict=True):
        assert (lon, lat) == tuple(round(x * 1e7) for x in sketch.place[int(node)])


def test_nodes_of_other_things_are_not_kept(tmp_path: Path) -> None:
    """Only nodes of roads stay in memory."""
    sketch = cross()
    sketch.nodes({6: (10, 10), 7: (20, 10), 8: (20, 20)})
    sketch.way(90, [6, 7, 8, 6], {"building": "yes"})
    sketch.way(91, [1, 6], {"highway": "footway"})
    assert taken(sketch.write(tmp_path)).node_id.tolist() == [1, 2, 3, 4, 5]


def test_what_is_left_out_is_counted_by_reason(tmp_path: Path) -> None:
    """The report accounts for every way with a highway key and every restriction."""
    sketch = cross()
    sketch.way(16, [2, 3], {"highway": "footway"})
    sketch.way(17, [3, 4], access="no")
    sketch.way(18, [4, 5], oneway="reversible")
    sketch.way(19, [5, 5])
    sketch.way(20, [5, 2], access="destination", maxspeed="walk")
    sketch.turn(1, "no_left_turn", [("from", "w", 12), ("via", "n", 1)])
    sketch.turn(
        2, "", [("from", "w", 12), ("via", "n", 1), ("to", "w", 13)], {"restriction:hgv": "no_u_turn"}
    )
    report = taken(sketch.write(tmp_path)).report
    assert report["ways"] == {"taken": 5, "cut_at_the_edge": 0, "limited_access": 1, "limit_no_number": 1}
    assert report["ways_left_out"] == {"access": 1, "class": 1, "direction_changes": 1, "too_few_nodes": 1}
    assert report["restrictions_left_out"] == {"members_incomplete": 1, "other_vehicles": 1}


def test_way_is_cut_where_nodes_are_missing(tmp_path: Path) -> None:
    """What the extract holds of a way stays, in pieces; single nodes between gaps don't."""
    sketch = Sketch()
    sketch.nodes({n: (50.0 * n, 0.0) for n in (1, 2, 4, 6, 7, 8)})
    sketch.way(10, [1, 2, 3, 4, 5, 6, 7, 8, 9])
    sketch.way(11, [20, 21])
    roads = taken(sketch.write(tmp_path))
    assert references(roads) == [(10, [1, 2]), (10, [6, 7, 8])]
    assert roads.report["ways"]["cut_at_the_edge"] == 2
    assert roads.report["ways_left_out"] == {"outside_the_extract": 1}


def test_direction_of_a_sign_holds_on_a_node_of_one_way_only(tmp_path: Path) -> None:
    """On a node that two ways share, a direction key means nothing (OSM wiki, METHODS.md section 2)."""
    sketch = cross()
    tags = {"highway": "traffic_signals", "traffic_signals:direction": "forward"}
    sketch.node(1, 0, 0, tags)
    sketch.node(6, 0, 20, tags)
    sketch.way(12, [1, 6, 2])
    roads = taken(sketch.write(tmp_path))
    sign = dict(zip(roads.node_id.tolist(), roads.node_sign.tolist(), strict=True))
    assert sign == {1: raw.SIGNALS, 2: 0, 3: 0, 4: 0, 5: 0, 6: raw.SIGNALS | raw.GOVERNS_ALONG}


def test_restriction_keeps_its_members(tmp_path: Path) -> None:
    """Members come over with their roles, via ways in the order of the relation."""
    sketch = cross()
    sketch.turn(1, "no_entry", [("from", "w", 12), ("from", "w", 13), ("via", "n", 1), ("to", "w", 14)])
    members = [("from", "w", 12), ("via", "w", 15), ("via", "w", 13), ("to", "w", 14)]
    sketch.turn(2, "", members, {"restriction:conditional": "only_u_turn @ (Sa)"})
    assert taken(sketch.write(tmp_path)).restrictions == [
        raw.Restriction(1, False, False, False, (12, 13), 1, (), (14,)),
        raw.Restriction(2, True, True, True, (12,), None, (15, 13), (14,)),
    ]


@pytest.mark.parametrize("ending", [".osm.gz", ".osm.bz2", ".osm.pbf"])
def test_all_formats_give_the_same(tmp_path: Path, ending: str) -> None:
    """Packed XML and PBF hold the same roads as the plain XML."""
    plain = cross().write(tmp_path)
    path = tmp_path / f"other{ending}"
    if ending == ".osm.pbf":
        with osmium.SimpleWriter(str(path)) as writer:
            for thing in osmium.FileProcessor(str(plain)):
                writer.add(thing)
    else:
        pack: Callable[[bytes], bytes] = gzip.compress if ending == ".osm.gz" else bz2.compress
        path.write_bytes(pack(plain.read_bytes()))
    one, other = taken(plain), taken(path)
    assert references(one) == references(other)
    assert one.node_lon_e7.tolist() == other.node_lon_e7.tolist()


def test_order_of_the_file_does_not_matter(tmp_path: Path) -> None:
    """Ways come by id, nodes by id, whatever the order in the file."""
    sketch = cross()
    there, back = taken(sketch.write(tmp_path)), taken(sketch.write(tmp_path, backwards=True))
    assert references(there) == references(back)
    assert there.node_lat_e7.tolist() == back.node_lat_e7.tolist()


def test_negative_ids_are_read(tmp_path: Path) -> None:
    """Editors give negative ids to what is not uploaded yet; such a file is read all the same."""
    sketch = cross()
    path = sketch.write(tmp_path)
    path.write_text(re.sub(r"(id|ref)='(\d+)'", r"\1='-\2'", path.read_text()))
    assert references(taken(path)) == [(-w, [-1, 10 - w]) for w in (15, 14, 13, 12)]


def test_missing_file_is_named() -> None:
    """A missing extract is refused with its name and the endings that can be read."""
    with pytest.raises(InputError, match=r"nowhere\.osm\.pbf: no such file; .*\.osm\.pbf"):
        read_osm(Path("nowhere.osm.pbf"), CLASSES)


@pytest.mark.parametrize(
    ("name", "content"),
    [
        ("a.osm.pbf", b""),
        ("a.osm.pbf", b"no extract at all"),
        ("a.osm", b"<osm version='0.6'><node id='1' lat='1"),
        ("a.osm", b"<html></html>"),
        ("a.osm.gz", b"x"),
    ],
)
def test_broken_file_is_refused_with_the_mend(tmp_path: Path, name: str, content: bytes) -> None:
    """A file that is no extract is one clear error, never a traceback."""
    (tmp_path / name).write_bytes(content)
    with pytest.raises(InputError, match=r"a\.osm.*not a readable OpenStreetMap extract.*fetch it again"):
        read_osm(tmp_path / name, CLASSES)


def test_extract_cut_short_is_refused(tmp_path: Path) -> None:
    """A download that broke off is refused, whatever was read until then."""
    whole = Path(__file__).resolve().parent.parent / "data" / "helsinki.osm.pbf"
    path = tmp_path / "short.osm.pbf"
    path.write_bytes(whole.read_bytes()[:200_000])
    with pytest.raises(InputError, match="not a readable"):
        read_osm(path, CLASSES)


def test_extract_without_roads_says_what_was_left_out(tmp_path: Path) -> None:
    """An extract without a road for cars is refused, with the counts that explain it."""
    sketch = Sketch()
    sketch.nodes({1: (0, 0), 2: (50, 0)})
    sketch.way(10, [1, 2], {"highway": "footway"})
    with pytest.raises(NetworkError, match=r"no road for cars \(class 1\).*network\.classes"):
        read_osm(sketch.write(tmp_path), CLASSES)
