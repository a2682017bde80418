"""README shows what the demo prints: the same lines, but for the times that they took."""

import re
from pathlib import Path

import pytest

from tests.command import done
from tests.readme import README


def without_times(text: str) -> list[str]:
    """Give the lines with every duration in seconds blotted out."""
    timed = re.compile(r"\(network .*\)|\b\d+\.\d s\b")
    return [timed.sub("T", line) for line in text.strip().splitlines()]


@pytest.mark.slow
def test_readme_shows_what_the_demo_prints(tmp_path: Path) -> None:
    """The block in README is the demo's output, line by line, durations left out."""
    text = README.read_text(encoding="utf-8")
    block = text.partition("tests/end_to_end/test_readme_demo.py -->\n```\n")[2].partition("\n```\n")[0]
    assert block.count("\n") > 20
    assert without_times(done("demo", cwd=tmp_path)) == without_times(block)
