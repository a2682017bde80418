"""The page itself: facts in, HTML out. Nothing is fetched from anywhere, so it reads the same offline."""

from collections.abc import Sequence
from datetime import datetime
from html import escape
from typing import Any

from stream.report.draw import by_zone, ladder_chart, plain, scale_of, seconds, sector_chart
from stream.report.facts import Facts, Ladder, Line
from stream.report.style import STYLE
from stream.store.origin import ATTRIBUTION, LICENCE

CAUTIONS = (
    "These are passages of <em>equipped vehicles</em>: a sample of their own kind (taxis, vans, users of "
    "navigation), not a count of all traffic. Volumes and shares of turns can't be read from it.",
    "Delay is gate-to-gate time on top of cruising over the same path. It holds slowing for the turn "
    "itself, is cut off at the gates, and is <em>not</em> the control delay that levels of service are "
    "defined by.",
    "Where a queue reached past the entry gate, and for passages that were never seen to end, the true "
    "delay is longer than what is shown here.",
    "The limits assume independent passages. Many by few vehicles say less than their number suggests: "
    "look at both columns.",
    "A change to a signal or a road needs a licensed engineer and the local standards.",
    "Location traces are personal data: follow the law of the place before handing anything on.",
)
_KEY = (
    ('<line class="reach" x1="0" x2="40" y1="8" y2="8"/>', "P5 to P95"),
    ('<rect class="most" x="0" y="3" width="40" height="9" rx="1.5"/>', "P15 to P85"),
    ('<line class="middle" x1="20" x2="20" y1="0" y2="16"/>', "median"),
    ('<rect class="sure" x="8" y="1" width="24" height="14" rx="1.5"/>', "95 % limits of the median"),
)


def _table(heads: Sequence[str], rows: Sequence[Sequence[str]], n_text: int) -> str:
    """Write a table whose cells are HTML already; the first columns are texts."""
    kinds = ['class="text"'] * n_text + [""] * (len(heads) - n_text)
    head = "".join(f"<th {k} scope='col'>{h}</th>" for k, h in zip(kinds, heads, strict=True))
    body = "".join(
        "<tr>" + "".join(f"<td {k}>{c}</td>" for k, c in zip(kinds, row, strict=True)) + "</tr>"
        for row in rows
    )
    return f'<div class="scroll"><table><thead><tr>{head}</tr></thead><tbody>{body}</tbody></table></div>'


def _day(at: datetime | None) -> str:
    return "none" if at is None else f"{at:%Y-%m-%d}"


def _head(facts: Facts) -> str:
    spans = [b for b in facts.whole["batches"] if b["first_ping_at"] is not None]
    first = min((b["first_ping_at"] for b in spans), default=None)
    last = max((b["last_ping_at"] for b in spans), default=None)
    figures = (
        ("passages", facts.passed["n_passages"]),
        ("vehicles", facts.passed["n_vehicles"]),
        ("trips", facts.whole["trips"]),
        ("junctions passed", facts.passed["n_junctions"]),
        ("pings read", facts.whole["rows_in"]),
    )
    cells = "".join(f"<div><dt>{name}</dt><dd>{n:,}</dd></div>" for name, n in figures)
    cautions = "".join(f"<li>{c}</li>" for c in CAUTIONS)
    return (
        f"<h1>What the junctions cost</h1><p class='lead'>Delay of vehicles at junctions, from pings of "
        f"{_day(first)} to {_day(last)} (UTC), measured from an entry gate before each junction to an exit "
        f"gate behind it.</p><dl class='figures'>{cells}</dl>"
        f"<section class='caution'><strong>Before you use a figure</strong><ul>{cautions}</ul></section>"
    )


def _key() -> str:
    items = (
        f'<li><svg viewBox="0 0 40 16" aria-hidden="true">{mark}</svg>{text}</li>' for mark, text in _KEY
    )
    return f'<ul class="key">{"".join(items)}</ul>'


def _held(ladder: Ladder, facts: Facts) -> str:
    if not ladder.n_held:
        return ""
    return (
        f"<p class='note'>{ladder.n_held:,} lines with {ladder.n_rows_held:,} passages are not shown: they "
        f"hold fewer than {facts.min_passages} passages or {facts.min_vehicles} vehicles.</p>"
    )


