"""Runs one `ingest` as a process of its own, with the stand-in for a detector, to be killed or starved.

    python child.py STORE FILE [--kill-before NAME N] [--room BYTES] [--user UID]

`--kill-before` ends the process by SIGKILL before the Nth run of a SQL file (`commit` for the commit itself);
`--room` lets no file be written beyond that many bytes, as a full disk would; `--user` goes on as that user,
once everything is imported.
"""

import argparse
import contextlib
import os
import signal
import sys
from pathlib import Path
from typing import Any

from stream.config import load_settings
from stream.errors import StreamError
from stream.ingest import ingest
from stream.store import Store
from tests.stand_in import install


def _kill_before(name: str, n: int) -> None:
    run, transaction = Store.run, Store.transaction
    left = [n]

    def strike(at: str) -> None:
        left[0] -= at == name
        if left[0] == 0:
            os.kill(os.getpid(), signal.SIGKILL)

    def run_or_die(self: Store, at: str, *rest: Any, **named: Any) -> Any:
        strike(at)
        return run(self, at, *rest, **named)

    @contextlib.contextmanager
    def commit_or_die(self: Store) -> Any:
        with transaction(self):
            yield
            strike("commit")

    Store.run = run_or_die  # type: ignore[method-assign]
    Store.transaction = commit_or_die  # type: ignore[method-assign]


def _limit(room: int) -> None:
    import resource

    resource.setrlimit(resource.RLIMIT_FSIZE, (room, room))


def _set(path: str, value: Any) -> None:
    module, _, name = path.rpartition(".")
    __import__(module)
    setattr(sys.modules[module], name, value)


def main() -> int:
    """Ingest, and give the exit code that the command line would give."""
    parser = argparse.ArgumentParser()
    parser.add_argument("store", type=Path)
    parser.add_argument("file", type=Path)
    parser.add_argument("--kill-before", nargs=2)
    parser.add_argument("--room", type=int)
    parser.add_argument("--user", type=int)
    asked = parser.parse_args()
    install(_set)
    if asked.kill_before:
        _kill_before(asked.kill_before[0], int(asked.kill_before[1]))
    if asked.room is not None:
        _limit(asked.room)
    if asked.user is not None:
        os.setuid(asked.user)
    settings = load_settings(over={"privacy": {"plain_ids": True}, "run": {"chunk_rows": 40}})
    try:
        (report,) = ingest(asked.store, [asked.file], settings)
    except StreamError as err:
        print(err)
        return err.exit_code
    print(report["status"])
    return 0


if __name__ == "__main__":
    sys.exit(main())
