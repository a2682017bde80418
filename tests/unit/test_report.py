"""The report: one file, whole, offline, held to the disclosure limits."""

import re
import xml.etree.ElementTree as ET
from collections.abc import Iterator
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import polars as pl
import pytest

from stream.config import Settings, load_settings
from stream.errors import InputError, StoreError
from stream.network import Built, build_network
from stream.report import write_report
from stream.report.draw import Scale, ladder_chart, plain, scale_of, seconds, sector_chart
from stream.store import Store
from stream.store.ladder import quantile_rows
from tests.filled import fill, found_at_random

PLAIN = load_settings(over={"privacy": {"plain_ids": True}})
VOID = {"meta", "line", "rect", "link", "img", "br", "hr"}


class Page(HTMLParser):
    """Collects tags with attributes, and checks that they close in order."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.open: list[str] = []
        self.said: list[str] = []
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        self.said.append(data)


@pytest.fixture(scope="module")
def built(town_osm: Path) -> Built:
    """Give the tiny town."""
    return build_network(town_osm, None, PLAIN)


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory, built: Built) -> Iterator[Store]:
    """Give a store with 700 passages of 30 vehicles."""
    with Store.open(tmp_path_factory.mktemp("report") / "s.duckdb", create=True) as one:
        fill(one, built, PLAIN, found_at_random(built, 700, 30, 3))
        yield one


@pytest.fixture(scope="module")
def text(store: Store, tmp_path_factory: pytest.TempPathFactory) -> str:
    """Give the page as text."""
    to = tmp_path_factory.mktemp("page") / "r.html"
    write_report(store, to, PLAIN)
    assert [p.name for p in to.parent.iterdir()] == ["r.html"]
    return to.read_text(encoding="utf-8")


def test_page_is_whole_and_closes_its_tags(text: str) -> None:
    """The document opens and closes every tag in order."""
    page = Page(text)
    assert page.open == []
    assert [t for t, _ in page.tags[:2]] == ["html", "head"]


def test_page_needs_nothing_from_elsewhere(text: str) -> None:
    """No script, image, font, style sheet or frame is fetched; links lead only to the map's own pages."""
    page = Page(text)
    assert {t for t, _ in page.tags} & {"script", "link", "img", "iframe", "object", "embed"} == set()
    assert all("src" not in a for _, a in page.tags)
    assert "@import" not in text
    assert "url(" not in text
    links = [a["href"] for t, a in page.tags if t == "a"]
    assert links
    assert all(re.fullmatch(r"https://www\.openstreetmap\.org/(way|node)/\d+", str(link)) for link in links)


def test_charts_are_well_formed_and_named(text: str) -> None:
    """Every chart is sound XML and says what it shows to readers who can't see it."""
    charts = re.findall(r"<svg.*?</svg>", text, re.DOTALL)
    assert len(charts) >= 3
    for chart in charts:
        root = ET.fromstring(chart)
        assert root.get("aria-label") or root.get("aria-hidden") == "true"


def test_figures_are_those_of_the_ladder(text: str, store: Store) -> None:
    """Each wide line stands in the table with count, vehicles, mean and quantiles."""
    said = re.sub(r"<[^>]+>", " ", text)
    lines = [
        x for x in quantile_rows(store, "maneuver", ("zone", "maneuver"), None, PLAIN) if not x["is_thin"]
    ]
    assert len(lines) == 4
    for x in lines:
        parts = [x["maneuver"], f"{x['n']:,}", str(x["vehicles"]), seconds(x["mean_s"])]
        for p in (5, 15, 50, 85, 95):
            parts += [seconds(x[f"p{p}_s"]), seconds(x[f"p{p}_lower_s"]), "to", seconds(x[f"p{p}_upper_s"])]
        assert re.search(r"\s+".join(map(re.escape, parts)), said), parts


def test_cautions_stand_before_the_figures(text: str) -> None:
    """A sample and no count, not control delay, engineer, personal data: all above the first chart."""
    top = text[: text.index("By maneuver and zone")]
    for word in ("not a count", "control delay", "licensed engineer", "personal data"):
        assert word in top.replace("<em>not</em> the", "").replace("\n", " "), word


def test_rows_are_accounted_for(text: str) -> None:
    """Rows in, used, dropped by reason, held; and where the figures come from."""
    said = re.sub(r"\s+", " ", re.sub(r"<[^>]+>", " ", text))
    assert (
        "used 6,300 100.0 % dropped: bad coordinate 3 0.0 % held for the next batch 0 0.0 % in 6,303" in said
    )
    assert "finished 700 100.0 % entered 700" in said
    assert "version 1: limit or class default" in said
    assert "© OpenStreetMap contributors" in said


def test_thin_movements_are_not_among_the_costliest(store: Store, tmp_path: Path) -> None:
    """With higher limits fewer movements are listed, plain ids or not."""
    counts = []
    for least in (0, 30, 701):
        own = load_settings(over={"privacy": {"plain_ids": True, "min_passages": least, "min_vehicles": 0}})
        write_report(store, tmp_path / "r.html", own)
        page = (tmp_path / "r.html").read_text(encoding="utf-8")
        wanted = [x for x in quantile_rows(store, "movement", None, None, PLAIN) if x["n"] >= least]
        counts.append(page.count("openstreetmap.org/node/"))
        assert counts[-1] == min(len(wanted), 20)
    assert counts[0] > counts[1] > counts[2] == 0
    assert "lines with 700 passages are not shown" in page


