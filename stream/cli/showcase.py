"""The command that shows the whole job on an invented town."""

from enum import StrEnum
from pathlib import Path
from typing import Annotated, Any

import typer

from stream.cli.bars import Bars
from stream.cli.say import Session


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
) -> None:
    """Run the whole job on an invented town with known delays."""
    from stream.showcase import run_demo

    session: Session = ctx.obj
    with Bars(session) as bars:
        whole = run_demo(into, days, drive_on.value, {}, bars.show)
    session.result(whole, _told(whole))


def _told(whole: dict[str, Any]) -> str:
    return str(whole)
