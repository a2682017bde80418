"""README.md says what the program does, and no less: commands, keys, reasons, and the two commands."""

import re
from pathlib import Path

import pytest

from stream.config import load_settings
from stream.detect.records import DROP_REASONS, UNFINISHED_REASONS
from stream.export.columns import known_columns
from stream.tally.strata import DIMENSIONS
from tests.readme import README, ROOT, commands, keys, spliced

TEXT = README.read_text(encoding="utf-8")


def test_readme_made_parts_are_current() -> None:
    """Commands and configuration in README are those of the program; `python -m tests.readme` mends it."""
    assert spliced(TEXT) == TEXT


def test_readme_job_comes_first() -> None:
    """Nothing stands between the title and the paragraph that states the job."""
    title, blank, first = TEXT.splitlines()[:3]
    assert (title, blank) == ("# turntally", "")
    assert first.startswith("turntally turns raw GPS probe archives into junction-delay samples")


def test_every_command_and_option_says_what_it_does() -> None:
    """Each row of the made tables has a text, each command a sentence."""
    for line in commands().splitlines():
        if line.startswith("| `"):
            assert re.fullmatch(r"\| `.+` \| .{10,} \|", line), line
    said = re.findall(r"^### `turntally \w+.*`\n\n.{10,}$", commands(), re.MULTILINE)
    assert len(said) == commands().count("\n### ") >= 8


def leaves(model: object, at: str = "") -> set[str]:
    """Give the dotted names of the settings; a map with keys of the user's is one."""
    out: set[str] = set()
    for name in type(model).model_fields:
        value = getattr(model, name)
        whole = f"{at}{name}"
        out |= leaves(value, f"{whole}.") if hasattr(type(value), "model_fields") else {whole}
    return out


def test_every_key_is_documented_and_every_documented_key_exists() -> None:
    """The keys read from the defaults for README are the keys of the settings, each with a text."""
    assert leaves(load_settings()) - {"tallies"} == set(keys())
    assert [key for key, (value, said) in keys().items() if not value or not said] == []


@pytest.mark.parametrize("word", [*DROP_REASONS, *UNFINISHED_REASONS])
def test_every_reason_is_explained(word: str) -> None:
    """A reason that status prints is explained in README."""
    assert f"`{word}`" in TEXT


def test_every_column_in_readme_exists() -> None:
    """The columns of passages that README explains are columns with an entry in the data dictionary."""
    part = TEXT.partition("## What it gives")[2].partition("A passage that begins")[0]
    cells = re.findall(r"^\| (`.+?`) \|", part, re.MULTILINE)
    named = {name for cell in cells for name in re.findall(r"`(\w+)`", cell)}
    assert len(named) > 20
    assert named - known_columns() == set()


@pytest.mark.parametrize("word", sorted(DIMENSIONS))
def test_every_dimension_is_explained(word: str) -> None:
    """A dimension that --by takes is explained in README."""
    assert f"`{word}`" in TEXT


def test_ci_runs_the_test_command_of_readme() -> None:
    """The check runs what README tells a reader to run, word for word."""
    told = re.search(r"^pip install -e .*pytest$", TEXT, re.MULTILINE)
    assert told
    assert f"\n{told[0]} || exit 1\n" in (ROOT / ".ci" / "run").read_text(encoding="utf-8")


@pytest.mark.parametrize("name", ["README.md", "DEVELOPERS.md"])
def test_files_named_in_a_text_exist(name: str) -> None:
    """A path in the texts leads somewhere."""
    text = (ROOT / name).read_text(encoding="utf-8")
    named = re.findall(r"`((?:stream|sql|tests|config|\.ci)/[\w./-]*)`", text)
    assert [path for path in named if not (ROOT / Path(path)).exists()] == []
