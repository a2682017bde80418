"""What the report says, read from the store; strata below the disclosure limits are left out and counted."""

from dataclasses import dataclass
from typing import Any

from stream.config import Settings
from stream.errors import StoreError
from stream.store import Store
from stream.store.ladder import KeptTally, kept_tallies, quantile_rows
from stream.store.origin import Origin, origin_of
from stream.store.status import status

N_COSTLIEST = 20
Line = dict[str, Any]


@dataclass(frozen=True)
class Ladder:
    """Lines of one tally by some dimensions, all wide enough to show.

    Attributes
    ----------
    by : the dimensions
    lines : as `quantile_rows` gives them
    n_held : lines that were too thin to show
    n_rows_held : passages in them
    """

    by: tuple[str, ...]
    lines: list[Line]
    n_held: int
    n_rows_held: int


@dataclass(frozen=True)
class Facts:
    """Everything on the page.

    Attributes
    ----------
    whole : the store in one look, as `status` gives it
    passed : counts over all passages
    by_maneuver, by_band, by_sector : ladders of delays; None where no tally has the dimensions
    costliest, coverage, references : rows of `sql/report/`
    origin : network and credit
    min_passages, min_vehicles : the limits that lines were held to
    """

    whole: dict[str, Any]
    passed: dict[str, Any]
    by_maneuver: Ladder | None
    by_band: Ladder | None
    by_sector: Ladder | None
    costliest: list[Line]
    coverage: list[Line]
    references: list[Line]
    origin: Origin
    min_passages: int
    min_vehicles: int


def _ladder(
    store: Store, tallies: dict[str, KeptTally], by: tuple[str, ...], settings: Settings
) -> Ladder | None:
    """Take the first tally of delays that tells the dimensions apart."""
    able = [t.name for t in tallies.values() if t.value == "delay" and set(by) <= set(t.dimensions)]
    if not able:
        return None
    lines = quantile_rows(store, able[0], by, None, settings)
    thin = [line for line in lines if line["is_thin"]]
    return Ladder(by, [x for x in lines if not x["is_thin"]], len(thin), sum(x["n"] for x in thin))


def gather(store: Store, settings: Settings) -> Facts:
    """Read the facts of a store.

    Raises
    ------
    StoreError
        The store holds no batch yet.
    """
    tallies = kept_tallies(store)
    if not tallies:
        raise StoreError(f"{store.path}: holds nothing to report; run `turntally ingest FILE...` first")
    keys = settings.privacy
    limits = {"min_passages": keys.min_passages, "min_vehicles": keys.min_vehicles}
    return Facts(
        whole=status(store),
        passed=store.rows("report/passed")[0],
        by_maneuver=_ladder(store, tallies, ("zone", "maneuver"), settings),
        by_band=_ladder(store, tallies, ("zone", "time_band"), settings),
        by_sector=_ladder(store, tallies, ("zone", "turn_sector"), settings),
        costliest=store.rows("report/costliest", {**limits, "n_rows": N_COSTLIEST}),
        coverage=store.rows("report/coverage"),
        references=store.rows("report/references"),
        origin=origin_of(store),
        **limits,
    )
