"""The order of the layers, held by reading the imports (house rule; DEVELOPERS.md, Layers)."""

import ast
import graphlib
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
STREAM = ROOT / "stream"

# Lowest first. A module imports from lower rows only; names in one row don't know each other.
LAYERS = (
    ("errors",),
    ("kernel", "config"),
    ("geodesy",),
    ("network",),
    ("detect", "pings", "demo"),
    ("tally",),
    ("store",),
    ("ingest",),
    ("export", "report"),
    ("showcase",),
    ("cli",),
)
RANK = {name: rank for rank, row in enumerate(LAYERS) for name in row}
MAX_FILE_LINES = 400
MAX_FUNCTION_LINES = 50
MAX_ARGUMENTS = 8

FILES = sorted(STREAM.rglob("*.py"))


def module_of(path: Path) -> str:
    """Give the dotted name of a source file."""
    parts = path.relative_to(ROOT).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


MODULES = {module_of(path): path for path in FILES}


def imports_of(path: Path) -> Iterator[str]:
    """Give every module that a file imports, wherever the import stands, as deep as it is a module."""
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import in line {node.lineno}"
            assert node.module is not None
            for alias in node.names:
                deeper = f"{node.module}.{alias.name}"
                yield deeper if deeper in MODULES else node.module


def tops_of(path: Path) -> set[str]:
    """Give the outermost names that a file imports."""
    return {name.partition(".")[0] for name in imports_of(path)}


def functions_of(path: Path) -> Iterator[ast.FunctionDef | ast.AsyncFunctionDef]:
    """Give the functions of a file."""
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
            yield node


def is_kernel(function: ast.FunctionDef | ast.AsyncFunctionDef) -> bool:
    """Tell a compiled kernel, or a part of one, by its decorator."""
    return any(isinstance(d, ast.Name) and d.id in ("kernel", "spliced") for d in function.decorator_list)


def told(path: Path) -> str:
    """Name a file in the id of a test."""
    return str(path.relative_to(STREAM))


def test_every_module_has_a_layer() -> None:
    """A new file or folder directly under stream/ gets a place in the list before it is used."""
    placed = {name.split(".")[1] for name in MODULES if "." in name}
    assert placed == set(RANK) & placed


@pytest.mark.parametrize("path", FILES, ids=told)
def test_imports_go_down(path: Path) -> None:
    """A module imports its own folder and lower layers, nothing beside or above."""
    own = module_of(path).partition(".")[2].partition(".")[0]
    for name in imports_of(path):
        top, _, rest = name.partition(".")
        used = rest.partition(".")[0]
        if top != "stream" or not used or used not in RANK:
            continue
        assert own, f"stream/__init__.py imports {name} when loaded; load it inside a function"
        assert used == own or RANK[used] < RANK[own], f"{own} imports {name}"


def test_imports_have_no_ring() -> None:
    """No two modules need each other, also within one folder."""
    graph = {
        name: {used for used in imports_of(path) if used in MODULES and used not in (name, "stream")}
        for name, path in MODULES.items()
    }
    # A folder's __init__ hands on what is in it, so only what other folders take from it counts.
    for name, path in MODULES.items():
        if path.name == "__init__.py":
            for inner in [m for m in MODULES if m.startswith(f"{name}.")]:
                graph[inner].discard(name)
    assert list(graphlib.TopologicalSorter(graph).static_order())


@pytest.mark.parametrize(
    ("library", "homes"),
    [
        ("duckdb", ("store/", "pings/order.py")),
        ("yaml", ("config.py",)),
        ("pydantic", ("config.py",)),
        ("typer", ("cli/",)),
        ("rich", ("cli/",)),
        ("osmium", ("network/",)),
        ("numba", ("kernel.py", "detect/run.py")),
    ],
)
def test_library_stays_in_its_home(library: str, homes: tuple[str, ...]) -> None:
    """What one layer is for, no other layer loads."""
    users = [told(path) for path in FILES if library in tops_of(path)]
    assert [name for name in users if not name.startswith(homes)] == []


def test_detect_is_pure() -> None:
    """Detection serves threads, workers and a cluster: it loads no frames, no database, no files."""
    for path in (STREAM / "detect").glob("*.py"):
        assert tops_of(path) & {"polars", "duckdb", "pyarrow", "osmium", "yaml"} == set(), path.name


def test_only_cli_prints() -> None:
    """Nothing below the command line writes to the terminal."""
    guilty = []
    for path in FILES:
        if told(path).startswith("cli/"):
            continue
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            printing = isinstance(node, ast.Name) and node.id == "print"
            stream = isinstance(node, ast.Attribute) and node.attr in ("stdout", "stderr")
            if printing or stream:
                guilty.append(f"{told(path)}:{node.lineno}")
    assert guilty == []


def test_no_module_hides_the_standard_library() -> None:
    """`stream` is a plain word, so its parts carry no name of the standard library."""
    parts = {part for name in MODULES for part in name.split(".")[1:]}
    gone = {"chunk"}  # left the library with Python 3.13 (PEP 594)
    assert parts & set(sys.stdlib_module_names) - gone == set()


@pytest.mark.parametrize("path", FILES, ids=told)
def test_file_is_short_and_says_what_it_is_for(path: Path) -> None:
    """At most 400 lines a file and 50 a function (kernels excepted), 8 arguments, a docstring on top."""
    text = path.read_text(encoding="utf-8")
    assert len(text.splitlines()) <= MAX_FILE_LINES
    assert ast.get_docstring(ast.parse(text))
    for function in functions_of(path):
        if is_kernel(function):
            continue
        body = function.body[1:] if ast.get_docstring(function) else function.body
        lines = function.end_lineno - body[0].lineno + 1 if body else 0
        assert lines <= MAX_FUNCTION_LINES, function.name
        given = [*function.args.posonlyargs, *function.args.args, *function.args.kwonlyargs]
        assert len([a for a in given if a.arg not in ("self", "cls")]) <= MAX_ARGUMENTS, function.name


def test_command_line_loads_nothing_slow() -> None:
    """Loading the command line loads no compiler, no frames, no database: help comes at once."""
    code = "import sys, stream.cli; print(*{m.partition('.')[0] for m in sys.modules})"
    ran = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=ROOT, timeout=60
    )
    slow = {"numba", "numpy", "polars", "duckdb", "pyarrow", "pydantic", "osmium", "shapely", "yaml"}
    assert set(ran.stdout.split()) & slow == set()
