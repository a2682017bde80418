"""The parts of README.md that are made from the program: commands, and keys of the configuration.

``python -m tests.readme`` writes them anew; `test_docs.py` refuses a README in which they are stale.
"""

import inspect
import re
import types
import typing
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import typer
from typer.models import OptionInfo

from stream.cli.main import app
from stream.tally.strata import DIMENSIONS

ROOT = Path(__file__).resolve().parent.parent
README = ROOT / "README.md"
DEFAULTS = ROOT / "config" / "default.yaml"
_LINE = re.compile(
    r"^(?P<indent> *)(?:- (?P<item>\w+)|(?P<key>\w+):(?: +(?P<value>[^#\s][^#]*?))?)(?: +# (?P<said>.*))?$"
)


def _cell(text: str) -> str:
    return text.replace("|", "\\|")


@dataclass(frozen=True)
class _Given:
    """One argument or option of a command, read from the signature of the function behind it."""

    shown: str
    said: str
    default: Any
    is_option: bool
    is_required: bool


def _given(function: Callable[..., Any]) -> Iterator[_Given]:
    for name, param in inspect.signature(function, eval_str=True).parameters.items():
        if param.annotation is typer.Context:
            continue
        kind, info = typing.get_args(param.annotation)[:2]
        is_option = isinstance(info, OptionInfo)
        is_required = param.default is param.empty
        default = None if is_required or kind is bool else param.default
        metavar = info.metavar or "|".join(getattr(kind, "__members__", ()))
        if is_option:
            given = [info.default] if isinstance(info.default, str) else []  # typer reads it as a name
            names = ", ".join([*given, *(info.param_decls or [])]) or f"--{name.replace('_', '-')}"
            shown = names if kind is bool else f"{names} {metavar}"
        else:
            shown = f"{metavar}..." if typing.get_origin(kind) in (list, types.UnionType) else metavar
        yield _Given(shown, info.help, getattr(default, "value", default), is_option, is_required)


def _usage(name: str, function: Callable[..., Any]) -> str:
    parts = [one.shown if one.is_required else f"[{one.shown}]" for one in _given(function)]
    return " ".join([f"turntally {name}", *parts])


def _rows(function: Callable[..., Any]) -> Iterator[str]:
    for one in _given(function):
        said = one.said if one.default is None else f"{one.said} Default: {one.default}."
        yield f"| `{_cell(one.shown)}` | {_cell(said)} |"


def commands() -> str:
    """Give the section of commands as Markdown."""
    options = app.registered_callback
    assert options is not None
    assert options.callback is not None
    out = ["Global options, before or after the command:", "", "| option | meaning |", "|---|---|"]
    out += _rows(options.callback)
    for command in app.registered_commands:
        assert command.callback is not None
        out += ["", f"### `{_usage(command.name or '', command.callback)}`", ""]
        out.append(inspect.getdoc(command.callback) or "")
        rows = list(_rows(command.callback))
        if rows:
            out += ["", "| argument | meaning |", "|---|---|", *rows]
    return "\n".join(out)


def keys() -> dict[str, tuple[str, str]]:
    """Give each key of `config/default.yaml` with its default and what stands beside it.

    A map whose keys are road classes, bands or days is one key, as is a list.
    """
    out: dict[str, tuple[str, str]] = {}
    sections: dict[str, str] = {}
    path: list[str] = []
    for line in DEFAULTS.read_text(encoding="utf-8").splitlines():
        if not line.strip() or line.startswith("#"):
            continue
        found = _LINE.match(line)
        assert found, f"{DEFAULTS.name}: can't read {line!r}"
        path[len(found["indent"]) // 2 :] = [found["key"] or found["item"]]
        *above, last = path
        whole = ".".join(above)
        if found["item"] or (len(path) > 2 and whole != "source.columns"):
            held, said = out[whole]
            item = found["item"] or f"{last} {found['value']}"
            out[whole] = (f"{held}, {item}" if held else item, said)
        elif len(path) == 1 or last == "columns":
            sections[".".join(path)] = found["said"] or ""
        else:
            out[f"{whole}.{last}"] = (found["value"] or "", found["said"] or sections[whole])
    return out


def configuration() -> str:
    """Give the table of keys as Markdown."""
    rows = [f"| `{key}` | {_cell(value)} | {_cell(said)} |" for key, (value, said) in keys().items()]
    return "\n".join(["| key | default | meaning, unit, range |", "|---|---|---|", *rows])


def dimensions() -> str:
    """Give the table of dimensions as Markdown."""
    rows = [f"| `{d.name}` | {' and '.join(d.kinds)} | {_cell(d.about)} |" for d in DIMENSIONS.values()]
    return "\n".join(["| dimension | tallies of | value |", "|---|---|---|", *rows])


_MADE = {"configuration": configuration, "dimensions": dimensions, "commands": commands}


def spliced(text: str) -> str:
    """Give the text with every made part put in anew between its two marks."""
    for name, make in _MADE.items():
        start, end = f"<!-- {name}: made by tests/readme.py -->", f"<!-- {name} end -->"
        before, found, rest = text.partition(start)
        assert found, f"README.md lacks the line {start}"
        assert end in rest, f"README.md lacks the line {end}"
        text = before + start + "\n" + make() + "\n" + end + rest.partition(end)[2]
    return text


if __name__ == "__main__":
    README.write_text(spliced(README.read_text(encoding="utf-8")), encoding="utf-8")
