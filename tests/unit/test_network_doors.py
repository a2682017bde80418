"""The tiny town through both doors, as an OSM file and as road lines: the same junctions, arms and gates."""

import json
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import numpy as np
import polars as pl
import pytest
from polars.testing import assert_frame_equal

from stream.config import Settings
from stream.network import Built, build_network

# What a lines file can't say: ids of nodes, and turn restrictions.
BY_ID = ("junction_id", "node_ids", "mouth_node_id", "is_banned", "is_timed")


def as_lines(osm: Path, folder: Path) -> Path:
    """Write the ways of an OSM XML file as lines with their tags, and its signs as points."""
    root = ElementTree.parse(osm).getroot()
    place = {n.get("id"): [float(str(n.get("lon"))), float(str(n.get("lat")))] for n in root.iter("node")}
    features: list[dict[str, Any]] = []

    def add(kind: str, coordinates: Any, properties: dict[str, Any]) -> None:
        geometry = {"type": kind, "coordinates": coordinates}
        features.append({"type": "Feature", "properties": properties, "geometry": geometry})

    for way in root.iter("way"):
        tags = {str(t.get("k")): t.get("v") for t in way.iter("tag")}
        add(
            "LineString",
            [place[n.get("ref")] for n in way.iter("nd")],
            {**tags, "id": int(str(way.get("id")))},
        )
    for node in root.iter("node"):
        for tag in node.iter("tag"):
            control = {"traffic_signals": "signals", "give_way": "give_way"}[str(tag.get("v"))]
            add("Point", place[node.get("id")], {"control": control})
    path = folder / "town.geojson"
    path.write_text(json.dumps({"type": "FeatureCollection", "features": features}))
    return path


@pytest.fixture(scope="module")
def zones(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Give two zones of the town: its western half, and all of it."""
    path = tmp_path_factory.mktemp("zones") / "zones.geojson"

    def square(west: float, east: float, name: str) -> dict[str, Any]:
        outline = [[west, 49.9], [east, 49.9], [east, 50.1], [west, 50.1], [west, 49.9]]
        geometry = {"type": "Polygon", "coordinates": [outline]}
        return {"type": "Feature", "properties": {"zone": name}, "geometry": geometry}

    features = [square(9.9, 10.006, "west"), square(9.9, 10.2, "town")]
    path.write_text(json.dumps({"type": "FeatureCollection", "features": features}))
    return path


def plain(built: Built, name: str) -> pl.DataFrame:
    """Give a table with its junctions named by place instead of by index, in an order of its own."""
    junction = built.tables["junction"]
    at = junction.select("junction_ix", at=pl.format("{} {}", "lon", "lat"))
    table = built.tables[name]
    if name == "junction":
        return table.drop(BY_ID, strict=False).drop("junction_ix").sort("lon", "lat")
    table = table.join(at, on="junction_ix").drop(BY_ID, strict=False)
    table = table.drop([c for c in table.columns if c.endswith("_ix")])
    return table.sort("at", *(["arm"] if name == "arm" else ["arm_in", "arm_out"]))


@pytest.mark.parametrize("name", ["junction", "arm", "movement"])
def test_lines_build_what_the_extract_builds(
    name: str, town_osm: Path, zones: Path, tmp_path: Path, settings: Settings
) -> None:
    """Ids of nodes and restrictions aside, a lines file gives the tables of the same roads in OSM."""
    from_osm = build_network(town_osm, zones, settings)
    from_lines = build_network(as_lines(town_osm, tmp_path), zones, settings)
    expected, got = plain(from_osm, name), plain(from_lines, name)
    assert len(expected) >= 12
    assert_frame_equal(expected, got, abs_tol=1e-6)


def test_lines_build_the_same_links_and_gates(town_osm: Path, tmp_path: Path, settings: Settings) -> None:
    """Links have the same lengths and classes, and gates lie at the same distances."""
    one = build_network(town_osm, None, settings)
    other = build_network(as_lines(town_osm, tmp_path), None, settings)
    columns = ["length_m", "class", "limit_kmh", "middle_fwd_m", "middle_back_m"]
    for built in (one, other):
        assert len(built.tables["link"]) > 20
    # A link may be drawn from either of its ends, so its two directions are compared as a pair.
    pairs = [
        b.tables["link"]
        .select(columns)
        .with_columns(
            middle_fwd_m=pl.min_horizontal("middle_fwd_m", "middle_back_m"),
            middle_back_m=pl.max_horizontal("middle_fwd_m", "middle_back_m"),
        )
        .with_columns(pl.col(pl.Float64).round(6))
        .sort(columns)
        for b in (one, other)
    ]
    assert_frame_equal(*pairs, abs_tol=1e-6)
    total = [
        np.sort(np.concatenate([b.streets.arm_entry_gate_m, b.streets.arm_exit_gate_m])) for b in (one, other)
    ]
    np.testing.assert_allclose(*total, atol=1e-6)


def test_zones_are_laid_over_lines(town_osm: Path, zones: Path, tmp_path: Path, settings: Settings) -> None:
    """Junctions of a lines file get the first zone that holds them: columns 0 and 1 lie in the west."""
    built = build_network(as_lines(town_osm, tmp_path), zones, settings)
    counted = dict(built.tables["junction"]["zone"].value_counts().iter_rows())
    assert counted == {"west": 6, "town": 6}
    assert set(built.tables["junction"]["time_zone"]) == {"Europe/Berlin"}
