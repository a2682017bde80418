"""Where the global options may stand, and what an interrupt or a fault ends in."""

import contextlib
import signal
from pathlib import Path
from typing import Any

import pytest

from stream.cli.main import hoist, main
from stream.errors import ConfigError, InputError, StoreError, StreamError
from stream.ingest import Progress
from stream.store import Store


@pytest.mark.parametrize(
    ("given", "ordered"),
    [
        ([], []),
        (["status", "--json"], ["--json", "status"]),
        (
            ["export", "--to", "a.csv", "--store", "s", "arms"],
            ["--store", "s", "export", "--to", "a.csv", "arms"],
        ),
        (["ingest", "--config=c.yaml", "x"], ["--config=c.yaml", "ingest", "x"]),
        (["--quiet", "ingest", "x", "--json"], ["--quiet", "--json", "ingest", "x"]),
        (["ingest", "--", "--json", "--store"], ["ingest", "--", "--json", "--store"]),
        (["status", "--storey"], ["status", "--storey"]),
    ],
)
def test_hoist_moves_global_options_only(given: list[str], ordered: list[str]) -> None:
    """Global options come to the front with their values; all else keeps its order."""
    assert hoist(given) == ordered


@pytest.mark.parametrize("name", ["--store", "--config"])
def test_hoist_without_a_value_is_refused(name: str) -> None:
    """An option that takes a value and stands last is named."""
    with pytest.raises(ValueError, match=name):
        hoist(["status", name])


@pytest.fixture
def store(tmp_path: Path) -> str:
    """Give the path of an empty store."""
    path = tmp_path / "s.duckdb"
    Store.open(path, create=True).close()
    return str(path)


def raising(error: BaseException) -> Any:
    """Give a function that raises whatever it is given."""

    def fail(*_: object) -> None:
        raise error

    return fail


class Panic(BaseException):
    """What a library in another language raises when an interrupt meets it."""


INTERRUPTED = "turntally: interrupted; the store stands at its last commit\n"
OUT_OF_MEMORY = (
    "turntally: out of memory; the store stands at its last commit: lower run.chunk_rows or run.threads, "
    "or give the process more memory\n"
)


@pytest.mark.parametrize(
    ("error", "code", "said"),
    [
        (StoreError("a.duckdb: is held"), 1, "turntally: a.duckdb: is held\n"),
        (InputError("row 3: no time"), 1, "turntally: row 3: no time\n"),
        (ConfigError("key x"), 2, "turntally: key x\n"),
        (StreamError("else"), 1, "turntally: else\n"),
        (KeyboardInterrupt(), 130, INTERRUPTED),
        (MemoryError(), 1, OUT_OF_MEMORY),
        (RuntimeError("can't start new thread"), 1, OUT_OF_MEMORY),
    ],
    ids=lambda value: type(value).__name__ if isinstance(value, BaseException) else "",
)
def test_main_turns_errors_into_exit_codes(
    error: BaseException,
    code: int,
    said: str,
    store: str,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    """What a user can mend ends in its message on stderr and the exit code of its kind; nothing on stdout."""
    monkeypatch.setattr("stream.store.status.status", raising(error))
    with pytest.raises(SystemExit) as left:
        main(["status", "--store", store])
    assert left.value.code == code
    assert capsys.readouterr() == ("", said)


@pytest.mark.parametrize("error", [Panic("unwrap"), RuntimeError("no such table"), StoreError("no commit")])
def test_main_knows_an_interrupt_that_a_library_took_for_a_fault(
    error: BaseException, store: str, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """An interrupt that is swallowed on its way, and so makes something fail, ends as an interrupt."""

    def swallow(_: object) -> None:
        with contextlib.suppress(KeyboardInterrupt):
            signal.raise_signal(signal.SIGINT)
        raise error

    monkeypatch.setattr("stream.store.status.status", swallow)
    with pytest.raises(SystemExit) as left:
        main(["status", "--store", store])
    assert left.value.code == 130
    assert capsys.readouterr() == ("", INTERRUPTED)
    assert signal.getsignal(signal.SIGINT) is signal.default_int_handler


def test_main_lets_our_own_faults_through(store: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """A fault of the program is not dressed up as one of the user's."""
    for error in (RuntimeError("rows don't add up"), Panic("they don't add up")):
        monkeypatch.setattr("stream.store.status.status", raising(error))
        with pytest.raises(type(error), match="add up"):
            main(["status", "--store", store])


@pytest.mark.parametrize(("error", "code"), [(KeyboardInterrupt(), 130), (InputError("b.csv: broken"), 1)])
def test_ingest_ended_early_says_what_is_in(
    error: BaseException,
    code: int,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    """Whoever interrupts a row of deliveries is told which of them are in."""

    def take_two(*args: Any) -> None:
        args[-1](Progress("b.csv", 1, 3, 10, 0, 1, 2, 0.5))
        raise error

    monkeypatch.setattr("stream.ingest.ingest", take_two)
    monkeypatch.setattr("stream.cli.ingest.note_compiling", lambda _: None)
    with pytest.raises(SystemExit) as left:
        main(["ingest", "a.csv", "b.csv", "c.csv"])
    assert left.value.code == code
    assert capsys.readouterr().err.startswith("turntally: batches before b.csv are in (1 of 3)\n")
