"""GPX: made-up tracks and two real rides."""

import datetime
import gzip
import xml.etree.ElementTree as ET
from collections.abc import Callable
from pathlib import Path

import pytest

from stream.config import Settings
from stream.errors import InputError
from tests.archives import EPOCH, T0_US
from tests.reading import Reading, read_all

DATA = Path(__file__).resolve().parent.parent / "data"
POINT = '<trkpt lat="60.5" lon="24.25"><time>2026-01-01T00:00:00Z</time></trkpt>'
Read = Callable[[str], Reading]


@pytest.fixture
def read(tmp_path: Path, settings: Settings) -> Read:
    """Give a reader of the file `van 3.gpx` with the content given."""

    def run(content: str) -> Reading:
        path = tmp_path / "van 3.gpx"
        path.write_text(content, encoding="utf-8")
        return read_all([path], settings)

    return run


def track(*points: str, version: str = "1/1") -> str:
    """Wrap points into a file."""
    return f'<gpx xmlns="http://www.topografix.com/GPX/{version}"><trk><trkseg>{"".join(points)}</trkseg></trk></gpx>'


@pytest.mark.parametrize("version", ["1/0", "1/1"])
def test_file_is_one_vehicle_by_its_name(version: str, read: Read) -> None:
    """Points of all tracks and segments in order; the vehicle is the file's name without its ending."""
    got = read(track(POINT, "</trkseg></trk><trk><trkseg>", POINT, version=version))
    assert got.pings == [(0, T0_US, 24.25, 60.5)] * 2
    assert got.names == ["van 3"]


def test_file_without_namespace_is_read(read: Read) -> None:
    """Writers that leave the namespace out are understood."""
    assert len(read(f"<gpx><trk><trkseg>{POINT}</trkseg></trk></gpx>").pings) == 1


def test_only_track_points_count(read: Read) -> None:
    """Way points, route points, and times of the file or within extensions are none of the track's."""
    inner = "<extensions><time>2001-01-01T00:00:00Z</time></extensions>"
    text = track(POINT.replace("<time>", inner + "<time>"))
    others = POINT.replace("trkpt", "wpt") + "<metadata><time>2001-01-01T00:00:00Z</time></metadata>"
    got = read(text.replace("<trk>", others + f"<rte>{POINT.replace('trkpt', 'rtept')}</rte><trk>"))
    assert got.pings == [(0, T0_US, 24.25, 60.5)]
    assert got.n_rows_in == 1


def test_time_without_offset_is_utc_whatever_the_zone(
    tmp_path: Path, make_settings: Callable[..., Settings]
) -> None:
    """GPX 1.1 schema: times are UTC, not local; source.time_zone and time_unit are for other formats."""
    path = tmp_path / "a.gpx"
    path.write_text(track(POINT.replace("Z", "")), encoding="utf-8")
    got = read_all([path], make_settings({"source.time_zone": "Asia/Tokyo", "source.time_unit": "ms"}))
    assert got.pings[0][1] == T0_US


def test_point_without_time_or_place_is_counted(read: Read) -> None:
    """A point that lacks something is dropped by reason."""
    got = read(
        track(
            POINT,
            POINT.replace('lat="60.5"', ""),
            '<trkpt lat="1" lon="2"/>',
            '<trkpt lat="1" lon="2"></trkpt>',
        )
    )
    assert (len(got.pings), got.dropped) == (1, {"bad_coordinate": 1, "bad_time": 2})


@pytest.mark.parametrize(
    ("content", "match"),
    [
        (track(POINT)[:-20], r"van 3\.gpx line 1: broken or cut off as XML"),
        ("<kml></kml>", r"its root is <kml>, not <gpx>"),
        ("hello", r"van 3\.gpx line 1: broken"),
        (track(), r"van 3\.gpx: no row of pings"),
        ('<!DOCTYPE gpx [<!ENTITY a "b">]>' + track(POINT), r"declares XML entities"),
        (track(POINT.replace("2026", "year")), r"row 1: time 'year-01-01T00:00:00Z' can't be read"),
    ],
)
def test_file_that_is_no_gpx_is_refused(content: str, match: str, read: Read) -> None:
    """Broken, cut off, other, empty or unsafe XML is one error with the file's name."""
    with pytest.raises(InputError, match=match):
        read(content)


@pytest.mark.parametrize(("name", "n"), [("ride_2019", 8357), ("ride_2020", 5159)])
def test_real_ride_is_read_whole(name: str, n: int, settings: Settings) -> None:
    """Each fix of a real ride (tests/data/README.md) is what the standard library reads there."""
    path = DATA / f"{name}.gpx.gz"
    with gzip.open(path) as file:
        points = ET.parse(file).getroot().iter("{http://www.topografix.com/GPX/1/1}trkpt")
    wanted = []
    for point in points:
        text = point.findtext("{http://www.topografix.com/GPX/1/1}time")
        assert text
        since = datetime.datetime.fromisoformat(text) - EPOCH
        t_us = since // datetime.timedelta(microseconds=1)
        wanted.append((0, t_us, float(point.attrib["lon"]), float(point.attrib["lat"])))
    got = read_all([path], settings)
    assert len(wanted) == n
    assert got.pings == wanted
    assert (got.names, got.dropped) == ([name], {})
