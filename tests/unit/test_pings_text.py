"""CSV and NDJSON as they come."""

import json
from collections.abc import Callable
from pathlib import Path

import pytest

from stream.config import Settings
from stream.errors import InputError
from tests.archives import T0_US
from tests.reading import Reading, read_all

Build = Callable[..., Settings]
ISO = "2026-01-01T00:00:00Z"  # T0_US


@pytest.fixture
def read(tmp_path: Path, settings: Settings) -> Callable[[str, str | bytes], Reading]:
    """Give a reader of a file with the name and content given."""

    def run(name: str, content: str | bytes) -> Reading:
        path = tmp_path / name
        path.write_bytes(content if isinstance(content, bytes) else content.encode())
        return read_all([path], settings)

    return run


Read = Callable[[str, str | bytes], Reading]


@pytest.mark.parametrize("separator", [",", ";", "\t", "|"])
@pytest.mark.parametrize("end", ["\n", "\r\n"])
def test_csv_separator_is_told_from_the_header(separator: str, end: str, read: Read) -> None:
    """Any of the usual separators and line ends gives the same pings."""
    lines = (["lat", "x", "lon", "ts", "vehicle_id"], ["60.5", "", "24.25", ISO, "a"])
    got = read("a.csv", end.join(separator.join(line) for line in lines))
    assert got.pings == [(0, T0_US, 24.25, 60.5)]


def test_csv_header_with_mark_blanks_and_quotes(read: Read) -> None:
    """A byte order mark, blank lines above, blanks around names and quoted names do no harm."""
    text = '\ufeff\n"vehicle_id", ts ,lon,lat\n\n"a",' + ISO + ",1,2\n\n"
    got = read("a.csv", text)
    assert (got.pings, got.n_rows_in) == ([(0, T0_US, 1.0, 2.0)], 1)


def test_csv_quoted_cell_may_hold_the_separator(read: Read) -> None:
    """A separator within quotes is part of the id."""
    got = read("a.csv", f'vehicle_id,ts,lon,lat\n"a,b",{ISO},1,2\n')
    assert got.names == ["a,b"]


def test_csv_ids_are_kept_as_written(read: Read) -> None:
    """Leading zeros, and words that other programs take for nothing, are ids."""
    rows = "".join(f"{v},{ISO},1,2\n" for v in ("007", "7", "NA", "null", " a"))
    got = read("a.csv", "vehicle_id,ts,lon,lat\n" + rows)
    assert got.names == ["007", "7", "NA", "null", " a"]


def test_csv_line_with_other_fields_is_counted(read: Read) -> None:
    """A line with too few or too many fields is a bad row, the others go on."""
    good = f"a,{ISO},1,2\n"
    got = read("a.csv", f"vehicle_id,ts,lon,lat\n{good}a,{ISO},1\n{good}a,{ISO},1,2,3\n")
    assert (len(got.pings), got.dropped, got.n_rows_in) == (2, {"bad_row": 2}, 4)


def test_csv_coordinates_that_are_no_numbers_are_counted(read: Read) -> None:
    """Words, gaps and infinities are bad coordinates, whatever numbers stand around them."""
    cells = ["east", "", "NaN", "nan", "NULL", "inf", "1,5", "24.5 ", "2.45e1"]
    rows = "".join(f'a,{ISO},"{cell}",2\n' for cell in cells)
    got = read("a.csv", "vehicle_id,ts,lon,lat\n" + rows)
    assert got.dropped == {"bad_coordinate": 7}
    assert [p[2] for p in got.pings] == [24.5, 24.5]


def test_csv_large_file_is_the_same_over_blocks(tmp_path: Path, make_settings: Build) -> None:
    """A file of several blocks, with a word among its numbers far down, gives every row once."""
    n = 400_000  # 16 MB: two blocks
    path = tmp_path / "a.csv"
    with path.open("w", encoding="utf-8") as file:
        file.write("vehicle_id,ts,lon,lat\n")
        for i in range(n):
            lon = "here" if i == 300_000 else f"{i % 180}.123456"
            file.write(f"v{i % 7},{1_767_225_600_000 + i},{lon},60.5\n")
    got = read_all([path], make_settings({"run.chunk_rows": 150_000}))
    assert (got.n_rows_in, got.dropped) == (n, {"bad_coordinate": 1})
    assert got.sizes == [150_000, 150_000, n - 1 - 300_000]
    wanted = [(i % 7, T0_US + i * 1000, float(f"{i % 180}.123456"), 60.5) for i in range(n) if i != 300_000]
    assert got.pings == wanted
    done = [at for at, _ in got.progress]
    assert done == sorted(done)
    assert done[-1] == got.progress[-1][1] == path.stat().st_size


