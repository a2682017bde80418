"""Fixtures that all tests share: settings, an empty store, and a tiny invented town as OSM XML."""

from collections.abc import Callable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pytest

from stream.config import Settings, load_settings
from stream.store import Store
from tests.town import town_xml

if TYPE_CHECKING:
    from tests.forks import Forks


@pytest.fixture
def make_settings() -> Callable[..., Settings]:
    """Give a builder: the defaults, with values over them by dotted key.

    ``make_settings({"trips.max_gap_s": 60, "privacy.plain_ids": True})``
    """

    def build(over: dict[str, Any] | None = None) -> Settings:
        nested: dict[str, Any] = {}
        for dotted, value in (over or {}).items():
            *parts, last = dotted.split(".")
            at = nested
            for part in parts:
                at = at.setdefault(part, {})
            at[last] = value
        return load_settings(over=nested)

    return build


@pytest.fixture
def settings() -> Settings:
    """Give the defaults."""
    return load_settings()


@pytest.fixture
def fresh_store(tmp_path: Path) -> Iterator[Store]:
    """Give an open store without a network."""
    with Store.open(tmp_path / "fresh.duckdb", create=True) as store:
        yield store


@pytest.fixture(scope="session")
def town_osm(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Give the tiny town (tests/town.py) as an `.osm` file; tests must not change it."""
    path = tmp_path_factory.mktemp("town") / "town.osm"
    path.write_text(town_xml(), encoding="utf-8")
    return path


@pytest.fixture(scope="session")
def forks(tmp_path_factory: pytest.TempPathFactory, town_osm: Path) -> "Iterator[Forks]":
    """Give the command with everything loaded, for tests that run it a hundred times."""
    from stream.network import build_network
    from tests.forks import Forks

    with Forks(tmp_path_factory.mktemp("forks"), build_network(town_osm, None, load_settings())) as server:
        yield server
