"""The command that shows the whole job on an invented town."""

from enum import StrEnum
from pathlib import Path
from typing import Annotated, Any

import typer

from stream.cli.bars import Bars
from stream.cli.ingest import note_compiling, told
from stream.cli.say import Session, table


class Side(StrEnum):
    """The side of the road that the town drives on."""

    right = "right"
    left = "left"


def demo(
    ctx: typer.Context,
    into: Annotated[Path, typer.Option(metavar="DIR", help="Folder for the town and its results.")] = Path(
        "demo-town"
    ),
    days: Annotated[int, typer.Option(metavar="N", min=1, max=31, help="Days to drive.")] = 3,
    drive_on: Annotated[Side, typer.Option(help="Side of the road.")] = Side.right,
    prepare: Annotated[
        bool, typer.Option("--prepare", help="Write the town and its pings only, to take them in by hand.")
    ] = False,
) -> None:
    """Run the whole job on an invented town with known delays."""
    from stream.showcase import prepare_demo, run_demo

    session: Session = ctx.obj
    over = {"run": session.settings().run.model_dump()}
    if prepare:
        with Bars(session) as bars:
            made = prepare_demo(into, days, drive_on.value, over, bars.show)
        session.result(made, _prepared(made))
        return
    note_compiling(session)
    with Bars(session) as bars:
        whole = run_demo(into, days, drive_on.value, over, bars.show)
    session.result(whole, _told(whole))


def _told(whole: dict[str, Any]) -> str:
    seconds = whole["seconds"]
    stages = ", ".join(f"{stage} {s:.1f}" for stage, s in seconds.items() if stage != "whole")
    heads = ("zone", "maneuver", "passages", "seen", "P50 true", "measured", "P85 true", "measured", "")
    rows = [
        [one["zone"] or "-", one["maneuver"], f"{one['n_true']:,}", f"{one['n_seen']:,}"]
        + [_seconds(one[f"{q}_{side}_ms"]) for q in ("p50", "p85") for side in ("true", "seen")]
        + ["" if one["is_close"] else "off"]
        for one in whole["table"]
    ]
    met = whole["accuracy"]
    lines = [
        f"an invented town that drives on the {whole['drive_on']}: {whole['days']} days, "
        f"{whole['pings']:,} pings, {met['n_true']:,} true passages, {seconds['whole']:.1f} s ({stages})",
        "",
        *(told(batch) for batch in whole["batches"]),
        "",
        "delay in s, measured beside true",
        table(heads, rows, left=2),
    ]
    if not all(one["is_close"] for one in whole["table"]):
        lines.append("off: farther from the truth than 0.5 s and 5 %")
    lines += [
        f"recall {met['recall']:.2%}, precision {met['precision']:.2%}, right arms {met['right_arms']:.2%}, "
        f"bias of traversal {_seconds(met['bias_ms'], 3)} s",
        "",
        f"next: turntally quantiles --store {whole['paths']['store']}",
    ]
    if "report" in whole["paths"]:
        lines.append(f"report: {whole['paths']['report']}")
    return "\n".join(lines)


def _prepared(made: dict[str, Any]) -> str:
    paths = made["paths"]
    lines = [f"{paths['town']}, {paths['zones']}", *paths["pings"]]
    return "\n".join(
        [
            f"an invented town that drives on the {made['drive_on']}: {made['days']} days, "
            f"{made['pings']:,} pings",
            *(f"  {line}" for line in lines),
            f"next: turntally network {paths['town']} --zones {paths['zones']}",
        ]
    )


def _seconds(ms: float | None, digits: int = 1) -> str:
    return "-" if ms is None else f"{ms / 1000:.{digits}f}"
