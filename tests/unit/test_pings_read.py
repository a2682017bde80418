"""A delivery as a whole: its columns, its chunks, its account, what is refused."""

from collections.abc import Callable
from pathlib import Path

import pytest

from stream.config import Settings
from stream.errors import ConfigError, InputError
from stream.pings import VehicleBook, open_source
from tests.archives import ENDINGS, T0_US, Row, write_pings
from tests.reading import read_all

Build = Callable[..., Settings]
S = 1_000_000
ROWS: list[Row] = [(v, T0_US + i * S, 24.0 + i, 60.0 + i) for i, v in enumerate("abacbdaace")]


def text_file(path: Path, header: str, *lines: str) -> Path:
    """Write a CSV file."""
    path.write_text("\n".join([header, *lines]) + "\n", encoding="utf-8")
    return path


def test_codes_go_on_over_files(tmp_path: Path, settings: Settings) -> None:
    """Files of different formats are one sequence; the book keeps what it knew."""
    paths = [write_pings(tmp_path / f"{i}.{e}", ROWS[2 * i : 2 * i + 2]) for i, e in enumerate(ENDINGS[:5])]
    got = read_all(paths, settings, VehicleBook(["c"]))
    assert got.names == ["c", "a", "b", "d", "e"]
    assert [got.names[p[0]] for p in got.pings] == [row[0] for row in ROWS]
    assert [p[1:] for p in got.pings] == [row[1:] for row in ROWS]


@pytest.mark.parametrize("ending", ENDINGS)
def test_progress_ends_at_the_size_of_all_files(ending: str, tmp_path: Path, make_settings: Build) -> None:
    """Bytes done rise to the total."""
    paths = [write_pings(tmp_path / f"{i}.{ending}", ROWS) for i in range(3)]
    got = read_all(paths, make_settings({"run.chunk_rows": 4}))
    assert got.sizes == [4] * 7 + [2]
    done = [at for at, _ in got.progress]
    total = sum(path.stat().st_size for path in paths)
    assert done == sorted(done)
    assert {total} == {of for _, of in got.progress}
    assert done[-1] == total


def test_unsorted_reports_drops_and_progress_while_it_reads(tmp_path: Path, make_settings: Build) -> None:
    """Chunks without pings come first, then the pings in chunks of the size asked; bytes count twice."""
    rows: list[Row] = [*ROWS[::-1], (None, T0_US, 1.0, 2.0)]
    path = write_pings(tmp_path / "a.csv", rows)
    got = read_all([path], make_settings({"source.order": "unsorted", "run.chunk_rows": 4}))
    assert got.sizes == [0, 4, 4, 2]
    assert [p[1] for p in got.pings] == [row[1] for row in ROWS]
    assert (got.dropped, got.n_rows_in) == ({"bad_vehicle": 1}, 11)
    size = path.stat().st_size
    assert got.progress[0] == (size, 2 * size)
    assert got.progress[-1] == (2 * size, 2 * size)


def test_columns_are_mapped(tmp_path: Path, make_settings: Build) -> None:
    """Names of the archive stand in source.columns; optional ones must be there when named."""
    path = text_file(tmp_path / "a.csv", "unit,when,x,y,v", "a,5,1,2,3")
    names = {"vehicle": "unit", "time": "when", "lon": "x", "lat": "y"}
    over = {f"source.columns.{key}": name for key, name in names.items()}
    assert read_all([path], make_settings(over)).pings == [(0, 5 * S, 1.0, 2.0)]
    assert read_all([path], make_settings(over | {"source.columns.speed": "v"})).pings == [
        (0, 5 * S, 1.0, 2.0)
    ]
    with pytest.raises(
        InputError, match=r"no column 'w' \(source\.columns\.heading\).*source\.columns\.heading: null"
    ):
        open_source([path], make_settings(over | {"source.columns.heading": "w"}))


@pytest.mark.parametrize(
    ("header", "parts"),
    [
        (
            "vehicle_id,time,lon,lat",
            ("no column 'ts'", "'vehicle_id', 'time', 'lon', 'lat'", "columns.time: time"),
        ),
        ("Vehicle_ID,ts,lon,lat", ("no column 'vehicle_id'", "columns.vehicle: Vehicle_ID")),
        ("vehicle_id,ts,longitude,latitude", ("'lon'", "'lat'", "lon: longitude", "lat: latitude")),
        ("vehicle_id,ts,lon,lat,lon", ("twice the column 'lon'", "rename one 'lon'")),
        ("q", ("no column 'vehicle_id'", "columns there: 'q'")),
    ],
)
def test_column_that_is_not_there_is_told_with_the_nearest(
    header: str, parts: tuple[str, ...], tmp_path: Path, settings: Settings
) -> None:
    """The message lists the columns there are and the key with the nearest name."""
    path = text_file(tmp_path / "a.csv", header, "1,2,3,4")
    with pytest.raises(InputError) as told:
        open_source([path], settings)
    assert [p for p in ("a.csv", "source.columns", *parts) if p not in str(told.value)] == []


