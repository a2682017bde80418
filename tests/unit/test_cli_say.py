"""Results as text."""

import json
from datetime import UTC, datetime
from pathlib import Path

import pytest

from stream.cli.say import Session, counts, table


def test_table_lines_up_and_cuts_nothing() -> None:
    """Columns are as wide as their widest cell; texts stand left, numbers right."""
    got = table(("zone", "n"), [["centre", "1,204"], ["", "7"]])
    assert got.splitlines() == ["zone        n", "centre  1,204", "            7"]


def test_table_keeps_a_cell_of_any_width() -> None:
    """A cell wider than any terminal is printed whole."""
    wide = "x" * 500
    assert wide in table(("a", "b"), [[wide, "1"]])


def test_table_refuses_a_row_of_other_length() -> None:
    """A row with a cell too many is a fault of the caller."""
    with pytest.raises(ValueError, match="zip"):
        table(("a", "b"), [["1", "2", "3"]])


def test_counts_greatest_first() -> None:
    """Counts stand by size, then by name, and zeros are left out."""
    assert (
        counts({"late": 3, "null_island": 1200, "gap": 3, "close": 0}) == "1,200 null island, 3 gap, 3 late"
    )


def test_counts_in_the_order_given() -> None:
    """Where the order says something, it stays."""
    assert counts({"built": 2, "left_out": 7}, is_sorted=False) == "2 built, 7 left out"


def test_counts_without_any() -> None:
    """No count at all is said in a word."""
    assert counts({"late": 0}) == "none"


def test_result_as_json_is_one_line_with_utc_times(capsys: pytest.CaptureFixture[str]) -> None:
    """Times are RFC 3339 with Z (METHODS: UTC until a label is made), paths are texts."""
    at = datetime(2026, 3, 29, 1, 0, 0, 250_000, tzinfo=UTC)
    Session(Path("s"), None, False, True).result({"at": at, "file": Path("a/b"), "n": 1}, "unused")
    out = capsys.readouterr().out
    assert out.count("\n") == 1
    assert json.loads(out) == {"at": "2026-03-29T01:00:00.250000Z", "file": "a/b", "n": 1}


def test_result_refuses_what_json_lacks() -> None:
    """Not-a-number is no JSON: it must become null before it is printed."""
    with pytest.raises(ValueError, match="JSON"):
        Session(Path("s"), None, False, True).result({"mean_ms": float("nan")}, "")


def test_note_is_silent_when_quiet(capsys: pytest.CaptureFixture[str]) -> None:
    """Notes go to stderr, and with --quiet nowhere."""
    Session(Path("s"), None, False, False).note("compiling")
    Session(Path("s"), None, True, False).note("never seen")
    assert capsys.readouterr() == ("", "compiling\n")
