"""Where the global options may stand."""

import pytest

from stream.cli.main import hoist


@pytest.mark.parametrize(
    ("given", "ordered"),
    [
        ([], []),
        (["status", "--json"], ["--json", "status"]),
        (
            ["export", "--to", "a.csv", "--store", "s", "arms"],
            ["--store", "s", "export", "--to", "a.csv", "arms"],
        ),
        (["ingest", "--config=c.yaml", "x"], ["--config=c.yaml", "ingest", "x"]),
        (["--quiet", "ingest", "x", "--json"], ["--quiet", "--json", "ingest", "x"]),
        (["ingest", "--", "--json", "--store"], ["ingest", "--", "--json", "--store"]),
        (["status", "--storey"], ["status", "--storey"]),
    ],
)
def test_hoist_moves_global_options_only(given: list[str], ordered: list[str]) -> None:
    """Global options come to the front with their values; all else keeps its order."""
    assert hoist(given) == ordered


@pytest.mark.parametrize("name", ["--store", "--config"])
def test_hoist_without_a_value_is_refused(name: str) -> None:
    """An option that takes a value and stands last is named."""
    with pytest.raises(ValueError, match=name):
        hoist(["status", name])