def _charts(ladder: Ladder, name: str, what: str) -> str:
    scale = scale_of(ladder.lines)

    def draw(zone: str, lines: list[Line]) -> str:
        return ladder_chart(lines, name, scale, f"{what}, zone {plain(zone)}")

    drawn = by_zone(ladder.lines, draw)
    return "".join(f"<h3>{escape(plain(z))}</h3><div class='chart'>{svg}</div>" for z, svg in drawn)


def _with_limits(line: Line, level: str) -> str:
    low, high = line[f"{level}_lower_s"], line[f"{level}_upper_s"]
    return f"{seconds(line[f'{level}_s'])}<small>{seconds(low)} to {seconds(high)}</small>"


def _by_maneuver(facts: Facts) -> str:
    ladder = facts.by_maneuver
    if ladder is None:
        return ""
    if not ladder.lines:
        return f"<h2>By maneuver and zone</h2>{_held(ladder, facts) or '<p>No passages yet.</p>'}"
    levels = (5, 15, 50, 85, 95)
    heads = ("zone", "maneuver", "passages", "vehicles", "mean", *(f"P{p}" for p in levels))
    rows = []
    for x in ladder.lines:
        cells = [_with_limits(x, f"p{p}") for p in levels]
        names = (escape(plain(x["zone"])), escape(plain(x["maneuver"])))
        rows.append((*names, f"{x['n']:,}", f"{x['vehicles']:,}", seconds(x["mean_s"]), *cells))
    return (
        "<h2>By maneuver and zone</h2><p>Seconds on top of cruising. A negative figure is a vehicle that "
        f"went faster than its reference speed.</p>{_key()}{_charts(ladder, 'maneuver', 'Delay by maneuver')}"
        f"<h3>The same in figures, seconds; limits at 95 % below</h3>{_table(heads, rows, 2)}"
        "<p class='note'>A quantile is the order statistic of rank ceil(q n), shown by the middle of its "
        "bin: within 0.125&nbsp;s or 1&nbsp;% of it, whichever is more. Limits assume no distribution; "
        f"<em>open</em> means that the sample is too small for one.</p>{_held(ladder, facts)}"
    )


def _by_band(facts: Facts) -> str:
    ladder = facts.by_band
    if ladder is None or not ladder.lines:
        return ""
    charts = _charts(ladder, "time_band", "Delay by band of the day")
    return (
        "<h2>By time of day</h2><p>All maneuvers together, in the junction's local time.</p>"
        f"{_key()}{charts}{_held(ladder, facts)}"
    )


def _by_sector(facts: Facts) -> str:
    ladder = facts.by_sector
    if ladder is None or not ladder.lines:
        return ""
    high_s = max([10.0, *(x["p85_s"] for x in ladder.lines if x["p85_s"] is not None)]) * 1.03

    def draw(zone: str, lines: list[Line]) -> str:
        return sector_chart(lines, high_s, f"Delay by turn angle, zone {plain(zone)}")

    drawn = by_zone(ladder.lines, draw)
    charts = "".join(f"<h3>{escape(plain(z))}</h3><div class='chart'>{svg}</div>" for z, svg in drawn)
    return (
        "<h2>By turn angle</h2><p>Seconds of delay in sectors of 10 degrees: P15 to P85 as a bar, the "
        f"median as a stroke.</p>{charts}{_held(ladder, facts)}"
    )


def _osm(kind: str, number: int, facts: Facts) -> str:
    if not facts.origin.is_osm:
        return str(number)
    return f'<a href="https://www.openstreetmap.org/{kind}/{number}">{number}</a>'


def _costliest(facts: Facts) -> str:
    whose = ("from way", "via node", "to way", "maneuver", "control", "zone")
    heads = (*whose, "passages", "vehicles", "mean, s", "in all, h")
    rows = [
        (
            _osm("way", x["way_in_id"], facts),
            _osm("node", x["junction_id"], facts),
            _osm("way", x["way_out_id"], facts),
            escape(plain(x["maneuver"])) + (" (banned)" if x["is_banned"] else ""),
            escape(plain(x["control"])),
            escape(plain(x["zone"])),
            f"{x['n_passages']:,}",
            f"{x['n_vehicles']:,}",
            seconds(x["mean_delay_ms"] / 1000),
            f"{x['total_delay_ms'] / 3_600_000:,.2f}",
        )
        for x in facts.costliest
    ]
    if not rows:
        return ""
    return (
        "<h2>Costliest movements</h2><p>By the delay of all seen vehicles together; where more vehicles "
        f"carry a receiver, more delay is seen.</p>{_table(heads, rows, 6)}"
    )


