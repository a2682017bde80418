"""The command `turntally`: global options, exit codes, and the commands by group.

Guarantee: 0 done, 1 refused by data or store, 2 wrong usage or configuration, 130 interrupted; what a user
can mend never shows a traceback. Libraries that are slow to load are loaded inside the commands.
"""

import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Annotated, Any

import typer
from typer.core import TyperGroup

from stream import __version__
from stream.cli import export, ingest, keep, look, network, recount, showcase
from stream.cli.interrupt import Watch
from stream.cli.say import Session, warn
from stream.errors import StreamError

_INTERRUPTED = 130
# What libraries say where a thread gets no memory.
_NO_THREAD = ("start new thread", "spawn threads", "spawn worker thread", "launch worker thread")
_WITH_VALUE = ("--store", "--config")
_FLAGS = ("--quiet", "--json")


class _Guarded(TyperGroup):
    """Turns what a user can mend into a message and an exit code."""

    def invoke(self, ctx: Any) -> Any:
        with Watch() as interrupt:
            try:
                return super().invoke(ctx)
            except typer.Exit:
                raise
            except BaseException as err:
                code = _told(err, interrupt.has_come)
                if code is None:
                    raise
                raise typer.Exit(code) from err


def _told(err: BaseException, is_interrupted: bool) -> int | None:
    """Say what ended a command and give its exit code; None for a fault of our own."""
    if is_interrupted or isinstance(err, KeyboardInterrupt):
        warn("interrupted; the store stands at its last commit")
        return _INTERRUPTED
    if isinstance(err, StreamError):
        warn(str(err))
        return err.exit_code
    if isinstance(err, MemoryError) or any(said in str(err) for said in _NO_THREAD):
        warn(
            "out of memory; the store stands at its last commit: "
            "lower run.chunk_rows or run.threads, or give the process more memory"
        )
        return StreamError.exit_code
    return None


app = typer.Typer(
    cls=_Guarded,
    add_completion=False,
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    help="Turn raw GPS probe archives into junction-delay samples by maneuver class.",
    epilog="These options may also stand after the command. Exit: 0 done, 1 refused by the data or "
    "the store, 2 wrong usage or configuration, 130 interrupted.",
)


def _show_version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"turntally {__version__}")
        raise typer.Exit


@app.callback()
def _options(
    ctx: typer.Context,
    store: Annotated[Path, typer.Option(metavar="FILE", help="DuckDB file of all results.")] = Path(
        "turntally.duckdb"
    ),
    config: Annotated[
        Path | None,
        typer.Option(metavar="FILE", help="YAML file of settings; turntally.yaml here, if there is one."),
    ] = None,
    quiet: Annotated[
        bool, typer.Option("--quiet", help="No progress, no notes: results and errors only.")
    ] = False,
    as_json: Annotated[bool, typer.Option("--json", help="Print the result as one JSON object.")] = False,
    version: Annotated[  # noqa: ARG001 - acts through its callback
        bool, typer.Option("--version", callback=_show_version, is_eager=True, help="Print the version.")
    ] = False,
) -> None:
    ctx.obj = Session(store, config, quiet, as_json)


app.command("demo")(showcase.demo)
app.command("network")(network.network)
app.command("ingest")(ingest.ingest)
app.command("status")(look.status)
app.command("audit")(look.audit)
app.command("snapshot")(keep.snapshot)
app.command("retract")(keep.retract)
app.command("compact")(keep.compact)
app.command("retally")(recount.retally)
app.command("quantiles")(look.quantiles)
app.command("export")(export.export)
app.command("report")(export.report)


def hoist(args: Sequence[str]) -> list[str]:
    """Bring the global options to the front, wherever they stand before a `--`.

    Raises
    ------
    ValueError
        An option that takes a value stands last.
    """
    front: list[str] = []
    rest: list[str] = []
    waiting = iter(args)
    for arg in waiting:
        if arg == "--":
            rest += [arg, *waiting]
        elif arg in _WITH_VALUE:
            value = next(waiting, None)
            if value is None:
                raise ValueError(arg)
            front += [arg, value]
        elif arg in _FLAGS or arg.startswith(tuple(f"{name}=" for name in _WITH_VALUE)):
            front.append(arg)
        else:
            rest.append(arg)
    return front + rest


def main(args: Sequence[str] | None = None) -> None:
    """Run one command and leave with its exit code.

    Parameters
    ----------
    args
        Arguments without the program's name; None takes those of the process.
    """
    try:
        ordered = hoist(sys.argv[1:] if args is None else args)
    except ValueError as err:
        warn(f"option {err} needs a FILE after it; `turntally --help` shows the options")
        sys.exit(2)
    app(args=ordered, prog_name="turntally")