def test_same_store_gives_the_same_page(store: Store, text: str, tmp_path: Path) -> None:
    """The page holds no clock: written again, it is the same to the byte."""
    write_report(store, tmp_path / "r.html", PLAIN)
    assert (tmp_path / "r.html").read_text(encoding="utf-8") == text


def test_names_are_escaped(built: Built, fresh_store: Store, tmp_path: Path) -> None:
    """A zone or batch named like markup stays text."""
    evil = "<b>&'\""
    tables = {**built.tables, "junction": built.tables["junction"].with_columns(zone=pl.lit(evil))}
    zoned = replace(built, tables=tables)
    fill(fresh_store, zoned, PLAIN, found_at_random(built, 300, 30, 3), evil)
    write_report(fresh_store, tmp_path / "r.html", PLAIN)
    text = (tmp_path / "r.html").read_text(encoding="utf-8")
    assert "<b>" not in text
    assert "&lt;b&gt;&amp;" in text
    assert Page(text).open == []


def test_invented_network_is_not_credited(built: Built, fresh_store: Store, tmp_path: Path) -> None:
    """A store that says its streets are invented credits nobody and links nowhere."""
    fill(fresh_store, built, PLAIN, found_at_random(built, 300, 30, 3))
    fresh_store.put_meta("network_source", "invented")
    write_report(fresh_store, tmp_path / "r.html", PLAIN)
    text = (tmp_path / "r.html").read_text(encoding="utf-8")
    assert "openstreetmap" not in text.lower()


def test_batch_without_passages_makes_a_page(built: Built, fresh_store: Store, tmp_path: Path) -> None:
    """Nothing found is said, and is no error."""
    fill(fresh_store, built, PLAIN, found_at_random(built, 0, 1, 3))
    write_report(fresh_store, tmp_path / "r.html", PLAIN)
    assert "No passages yet" in (tmp_path / "r.html").read_text(encoding="utf-8")


def test_store_without_batches_says_what_to_run(
    fresh_store: Store, settings: Settings, tmp_path: Path
) -> None:
    """Before the first batch there is nothing to report."""
    with pytest.raises(StoreError, match="turntally ingest"):
        write_report(fresh_store, tmp_path / "r.html", settings)
    assert list(tmp_path.glob("*.html")) == []


@pytest.mark.parametrize("name", ["r.pdf", "r", "no/r.html"])
def test_impossible_target_is_refused(name: str, store: Store, tmp_path: Path) -> None:
    """Another ending or a missing folder is refused before any work."""
    with pytest.raises(InputError, match=r"ends in \.html|is missing"):
        write_report(store, tmp_path / name, PLAIN)


def test_scale_is_linear_and_its_ticks_are_round() -> None:
    """Values land in proportion, those outside at the rim, and ticks are multiples of 1, 2 or 5."""
    scale = Scale(-10, 90, 100, 600)
    assert [scale.at(v) for v in (-10, 40, 90, 500, -99)] == [100, 350, 600, 600, 100]
    assert scale.ticks(5) == [0, 20, 40, 60, 80]
    assert Scale(0, 10, 0, 1).ticks(7) == [0, 2, 4, 6, 8, 10]
    assert Scale(0, 3600, 0, 1).ticks(7) == [0, 1000, 2000, 3000]


def line_of(**over: Any) -> dict[str, Any]:
    """Build one ladder line."""
    out: dict[str, Any] = {
        "zone": "a",
        "maneuver": "left",
        "turn_sector": "-90..-80",
        "n": 1234,
        "vehicles": 56,
    }
    for p, s in ((5, -1.0), (15, 2.0), (50, 5.0), (85, 20.0), (95, 40.0)):
        out |= {f"p{p}_s": s, f"p{p}_lower_s": s - 0.5, f"p{p}_upper_s": s + 0.5}
    return out | over


def test_median_stands_at_its_value() -> None:
    """The stroke of the median lies where the axis has its seconds."""
    line = line_of()
    scale = scale_of([line])
    root = ET.fromstring(ladder_chart([line], "maneuver", scale, "x"))
    (middle,) = [e for e in root.iter() if e.get("class") == "middle"]
    share = (float(middle.get("x1") or "nan") - scale.start) / (scale.end - scale.start)
    assert scale.low + share * (scale.high - scale.low) == pytest.approx(5.0, abs=0.05)


def test_open_figures_are_left_out_of_charts() -> None:
    """A limit or quantile that is open draws no mark, and is called open in words."""
    line = line_of(p95_s=None, p50_upper_s=None)
    chart = ladder_chart([line], "maneuver", scale_of([line]), "x")
    assert 'class="reach"' not in chart
    assert 'class="sure"' not in chart
    assert "P95 open s" in chart
    gone = line_of(p85_s=None)
    assert 'class="most"' not in sector_chart([gone], 30.0, "x")


def test_left_turns_stand_on_the_left() -> None:
    """The sector from -90 lies left of the middle, the one from 80 right of it."""
    chart = sector_chart([line_of(), line_of(turn_sector="80..90")], 30.0, "x")
    left, right = (
        float(e.get("x") or "nan") for e in ET.fromstring(chart).iter() if e.get("class") == "most"
    )
    assert left < 44 + (752 - 22 - 44) / 2 < right


@pytest.mark.parametrize(("value", "said"), [(None, "open"), (1.26, "1.3"), (-0.04, "0.0"), (-2.0, "−2.0")])
def test_seconds_are_written_with_one_decimal(value: float | None, said: str) -> None:
    """Open figures are words, no figure is minus nought."""
    assert seconds(value) == said


def test_labels_are_plain_words() -> None:
    """slight_right reads as two words, the empty zone as what it is."""
    assert (plain("slight_right"), plain("")) == ("slight right", "outside zones")
