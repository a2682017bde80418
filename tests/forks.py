"""The command run in forks of a process that has everything loaded: a tenth of a second apiece, not two.

What a fork can be put through: a signal at a step or at a moment, limits on files and memory, another user,
a clock that goes wrong.
"""

import json
import os
import pickle
import signal
import subprocess
import sys
from dataclasses import dataclass, field
from pathlib import Path
from types import TracebackType
from typing import Any, Self

from stream.network import Built, streets_to_blobs
from tests.command import ROOT, environment


@dataclass(frozen=True)
class Strike:
    """A signal sent to a fork.

    Attributes
    ----------
    step : it comes at this step, from 1; 0: as the command begins
    after_s : so long after the step, wherever the process is then; None: at the step itself
    signal : which
    """

    step: int
    after_s: float | None = None
    signal: int = signal.SIGKILL


_LOGS = ("stdout", "stderr", "steps")
NO_STRIKE = Strike(-1)


@dataclass(frozen=True)
class Ended:
    """How a fork ended: exit code (minus the signal that killed it), outputs, and the steps it came to."""

    code: int
    stdout: str
    stderr: str
    steps: list[str] = field(repr=False)

    @property
    def was_killed(self) -> bool:
        """Tell a kill from an end of its own."""
        return self.code == -signal.SIGKILL


class Forks:
    """A server of forks; use it in a `with` block.

    Parameters
    ----------
    folder
        For its own files.
    built
        Any network: its arrays are needed to load the kernels.
    """

    def __init__(self, folder: Path, built: Built) -> None:
        self._logs = folder
        blobs = folder / "blobs.pickle"
        blobs.write_bytes(pickle.dumps(streets_to_blobs(built.streets)))
        self._server = subprocess.Popen(
            [sys.executable, "-m", "tests.fork_server", str(blobs)],
            cwd=ROOT,
            env=environment(OPENBLAS_NUM_THREADS="1"),
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
        )
        self._answer("ready")

    def _answer(self, wanted: str | None = None) -> str:
        assert self._server.stdout is not None
        line = self._server.stdout.readline().strip()
        assert line, "the server of forks is gone"
        assert wanted in (None, line)
        return line

    def run(
        self,
        *args: object,
        cwd: Path,
        strike: Strike = NO_STRIKE,
        more_bytes: int | None = None,
        user: int | None = None,
        clock_s: float = 0.0,
        clock_step: int = 0,
        meddle: tuple[str, str, Path] | None = None,
    ) -> Ended:
        """Run one command to its end, whatever that is.

        Parameters
        ----------
        args
            Arguments of `turntally`, made into texts.
        cwd
            Working folder.
        more_bytes
            Address space that it may have beside what it has.
        user
            Go on as this user.
        clock_s, clock_step
            The store's clock is wrong by so much from that step on.
        meddle
            The step, by name, at which something happens to a file: `truncate`, `append`, `remove` or
            `replace`; and the file.
        """
        asked: dict[str, Any] = {
            "args": [str(a) for a in args],
            "cwd": str(cwd),
            "logs": str(self._logs),
            "strike": {"step": strike.step, "after_s": strike.after_s, "signal": int(strike.signal)},
            "more_bytes": more_bytes,
            "user": user,
            "clock_s": clock_s,
            "clock_step": clock_step,
            "meddle": [*meddle[:2], str(meddle[2])] if meddle else [],
        }
        assert self._server.stdin is not None
        print(json.dumps(asked), file=self._server.stdin, flush=True)
        code = int(self._answer())
        out, err, steps = (
            (self._logs / n).read_text(encoding="utf-8") for n in ("stdout", "stderr", "steps")
        )
        return Ended(code, out, err, steps.splitlines())

    def done(self, *args: object, cwd: Path) -> Ended:
        """Run a command that must succeed."""
        ended = self.run(*args, cwd=cwd)
        assert ended.code == 0, (ended.code, ended.stderr)
        return ended

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        assert self._server.stdin is not None
        assert self._server.stdout is not None
        self._server.stdin.close()
        self._server.stdout.close()
        self._server.wait(60)


def can_fork() -> bool:
    """Tell whether this system has forks."""
    return hasattr(os, "fork")
