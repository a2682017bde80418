"""Charts as inline SVG: text and shapes only, coloured by the page's own variables.

Guarantee: the same lines give the same text; every mark carries its figures as a title to read or hover.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from html import escape
from typing import Any

Line = dict[str, Any]
_ROW = 26
_LABEL = 118
_COUNT = 74
_PLOT = 560
_WIDE = _LABEL + _PLOT + _COUNT


@dataclass(frozen=True)
class Scale:
    """A linear axis from values to pixels."""

    low: float
    high: float
    start: float
    end: float

    def at(self, value: float) -> float:
        """Give the pixel of a value, to a tenth; values outside stand at the rim."""
        share = (min(max(value, self.low), self.high) - self.low) / (self.high - self.low)
        return round(self.start + share * (self.end - self.start), 1)

    def ticks(self, about: int = 7) -> list[float]:
        """Give round values inside the range, about so many."""
        raw = (self.high - self.low) / about
        size = 10.0 ** math.floor(math.log10(raw))
        step = size * next(m for m in (1, 2, 5, 10) if m * size >= raw)
        first, last = math.ceil(self.low / step), math.floor(self.high / step)
        return [i * step for i in range(first, last + 1)]


def seconds(value: float | None) -> str:
    """Write seconds with one decimal; an open figure as such."""
    if value is None:
        return "open"
    text = f"{value:.1f}"
    return "0.0" if text == "-0.0" else text.replace("-", "−")


def plain(label: str) -> str:
    """Write a value for reading: slight_right as slight right, the empty zone by what it means."""
    return label.replace("_", " ") if label else "outside zones"


def scale_of(lines: Sequence[Line]) -> Scale:
    """Fit an axis round P5 to P95 of all lines, zero always on it."""
    lows = [x["p5_s"] for x in lines if x["p5_s"] is not None]
    highs = [x["p95_s"] for x in lines if x["p95_s"] is not None]
    low, high = min([0.0, *lows]), max([10.0, *highs])
    room = (high - low) * 0.02
    return Scale(low - (room if lows else 0), high + room, _LABEL, _LABEL + _PLOT)


def told(line: Line) -> str:
    """Write all figures of a line in words."""
    parts = [f"P{p} {seconds(line[f'p{p}_s'])} s" for p in (5, 15, 50, 85, 95)]
    limits = f"median between {seconds(line['p50_lower_s'])} and {seconds(line['p50_upper_s'])} s at 95 %"
    return f"{line['n']:,} passages of {line['vehicles']:,} vehicles; {', '.join(parts)}; {limits}"


def _bar(x1: float, x2: float, y: float, height: float, kind: str) -> str:
    width = max(round(x2 - x1, 1), 1)
    top = round(y - height / 2, 1)
    return f'<rect class="{kind}" x="{x1}" y="{top}" width="{width}" height="{height}" rx="1.5"/>'


def _span(line: Line, scale: Scale, y: float) -> str:
    """Draw one line: P5 to P95 thin, P15 to P85 thick, the median as a stroke with its limits behind."""

    def at(name: str) -> float | None:
        return None if line[name] is None else scale.at(line[name])

    p5, p15, p50, p85, p95 = (at(f"p{p}_s") for p in (5, 15, 50, 85, 95))
    low, high = at("p50_lower_s"), at("p50_upper_s")
    out = []
    if p5 is not None and p95 is not None:
        out.append(f'<line class="reach" x1="{p5}" x2="{p95}" y1="{y}" y2="{y}"/>')
    if p15 is not None and p85 is not None:
        out.append(_bar(p15, p85, y, 9, "most"))
    if low is not None and high is not None:
        out.append(_bar(low, high, y, 15, "sure"))
    if p50 is not None:
        out.append(f'<line class="middle" x1="{p50}" x2="{p50}" y1="{y - 8}" y2="{y + 8}"/>')
    return "".join(out)


def ladder_chart(lines: Sequence[Line], name: str, scale: Scale, about: str) -> str:
    """Draw one row per line: label, range, count.

    Parameters
    ----------
    lines
        Ladder lines in seconds, top to bottom.
    name
        The dimension that labels a row.
    scale
        Axis shared with the charts beside this one.
    about
        What the chart shows, for readers who can't see it.
    """
    height = 26 + _ROW * len(lines) + 8
    body = []
    for tick in scale.ticks():
        x = scale.at(tick)
        kind = "zero" if tick == 0 else "grid"
        body.append(f'<line class="{kind}" x1="{x}" x2="{x}" y1="20" y2="{height - 6}"/>')
        body.append(f'<text class="tick" x="{x}" y="13" text-anchor="middle">{_whole(tick)}</text>')
    body.append(f'<text class="tick" x="{_WIDE}" y="13" text-anchor="end">passages</text>')
    body.append(f'<text class="tick" x="{_LABEL - 12}" y="13" text-anchor="end">seconds</text>')
    for i, line in enumerate(lines):
        y = 26 + _ROW * i + _ROW / 2
        label = escape(plain(str(line[name])))
        body.append(f"<g><title>{label}: {escape(told(line))}</title>")
        body.append(f'<text class="label" x="{_LABEL - 12}" y="{y + 4}" text-anchor="end">{label}</text>')
        body.append(_span(line, scale, y))
        body.append(f'<text class="count" x="{_WIDE}" y="{y + 4}" text-anchor="end">{line["n"]:,}</text></g>')
    return _svg(_WIDE, height, about, body)


def _whole(value: float) -> str:
    return f"{value:g}".replace("-", "−")


def _svg(wide: float, high: float, about: str, body: Sequence[str]) -> str:
    return (
        f'<svg viewBox="0 0 {wide} {high}" role="img" aria-label="{escape(about)}" '
        f'xmlns="http://www.w3.org/2000/svg">{"".join(body)}</svg>'
    )


def sector_chart(lines: Sequence[Line], high_s: float, about: str) -> str:
    """Draw median, P15 and P85 of delay over the turn angle, left turns on the left.

    Parameters
    ----------
    lines
        Ladder lines by `turn_sector`.
    high_s
        Top of the axis, shared with the charts beside this one.
    about
        What the chart shows, for readers who can't see it.
    """
    right = _WIDE - 22
    across = Scale(-180, 180, 44, right)
    low_s = min([0.0, *(x["p15_s"] for x in lines if x["p15_s"] is not None)])
    up = Scale(low_s, high_s, 210, 14)
    body = []
    for tick in up.ticks(5):
        y = up.at(tick)
        kind = "zero" if tick == 0 else "grid"
        body.append(f'<line class="{kind}" x1="44" x2="{right}" y1="{y}" y2="{y}"/>')
        body.append(f'<text class="tick" x="36" y="{y + 4}" text-anchor="end">{_whole(tick)}</text>')
    for angle in range(-180, 181, 45):
        x = across.at(angle)
        body.append(f'<text class="tick" x="{x}" y="230" text-anchor="middle">{_whole(angle)}°</text>')
    middle = across.at(0)
    body.append(
        f'<text class="tick" x="{middle}" y="247" text-anchor="middle">left ← turn angle → right</text>'
    )
    width = across.at(10) - across.at(0) - 3
    for line in lines:
        if None in (line["p15_s"], line["p50_s"], line["p85_s"]):
            continue
        x = across.at(float(line["turn_sector"].partition("..")[0])) + 1.5
        top, bottom, y = up.at(line["p85_s"]), up.at(line["p15_s"]), up.at(line["p50_s"])
        body.append(f"<g><title>{line['turn_sector']}°: {escape(told(line))}</title>")
        tall = max(round(bottom - top, 1), 1)
        body.append(f'<rect class="most" x="{x}" y="{top}" width="{width:.1f}" height="{tall}" rx="1.5"/>')
        body.append(f'<line class="middle" x1="{x}" x2="{x + width:.1f}" y1="{y}" y2="{y}"/></g>')
    return _svg(_WIDE, 252, about, body)


def by_zone(lines: Sequence[Line], draw: Callable[[str, list[Line]], str]) -> list[tuple[str, str]]:
    """Draw one chart per zone, in the order of the lines: zone and SVG."""
    zones = list(dict.fromkeys(line["zone"] for line in lines))
    return [(zone, draw(zone, [x for x in lines if x["zone"] == zone])) for zone in zones]
