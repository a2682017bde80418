"""The command as a process of its own, as a user runs it."""

import json
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parent.parent
COMMAND = (sys.executable, "-c", "from stream.cli import main; main()")
TIMEOUT_S = 300


def environment(**more: str) -> dict[str, str]:
    """Give the environment of the test with the checkout on the import path."""
    return {**os.environ, "PYTHONPATH": str(ROOT), "COLUMNS": "100", **more}


def turntally(*args: object, cwd: Path, **more: str) -> "subprocess.CompletedProcess[str]":
    """Run a command to its end and give exit code and both outputs.

    Parameters
    ----------
    args
        Arguments, made into texts.
    cwd
        Working folder.
    more
        Additions to the environment.
    """
    return subprocess.run(
        [*COMMAND, *map(str, args)],
        cwd=cwd,
        env=environment(**more),
        capture_output=True,
        text=True,
        timeout=TIMEOUT_S,
        check=False,
    )


def done(*args: object, cwd: Path) -> str:
    """Run a command that must succeed and give what it printed."""
    ran = turntally(*args, cwd=cwd)
    assert ran.returncode == 0, ran.stderr
    return ran.stdout


def done_json(*args: object, cwd: Path) -> dict[str, Any]:
    """Run a command with --json that must succeed and give its one object."""
    whole = json.loads(done(*args, "--json", cwd=cwd))
    assert isinstance(whole, dict)
    return whole


def refused(*args: object, cwd: Path, code: int = 1) -> str:
    """Run a command that must be refused with one clear message, and give that message."""
    ran = turntally(*args, cwd=cwd)
    assert ran.returncode == code, (ran.returncode, ran.stdout, ran.stderr)
    assert ran.stdout == ""
    assert "Traceback" not in ran.stderr
    notes, found, message = ran.stderr.rpartition("turntally: ")
    assert found
    assert "Usage" not in notes
    return message.strip()