@pytest.mark.parametrize(
    ("content", "match"),
    [
        (b"\x89PNG\r\n\x1a\n\xff\xfe", r"a\.csv: its header is not UTF-8 text \(byte 0\)"),
        (b"\n \n", r"a\.csv: holds no line of text"),
        (b"vehicle_id,ts,lon,lat\n", r"a\.csv: no row of pings"),
        (b"vehicle_id,ts,lon,lat\na,b\nc\n", r"none of its 2 rows can be cut into columns"),
        (
            b"vehicle_id,ts,lon,lat\n\xff\xfe," + ISO.encode() + b",1,2\n",
            r"row 1 or later: can't be read as CSV",
        ),
    ],
)
def test_csv_that_is_none_is_refused(content: bytes, match: str, read: Read) -> None:
    """What is no text, or has no row, is one error with the file's name."""
    with pytest.raises(InputError, match=match):
        read("a.csv", content)


def test_csv_column_that_is_not_wanted_may_hold_any_bytes(read: Read) -> None:
    """Text of another encoding in a column that nobody asked for does no harm."""
    got = read("a.csv", b"street,vehicle_id,ts,lon,lat\nStra\xdfe,a," + ISO.encode() + b",1,2\n")
    assert len(got.pings) == 1


def ndjson(*objects: object) -> str:
    """Write objects one a line."""
    return "".join(json.dumps(one) + "\n" for one in objects)


def ping(**over: object) -> dict[str, object]:
    """Give a good object with some values replaced."""
    return {"vehicle_id": "a", "ts": ISO, "lon": 1.5, "lat": 2.5} | over


def test_ndjson_values_may_be_numbers_or_texts(read: Read) -> None:
    """Ids, times and degrees are read alike as numbers and as texts; other keys are passed over."""
    objects = (
        ping(vehicle_id=7, ts=1_767_225_600, more={"x": [1]}),
        ping(vehicle_id="7", ts="1767225600", lon="1.5"),
        ping(vehicle_id=7, ts=1_767_225_600.25, lat=2),
        ping(vehicle_id=12_345_678_901_234_567_890),
    )
    got = read("a.ndjson", ndjson(*objects))
    assert got.pings == [
        (0, T0_US, 1.5, 2.5),
        (0, T0_US, 1.5, 2.5),
        (0, T0_US + 250_000, 1.5, 2.0),
        (1, T0_US, 1.5, 2.5),
    ]
    assert got.names == ["7", "12345678901234567890"]


def test_ndjson_degrees_keep_every_digit(read: Read) -> None:
    """A number is the same 64-bit float whether its block was read as numbers, as texts or line by line."""
    values = [24.938379331234567, 1e-7, -0.1, 60.169856000000003]
    plain = ndjson(*(ping(lon=v) for v in values))
    ways = (plain, plain + ndjson(ping(lon="x")), plain + "{\n")
    for text in ways:
        assert [p[2] for p in read("a.ndjson", text).pings] == values


def test_ndjson_bad_lines_and_values_are_counted(read: Read) -> None:
    """Lines that are no object are bad rows; wrong or absent values count by their column."""
    rows = ndjson(
        ping(), ping(ts=None), ping(vehicle_id=""), ping(lat="north"), [1], ping(lon=[1]), {"ts": ISO}, ping()
    )
    got = read("a.jsonl", rows + '{"vehicle_id": "a", \n\n' + ndjson(ping()))
    assert len(got.pings) == 3
    assert got.dropped == {"bad_time": 1, "bad_vehicle": 2, "bad_coordinate": 2, "bad_row": 2}


@pytest.mark.parametrize("content", ['[{"vehicle_id": "a"}]\n', "vehicle_id,ts,lon,lat\n", "[\n{}\n]\n"])
def test_ndjson_that_is_none_is_refused(content: str, read: Read) -> None:
    """A list of objects, or CSV under this name, is told by its first line."""
    with pytest.raises(InputError, match=r"a\.ndjson row 1: is no JSON object"):
        read("a.ndjson", content)


def test_ndjson_wrong_key_names_those_there_are(read: Read) -> None:
    """A key that no object has is named with the nearest there is."""
    with pytest.raises(InputError, match=r"'ts' \(source\.columns\.time\).*'when'.*"):
        read("a.ndjson", ndjson({"vehicle_id": 1, "when": 2, "lon": 3, "lat": 4}))