def test_one_column_for_two_things_is_refused(tmp_path: Path, make_settings: Build) -> None:
    """A slip in the configuration is told before anything is read."""
    path = write_pings(tmp_path / "a.csv", ROWS)
    with pytest.raises(
        ConfigError, match=r"source\.columns\.\w+ and source\.columns\.\w+ both name the column 'lon'"
    ):
        open_source([path], make_settings({"source.columns.lat": "lon"}))


def test_unknown_time_zone_is_refused(tmp_path: Path, make_settings: Build) -> None:
    """A zone that is none is told before anything is read."""
    path = write_pings(tmp_path / "a.csv", ROWS)
    with pytest.raises(ConfigError, match=r"source\.time_zone = 'Mars/Olympus'"):
        open_source([path], make_settings({"source.time_zone": "Mars/Olympus"}))


def test_missing_second_file_is_found_before_reading(tmp_path: Path, settings: Settings) -> None:
    """Every file of a delivery is looked at when it is opened."""
    path = write_pings(tmp_path / "a.csv", ROWS)
    with pytest.raises(InputError, match=r"b\.csv: there is no such file"):
        open_source([path, tmp_path / "b.csv"], settings)


def test_format_named_overrides_the_ending(tmp_path: Path, make_settings: Build) -> None:
    """source.format is what the file is, whatever its name."""
    path = write_pings(tmp_path / "a.csv", ROWS).rename(tmp_path / "a.export")
    assert len(read_all([path], make_settings({"source.format": "csv"})).pings) == len(ROWS)


def test_first_rows_unreadable_are_refused_by_value_and_row(tmp_path: Path, make_settings: Build) -> None:
    """Ten thousand unreadable rows at the head are no accident, whatever the chunk; one less is."""
    good = "a,5,1,2"
    bad = ["a,noon,1,2"]
    path = text_file(tmp_path / "a.csv", "vehicle_id,ts,lon,lat", *bad * 10_000, good)
    for chunk_rows in (7000, 1_000_000):
        with pytest.raises(
            InputError, match=r"a\.csv row 1: time 'noon' can't be read, nor .*first 10,000 rows"
        ):
            read_all([path], make_settings({"run.chunk_rows": chunk_rows}))
    text_file(path, "vehicle_id,ts,lon,lat", good, *bad * 20_000)
    assert read_all([path], make_settings()).dropped == {"bad_time": 20_000}


def test_first_rows_empty_are_counted(tmp_path: Path, settings: Settings) -> None:
    """Empty cells at the head, as a sorted archive has them, are no reason to refuse it."""
    path = text_file(tmp_path / "a.csv", "vehicle_id,ts,lon,lat", *["a,,1,2"] * 10_001, "a,5,1,2")
    got = read_all([path], settings)
    assert (len(got.pings), got.dropped) == (1, {"bad_time": 10_001})


@pytest.mark.parametrize(
    ("line", "match"),
    [
        ("a,noon,1,2", r"a\.csv row 1: time 'noon' can't be read, nor can any other .*source\.time_unit"),
        ("a,5,east,2", r"a\.csv row 1: lon 'east' can't be read.*source\.columns\.lon"),
        ("a,5,1,", r"a\.csv: column 'lat' is empty in all of its 2 rows.*source\.columns\.lat"),
        (",5,1,2", r"a\.csv: column 'vehicle_id' is empty in all of its 2 rows.*source\.columns\.vehicle"),
    ],
)
@pytest.mark.parametrize("order", ["time", "unsorted"])
def test_column_unreadable_throughout_is_refused(
    line: str, match: str, order: str, tmp_path: Path, make_settings: Build
) -> None:
    """A column of which nothing can be read is one error with value, row and key, also while sorting."""
    path = text_file(tmp_path / "a.csv", "vehicle_id,ts,lon,lat", line, line)
    with pytest.raises(InputError, match=match):
        read_all([path], make_settings({"source.order": order}))


def test_reading_left_early_leaves_nothing_behind(
    tmp_path: Path, make_settings: Build, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A caller that stops while an archive is sorted gets its temporary folder removed."""
    room = tmp_path / "room"
    room.mkdir()
    monkeypatch.setattr("tempfile.tempdir", str(room))
    path = write_pings(tmp_path / "a.csv", ROWS)
    for n in (1, 2):
        chunks = open_source([path], make_settings({"source.order": "unsorted"})).chunks(VehicleBook())
        for _ in range(n):
            next(chunks)
        assert len(list(room.iterdir())) == 1
        chunks.close()  # type: ignore[attr-defined]
        assert list(room.iterdir()) == []
