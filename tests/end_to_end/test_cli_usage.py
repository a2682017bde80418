"""The command line as such: help, usage, exit codes, where options may stand, what goes to which stream."""

import json
import resource
import subprocess
from pathlib import Path

import pytest

from stream import __version__
from stream.cli.main import app
from stream.store import Store
from tests.command import COMMAND, done, done_json, environment, refused, turntally

MAX_START_S = 0.3  # DESIGN section 12
COMMANDS = tuple(command.name or "" for command in app.registered_commands)


@pytest.fixture
def here(tmp_path: Path) -> Path:
    """Give a folder with an empty store under the default name."""
    Store.open(tmp_path / "turntally.duckdb", create=True).close()
    return tmp_path


def test_help_names_every_command(tmp_path: Path) -> None:
    """The help names all commands and nothing is cut short."""
    said = done("--help", cwd=tmp_path)
    assert [
        line.split()[0] for line in said.partition("Commands:\n")[2].splitlines()[: len(COMMANDS)]
    ] == list(COMMANDS)
    assert "..." not in said.partition("Commands:\n")[2]


def test_help_comes_at_once(tmp_path: Path) -> None:
    """Help takes less than 0.3 s of processor time, best of five."""
    spent = []
    for _ in range(5):
        before = resource.getrusage(resource.RUSAGE_CHILDREN)
        done("--help", cwd=tmp_path)
        after = resource.getrusage(resource.RUSAGE_CHILDREN)
        spent.append(after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime)
    assert min(spent) < MAX_START_S


@pytest.mark.parametrize("name", COMMANDS)
def test_help_of_a_command_needs_no_store(name: str, tmp_path: Path) -> None:
    """Every command explains itself anywhere and leaves nothing behind."""
    assert done(name, "--help", cwd=tmp_path).startswith(f"Usage: turntally {name}")
    assert list(tmp_path.iterdir()) == []


def test_version_is_that_of_the_package(tmp_path: Path) -> None:
    """The version printed is the one of the package."""
    assert done("--version", cwd=tmp_path) == f"turntally {__version__}\n"


@pytest.mark.parametrize(
    "args",
    [
        ["statsu"],
        ["status", "--no-such"],
        ["status", "surplus"],
        ["network"],
        ["export", "passages"],
        ["status", "--store"],
        ["demo", "--drive-on", "middle"],
        ["demo", "--days", "0"],
        ["ingest"],
        ["quantiles", "--where", "zone"],
        ["--config", "missing.yaml", "quantiles"],
    ],
    ids=" ".join,
)
def test_wrong_usage_exits_2(args: list[str], here: Path) -> None:
    """Wrong usage or configuration is told on stderr, with exit code 2 and without a traceback."""
    ran = turntally(*args, cwd=here)
    assert (ran.returncode, ran.stdout) == (2, "")
    assert ran.stderr
    assert "Traceback" not in ran.stderr


def test_unknown_key_names_the_nearest(here: Path) -> None:
    """A wrong key in turntally.yaml is refused with the nearest known one."""
    (here / "turntally.yaml").write_text("trips:\n  max_gap: 60\n", encoding="utf-8")
    message = refused("quantiles", cwd=here, code=2)
    assert message == "turntally.yaml: unknown key trips.max_gap; did you mean max_gap_s?"


def test_store_missing_says_what_to_do(tmp_path: Path) -> None:
    """A command that needs a store says which is missing and how it is made, and makes none."""
    message = refused("status", "--store", "no.duckdb", cwd=tmp_path)
    assert message == "no.duckdb: no such store; make it with `turntally network EXTRACT`"
    assert list(tmp_path.iterdir()) == []


def test_error_with_json_is_text_on_stderr(tmp_path: Path) -> None:
    """With --json an error leaves stdout empty; it stays a message for people."""
    message = refused("--json", "status", cwd=tmp_path)
    assert "no such store" in message


@pytest.mark.parametrize(
    "args",
    [
        ["--store", "other.duckdb", "--json", "status"],
        ["status", "--json", "--store", "other.duckdb"],
        ["--json", "status", "--store=other.duckdb"],
    ],
    ids=" ".join,
)
def test_global_options_stand_anywhere(args: list[str], tmp_path: Path) -> None:
    """Global options mean the same before and after the command."""
    Store.open(tmp_path / "other.duckdb", create=True).close()
    assert json.loads(done(*args, cwd=tmp_path))["store"] == "other.duckdb"


def test_status_of_an_empty_store_is_one_object(here: Path) -> None:
    """JSON holds numbers and nulls of an empty store, under stable keys."""
    whole = done_json("status", cwd=here)
    assert (whole["network"], whole["batches"], whole["rows_in"], whole["passages"]) == (None, [], 0, 0)


def test_audit_of_an_empty_store_is_sound(here: Path) -> None:
    """An empty store has no fault, and every audit is named."""
    whole = done_json("audit", cwd=here)
    assert (whole["is_sound"], whole["n_faults"]) == (True, 0)
    names = {one["audit"] for one in whole["audits"]}
    assert {"rows_accounted", "time_conserved", "histogram_is_passages", "no_orphan"} <= names


@pytest.mark.parametrize("colour", [{"NO_COLOR": "1"}, {"FORCE_COLOR": "1", "NO_COLOR": "1"}], ids=str)
def test_no_colour_is_obeyed(colour: dict[str, str], here: Path) -> None:
    """With NO_COLOR set, neither results nor errors carry control sequences."""
    for args in (["status"], ["--help"], ["statsu"]):
        ran = turntally(*args, cwd=here, **colour)
        assert "\x1b" not in ran.stdout + ran.stderr


def closed_pipe(args: list[str], here: Path) -> tuple[int, bytes]:
    """Run a command whose reader is gone before it prints; give its exit code and stderr."""
    running = subprocess.Popen(
        [*COMMAND, *args], cwd=here, env=environment(), stdout=subprocess.PIPE, stderr=subprocess.PIPE
    )
    assert running.stdout is not None
    assert running.stderr is not None
    running.stdout.close()
    said = running.stderr.read()
    running.stderr.close()
    return running.wait(), said


@pytest.mark.parametrize("args", [["status"], ["audit", "--json"]], ids=" ".join)
def test_closed_pipe_ends_the_output_not_the_work(args: list[str], here: Path) -> None:
    """A reader that left early sees no message, and what was asked counts as done."""
    assert closed_pipe(args, here) == (0, b"")


def test_closed_pipe_under_help_is_quiet(here: Path) -> None:
    """Help into a closed pipe says nothing."""
    assert closed_pipe(["--help"], here)[1] == b""
