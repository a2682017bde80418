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
from stream.cli.say import Session, warn
from stream.errors import StreamError

_INTERRUPTED = 130
_WITH_VALUE = ("--store", "--config")
_FLAGS = ("--quiet", "--json")


class _Guarded(TyperGroup):
    """Turns what a user can mend into a message and an exit code."""

    def invoke(self, ctx: Any) -> Any:
        try:
            return super().invoke(ctx)
        except StreamError as err:
            warn(str(err))
            raise typer.Exit(err.exit_code) from err
        except MemoryError as err:
            warn(
                "out of memory; the store stands at its last commit: "
                "lower run.chunk_rows or run.threads, or give the process more memory"
            )
            raise typer.Exit(StreamError.exit_code) from err
        except BaseException as err:
            # A compiled library at work hands an interrupt on in an exception of its own that quotes it.
            if not isinstance(err, KeyboardInterrupt) and "KeyboardInterrupt" not in str(err):
                raise
            warn("interrupted; the store stands at its last commit")
            raise typer.Exit(_INTERRUPTED) from err


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
    quiet: Annotated[bool, typer.Option("--quiet", help="No progress, no notes; errors only.")] = False,
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
