"""The tables that can leave the store: their queries, keys and what is held back.

Guarantee: strata below the disclosure limits leave only where the configuration says that ids are plain
(own data, own risk); how much was held back is counted.
"""

import difflib
from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import polars as pl

from stream.config import Settings
from stream.errors import ConfigError, StoreError
from stream.store import Store
from stream.store.ladder import KeptTally, kept_tallies, strata_of, vehicles_by

if TYPE_CHECKING:
    import pyarrow as pa


@dataclass(frozen=True)
class Table:
    """One table that can be exported.

    Attributes
    ----------
    name : what the user calls it; also the file below `sql/export/`
    title, about : for the data dictionary
    key : columns that tell rows apart
    is_held : whether disclosure limits apply
    """

    name: str
    title: str
    about: str
    key: tuple[str, ...]
    is_held: bool


TABLES = {
    t.name: t
    for t in (
        Table(
            "passages",
            "Passages",
            "One row per passage of a junction from an entry gate to an exit gate, by vehicle and time.",
            ("vehicle", "entry_at"),
            True,
        ),
        Table(
            "arms", "Arms", "One row per road at a junction, with its gates.", ("junction_id", "arm"), False
        ),
        Table("links", "Links", "One row per road between two junctions.", ("link_ix",), False),
        Table("junctions", "Junctions", "One row per place where roads meet.", ("junction_id",), False),
        Table(
            "movements",
            "Movements",
            "One row per way through a junction, as from-way, via-node, to-way, with its delays.",
            ("junction_id", "arm_in", "arm_out"),
            True,
        ),
        Table(
            "histogram",
            "Histograms",
            "One row per stratum and bin that is not empty, over all batches; adding rows up is exact.",
            ("tally", "stratum_id", "bin_ix"),
            True,
        ),
    )
}


@dataclass(frozen=True)
class Limits:
    """The least that a stratum must hold to leave the store; both 0 where nothing is held back."""

    min_passages: int
    min_vehicles: int

    @property
    def is_open(self) -> bool:
        """Tell whether nothing can be held back."""
        return self.min_passages <= 1 and self.min_vehicles <= 1


@dataclass(frozen=True)
class Withheld:
    """What was held back: strata (for passages: movements), and the passages or sections in them."""

    n_strata: int
    n_rows: int


def find_table(what: str) -> Table:
    """Look a table up.

    Raises
    ------
    ConfigError
        There is no such table; the nearest one is named.
    """
    if what in TABLES:
        return TABLES[what]
    near = difflib.get_close_matches(what, list(TABLES), 1, 0.4)
    mend = f"did you mean {near[0]}?" if near else f"there are {', '.join(TABLES)}"
    raise ConfigError(f"export {what!r}: no such table; {mend}")


def limits_of(settings: Settings) -> Limits:
    """Take the limits from the configuration; ids as given (own data, own risk) lift them."""
    keys = settings.privacy
    return Limits(0, 0) if keys.plain_ids else Limits(keys.min_passages, keys.min_vehicles)


def _strata_with_vehicles(store: Store, tally: KeptTally, settings: Settings) -> pl.DataFrame:
    """Give `tally`, `stratum_id`, `vehicles` for the strata of one tally."""
    dims = list(tally.dimensions)
    seen = vehicles_by(store, tally, dims, settings)
    joined = strata_of(store, tally).join(seen, on=dims, how="left")
    return joined.select(pl.lit(tally.name).alias("tally"), "stratum_id", pl.col("vehicles").fill_null(0))


def _strata(store: Store, settings: Settings, limits: Limits) -> tuple[pl.DataFrame, Withheld]:
    """Give the strata whose histograms may leave, and what the others hold."""
    all_of = store.frame("export/all_strata")
    if limits.is_open or all_of.is_empty():
        return all_of.select("tally", "stratum_id"), Withheld(0, 0)
    seen = pl.concat(_strata_with_vehicles(store, t, settings) for t in kept_tallies(store).values())
    told = all_of.join(seen, on=["tally", "stratum_id"], how="left").with_columns(
        pl.col("vehicles").fill_null(0)
    )
    wide = (pl.col("n") >= limits.min_passages) & (pl.col("vehicles") >= limits.min_vehicles)
    thin = told.filter(~wide)
    return told.filter(wide).select("tally", "stratum_id"), Withheld(thin.height, int(thin["n"].sum()))


def rows_of(store: Store, table: Table, settings: Settings) -> tuple[Iterator["pa.RecordBatch"], Withheld]:
    """Give the rows of a table in batches, and what is held back from them.

    Raises
    ------
    StoreError
        The store holds no network yet.
    """
    if not store.run("network/find_network"):
        raise StoreError(f"{store.path}: holds no network; run `turntally network EXTRACT` first")
    name = f"export/{table.name}"
    limits = limits_of(settings)
    if not table.is_held:
        return store.batches(name), Withheld(0, 0)
    if table.name == "histogram":
        strata, withheld = _strata(store, settings, limits)
        return store.batches(name, None, strata), withheld
    params: dict[str, Any] = {"min_passages": limits.min_passages, "min_vehicles": limits.min_vehicles}
    counted = store.run("export/withheld_passages", params)[0]
    return store.batches(name, params), Withheld(*counted)
