"""Runs commands in forks of one process that has everything loaded, to be struck at a chosen moment.

    python -m tests.fork_server BLOBS

BLOBS is a pickle of a network's arrays, by which the kernels are loaded. Each line of stdin is a request
(`tests.forks.Forks.run`), each line of stdout its answer. A fork runs `turntally` as its own process does,
but for the second that imports take; a strike is a signal from outside, at a step or some time after it.
"""

import codecs
import contextlib
import json
import os
import pickle
import select
import signal
import sys
import traceback
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np

import stream.cli.ingest
from stream.cli import main
from stream.config import load_settings
from stream.detect.carry import new_states
from stream.detect.run import Detector
from stream.ingest import ingest as _loads_ingest  # noqa: F401 - so that no fork has to
from stream.network import streets_from_blobs
from stream.pings.order import GroupCheck
from stream.store import Store
from stream.store import database as clock
from stream.store.vehicles import VehicleNames

Hook = Callable[[str], None]
_OS_CALLS = ("open", "link", "rename", "replace", "unlink", "remove")
_STORE_CALLS = ("run", "frame", "batches", "close")


def warm(blobs: dict[str, bytes]) -> None:
    """Load the kernels; no thread may be left that a fork would miss."""
    detector = Detector(streets_from_blobs(blobs), load_settings(), threads=1)
    states = new_states(1)
    lon, lat = np.full(3, 10.001), np.full(3, 50.0)
    detector.feed(states, np.zeros(3, np.int32), np.arange(3) * 1_000_000, lon, lat)
    detector.close(states)
    codecs.lookup("ascii")  # another user may not read the library
    GroupCheck(Path("none"), 0).check(np.zeros(1, np.int32), np.zeros(1, np.int64), 1)


def _hook_method(owner: Any, name: str, step: Hook) -> None:
    original = getattr(owner, name)

    def called(*args: Any, **named: Any) -> Any:
        if owner is os and "__pycache__" in str(args[0]):  # compiled kernels on their way to disk
            return original(*args, **named)
        what = args[1] if owner is Store and len(args) > 1 else ""
        label = f"{getattr(owner, '__name__', owner)}.{name} {what}".rstrip()
        step(f"before {label}")
        result = original(*args, **named)
        step(f"after {label}")
        return result

    setattr(owner, name, called)


def _hook_transaction(step: Hook) -> None:
    original = Store.transaction

    @contextlib.contextmanager
    def transaction(self: Store) -> Iterator[None]:
        step("before begin")
        with original(self):
            step("after begin")
            yield
            step("before commit")
        step("after commit")

    Store.transaction = transaction  # type: ignore[method-assign]


def _hook(step: Hook) -> None:
    """Call `step` before and after each thing that a command does to store, key and detection."""
    for name in _STORE_CALLS:
        _hook_method(Store, name, step)
    _hook_transaction(step)
    for name in ("feed", "close"):
        _hook_method(Detector, name, step)
    _hook_method(VehicleNames, "save", step)
    for name in _OS_CALLS:
        _hook_method(os, name, step)


def _set_clock(shift_s: float, from_step: int, taken: list[int]) -> None:
    """Let the clock of the store go wrong from a step on."""
    real = clock.now_us

    def wrong() -> int:
        return real() + (round(shift_s * 1e6) if taken[0] >= from_step else 0)

    for module in list(sys.modules.values()):
        if getattr(module, "now_us", None) is real:
            module.now_us = wrong  # type: ignore[attr-defined]


def _meddle(what: str, file: Path) -> None:
    """Do to a file what happens to files."""
    if what == "truncate":
        os.truncate(file, file.stat().st_size // 2)
    elif what == "append":
        with file.open("ab") as out:
            out.write(file.read_bytes()[-40:])
    elif what == "remove":
        file.unlink()
    else:  # another file of the same size and time takes its place
        told, other = file.stat(), file.with_name("other")
        other.write_bytes(file.read_bytes()[::-1])
        os.utime(other, ns=(told.st_atime_ns, told.st_mtime_ns))
        other.replace(file)


def _limit(more_bytes: int) -> None:
    """Let the process have so much address space more than it has."""
    import resource

    pages = int(Path("/proc/self/statm").read_text(encoding="ascii").split()[0])
    most = pages * resource.getpagesize() + more_bytes
    resource.setrlimit(resource.RLIMIT_AS, (most, most))


def _child(asked: dict[str, Any], news: int) -> int:
    """Run one command in this process, which ends with it."""
    signal.signal(signal.SIGINT, signal.default_int_handler)
    os.chdir(asked["cwd"])
    logs = Path(asked["logs"])
    for number, name in ((1, "stdout"), (2, "stderr")):
        file = os.open(logs / name, os.O_WRONLY | os.O_CREAT | os.O_TRUNC, 0o600)
        os.dup2(file, number)
        os.close(file)
    steps = os.open(logs / "steps", os.O_WRONLY | os.O_CREAT | os.O_TRUNC, 0o600)
    strike, meddle = asked["strike"], asked["meddle"]
    taken = [0]

    def step(label: str) -> None:
        taken[0] += 1
        os.write(steps, f"{label}\n".encode())
        if meddle and label == meddle[0]:
            how = list(meddle)
            meddle.clear()
            _meddle(how[1], Path(how[2]))
        if taken[0] != strike["step"]:
            return
        if strike["after_s"] is None:
            os.kill(os.getpid(), strike["signal"])
        else:
            os.write(news, b".")

    _hook(step)
    if asked["clock_s"]:
        _set_clock(asked["clock_s"], asked["clock_step"], taken)
    if asked["more_bytes"] is not None:
        _limit(asked["more_bytes"])
    if asked["user"] is not None:
        os.setuid(asked["user"])
    if strike["step"] == 0 and strike["after_s"] is not None:
        os.write(news, b".")
    try:
        main(asked["args"])
    except SystemExit as end:
        return int(end.code or 0)
    except BaseException:  # told as the interpreter would
        traceback.print_exc()
        return 1
    return 0


def _watch(pid: int, news: int, strike: dict[str, Any]) -> int:
    """Wait for a fork's end, striking it from outside where a moment was asked for."""
    if os.read(news, 1) and not select.select([news], [], [], strike["after_s"])[0]:
        os.kill(pid, strike["signal"])
    return os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1])


def _run(asked: dict[str, Any]) -> int:
    reader, writer = os.pipe()
    pid = os.fork()
    if pid == 0:
        code = 70
        try:
            os.close(reader)
            code = _child(asked, writer)
            sys.stdout.flush()
            sys.stderr.flush()
        finally:
            os._exit(code)
    os.close(writer)
    try:
        return _watch(pid, reader, asked["strike"])
    finally:
        os.close(reader)


def serve(blobs: Path) -> None:
    """Answer requests until stdin ends."""
    stream.cli.ingest.note_compiling = lambda _session: None
    warm(pickle.loads(blobs.read_bytes()))
    print("ready", flush=True)
    for line in sys.stdin:
        print(_run(json.loads(line)), flush=True)


if __name__ == "__main__":
    serve(Path(sys.argv[1]))
