"""Stored passages and sections counted, from the rows and the network tables alone.

Guarantee: the code that counts a batch when it is taken in counts here as well; memory holds one slice of
rows and the counts so far, however many rows there are.
"""

from collections.abc import Callable, Iterator
from typing import Any

import polars as pl

from stream.config import Settings
from stream.store.database import Store
from stream.tally import Adder, Counts, needed_columns, with_local_time

_ROWS = 500_000  # in memory at once
_LOCAL = {"hour", "weekday", "month", "day_type", "time_band"}
_JUNCTION = ("junction_ix", "zone", "driving_side", "time_zone", "control")

Tell = Callable[[int], None]


class RowCounter:
    """Counts what a store holds under one configuration; reads the network tables once.

    Attributes
    ----------
    n_unknown : rows met so far that name a movement or arm the network has not; they are not counted
    """

    def __init__(self, store: Store, settings: Settings, tell: Tell | None = None) -> None:
        self._store = store
        self._settings = settings
        self._tell = tell
        self.n_unknown = 0
        junction = store.frame("network/all_junction").select(_JUNCTION)
        arm = store.frame("network/all_arm").join(junction, on="junction_ix", how="left")
        self._movement = _numbered(_of_movements(store, arm))
        self._arm = _numbered(_of_arms(store, arm))

    def held(self, holder_id: int) -> Counts:
        """Count all that the histograms under one batch's number stand for: its own, or its month's."""
        total = Adder(self._settings)
        kinds = {tally.value for tally in self._settings.tallies.values()}
        keys = self._movement.select("junction_id", "arm_in", "arm_out", "ix")
        for part in self._slices("retally/passages_of", holder_id, keys) if "delay" in kinds else ():
            total.add_passages(self._known(part, self._movement, "delay"))
        keys = self._arm.select("junction_id", "arm", "ix")
        for part in self._slices("retally/sections_of", holder_id, keys) if "pace" in kinds else ():
            total.add_sections(self._known(part, self._arm, "pace"))
        return total.sum()

    def _slices(self, name: str, holder_id: int, keys: pl.DataFrame) -> Iterator[pl.DataFrame]:
        for part in self._store.batches(name, {"holder_id": holder_id}, keys, _ROWS):
            if part.num_rows:
                yield pl.DataFrame(part)
                if self._tell is not None:
                    self._tell(part.num_rows)

    def _known(self, rows: pl.DataFrame, of: pl.DataFrame, kind: Any) -> pl.DataFrame:
        """Leave out rows of what the network has not, and set beside the others what tallies sort by."""
        known = rows.drop_nulls("ix")
        self.n_unknown += rows.height - known.height
        read = set(needed_columns(self._settings.tallies, kind))
        given = [c for c in of.columns if c in read or (c == "time_zone" and read & _LOCAL)]
        out = known.hstack(of.select(given)[known["ix"]])
        return with_local_time(out, self._settings.time, "at_us") if read & _LOCAL else out


def _numbered(frame: pl.DataFrame) -> pl.DataFrame:
    """Number rows from 0, and keep texts as numbers of a list: they sort faster."""
    texts = [c for c, t in frame.schema.items() if t == pl.String]
    return frame.with_columns(
        pl.int_range(pl.len(), dtype=pl.Int32).alias("ix"),
        *(pl.col(c).cast(pl.Enum(frame[c].unique().sort())) for c in texts),
    )


def _of_movements(store: Store, arm: pl.DataFrame) -> pl.DataFrame:
    """Give all that a passage takes from its movement, its arms and its junction."""
    movement = store.frame("network/all_movement").drop("arm_in", "arm_out", "junction_id", "junction_ix")
    into = arm.rename({"arm_ix": "arm_in_ix", "arm": "arm_in", "class": "class_in"})
    out = arm.select(arm_out_ix="arm_ix", arm_out="arm", class_out="class")
    joined = movement.join(into, on="arm_in_ix", how="left", maintain_order="left")
    return joined.join(out, on="arm_out_ix", how="left", maintain_order="left").select(
        "junction_id", "arm_in", "arm_out", "turn_deg", "maneuver", "is_banned", "class_in", "class_out",
        "zone", "driving_side", "time_zone", "control",
    )  # fmt: skip


def _of_arms(store: Store, arm: pl.DataFrame) -> pl.DataFrame:
    """Give all that a section takes from the arm it comes from, and from that arm's link."""
    link = store.frame("network/all_link").select("link_ix", link_class="class", link_zone="zone")
    return arm.join(link, on="link_ix", how="left", maintain_order="left").select(
        "junction_id", "arm", "driving_side", "time_zone",
        pl.coalesce("link_class", "class").alias("class"), pl.coalesce("link_zone", "zone").alias("zone"),
    )  # fmt: skip