def _share(part: int, whole: int) -> str:
    return f"{100 * part / whole:.1f} %" if whole else "none"


def _listed(counts: dict[str, int], whole: int) -> list[tuple[str, str, str]]:
    return [(escape(plain(k)), f"{n:,}", _share(n, whole)) for k, n in counts.items()]


def _accounts(facts: Facts) -> str:
    whole, passed = facts.whole, facts.passed
    n_entered = passed["n_passages"] + sum(whole["unfinished"].values())
    rows_in = whole["rows_in"]
    kept = [("used", f"{whole['rows_used']:,}", _share(whole["rows_used"], rows_in))]
    kept += [(f"dropped: {k}", n, share) for k, n, share in _listed(whole["dropped"], rows_in)]
    kept += [("held for the next batch", f"{whole['rows_held']:,}", _share(whole["rows_held"], rows_in))]
    kept += [("<strong>in</strong>", f"<strong>{rows_in:,}</strong>", "")]
    ended = [("finished", f"{passed['n_passages']:,}", _share(passed["n_passages"], n_entered))]
    ended += [(f"unfinished: {k}", n, share) for k, n, share in _listed(whole["unfinished"], n_entered)]
    ended += [("<strong>entered</strong>", f"<strong>{n_entered:,}</strong>", "")]
    queued = _share(passed["n_queued_at_gate"], passed["n_passages"])
    banned = _share(passed["n_banned"], passed["n_passages"])
    return (
        "<h2>What came in, and what became of it</h2>"
        f"<div class='pair'><div><h3>Pings</h3>{_table(('', 'rows', 'share'), kept, 1)}</div>"
        f"<div><h3>Passages</h3>{_table(('', 'passages', 'share'), ended, 1)}</div></div>"
        f"<p class='note'>In {queued} of the passages a queue already reached past the entry gate. {banned} "
        "went where a turn restriction forbids it: a measure of how far map and matching can be "
        "trusted.</p>"
    )


def _coverage(facts: Facts) -> str:
    heads = ("zone", "movements", "seen", "passages", "vehicles", "unfinished", "first", "last")
    rows = []
    for x in facts.coverage:
        thin = x["n_passages"] < facts.min_passages or x["n_vehicles"] < facts.min_vehicles
        numbers = [x["n_movements_seen"], x["n_passages"], x["n_vehicles"], x["n_unfinished"]]
        told = ["held back"] + [""] * 5 if thin else [f"{n:,}" for n in numbers]
        days = [] if thin else [_day(x["first_entry_at"]), _day(x["last_entry_at"])]
        rows.append((escape(plain(x["zone"])), f"{x['n_movements']:,}", *told, *days))
    about = "Movements of the network, and those that were passed."
    return f"<h2>Coverage</h2><p>{about}</p>{_table(heads, rows, 1)}"


def _origin(facts: Facts) -> str:
    network = facts.whole["network"]
    pairs: list[tuple[str, Any]] = [
        ("network", f"{network['n_junctions']:,} junctions, {network['n_links']:,} links"),
        ("network digest", facts.origin.network_digest),
        (
            "reference speeds",
            "; ".join(f"version {r['reference_id']}: {r['basis']}" for r in facts.references),
        ),
        ("batches", ", ".join(b["batch"] for b in facts.whole["batches"])),
        ("held to", f"{facts.min_passages} passages and {facts.min_vehicles} vehicles in each line"),
    ]
    if facts.origin.is_osm:
        pairs.append(("map data", f"{ATTRIBUTION}, {LICENCE}"))
    cells = "".join(f"<dt>{escape(k)}</dt><dd>{escape(str(v))}</dd>" for k, v in pairs)
    return f"<h2>Where this comes from</h2><dl class='origin'>{cells}</dl>"


def page(facts: Facts) -> str:
    """Write the page.

    Returns
    -------
    str
        A whole HTML document with its style and charts inside.
    """
    parts = (_head, _by_maneuver, _by_band, _by_sector, _costliest, _accounts, _coverage, _origin)
    body = "".join(part(facts) for part in parts)
    return (
        '<!doctype html>\n<html lang="en"><head><meta charset="utf-8">'
        '<meta name="viewport" content="width=device-width, initial-scale=1">'
        f"<title>What the junctions cost</title><style>{STYLE}</style></head>"
        f"<body><main>{body}</main></body></html>\n"
    )
