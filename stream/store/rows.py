"""What detection found, made into the rows of the store and into counts.

Guarantee: rows and counts depend on the records, the network and the configuration alone: one record gives
one row, whatever chunk it came in.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import polars as pl
from numpy.typing import NDArray

from stream.config import Settings
from stream.detect.records import END_REASONS, UNFINISHED_REASONS, Found
from stream.store.database import Store
from stream.store.files import statement
from stream.store.vehicles import trip_id
from stream.tally import (
    Counts,
    count_passages,
    count_sections,
    traversal_ms,
    unimpeded_ms,
    with_local_time,
)

Records = NDArray[Any]
_OF_JUNCTION = ("junction_id", "zone", "driving_side", "time_zone", "control")
_OF_MOVEMENT = ("turn_deg", "maneuver", "is_banned")


@dataclass(frozen=True)
class Rows:
    """What one chunk gave: frames with the columns of `sql/batch/put_*.sql`, and the counts.

    Attributes
    ----------
    passage, section, unfinished, trip : one row per record
    counts : of passages and sections, in every tally of the configuration
    """

    passage: pl.DataFrame
    section: pl.DataFrame
    unfinished: pl.DataFrame
    trip: pl.DataFrame
    counts: Counts


def _sql_names(kind: str) -> list[str]:
    return [column for column, _ in statement(f"batch/put_{kind}").incoming]


class RowMaker:
    """Makes rows against the network of a store.

    Parameters
    ----------
    store
        Its tables arm, junction, link and movement are read once.
    settings
        Tallies, time bands, day types.
    reference_id
        Written with each passage; 1 is the speed limit, else the class default.
    """

    def __init__(self, store: Store, settings: Settings, reference_id: int) -> None:
        self._settings = settings
        self._reference_id = reference_id
        junction = store.frame("network/all_junction").select("junction_ix", *_OF_JUNCTION)
        link = store.frame("network/all_link").select(
            "link_ix", pl.col("class").alias("link_class"), pl.col("zone").alias("link_zone")
        )
        arm = store.frame("network/all_arm")
        self._arm = arm.join(junction.drop("junction_id"), on="junction_ix", how="left").join(
            link, on="link_ix", how="left"
        )
        self._arm = self._arm.sort("arm_ix")
        self._n_arms = self._arm.height
        movement = store.frame("network/all_movement").with_columns(
            (pl.col("arm_in_ix").cast(pl.Int64) * self._n_arms + pl.col("arm_out_ix")).alias("key")
        )
        self._movement = movement.sort("key").select("key", *_OF_MOVEMENT)
        self._names = {kind: _sql_names(kind) for kind in ("passage", "section", "unfinished", "trip")}

    def make(self, found: Found, names: Sequence[str], codes: NDArray[np.uint64]) -> Rows:
        """Make the rows of one chunk.

        Parameters
        ----------
        found
            Records, not changed.
        names, codes
            Stored name and number of each vehicle, by its code in the records.

        Raises
        ------
        RuntimeError
            A record names a movement that the network has not: a fault of this program.
        """
        stored = pl.Series(names, dtype=pl.String)
        passage = self._passages(found.passages, stored, codes)
        section = self._sections(found.sections, stored, codes)
        counts = count_passages(passage, self._settings) + count_sections(section, self._settings)
        return Rows(
            passage.select(self._names["passage"]),
            section.select(self._names["section"]),
            self._unfinished(found.unfinished, stored, codes),
            self._trips(found.trips, stored, codes),
            counts,
        )

    def _of_arms(self, arm_ix: NDArray[Any], columns: dict[str, str]) -> dict[str, pl.Series]:
        """Give columns of the arms by index, under new names."""
        part = self._arm.select(list(columns))[arm_ix.astype(np.int64)]
        return {new: part[old] for old, new in columns.items()}

    def _of_movements(self, arm_in_ix: NDArray[Any], arm_out_ix: NDArray[Any]) -> dict[str, pl.Series]:
        wanted = arm_in_ix.astype(np.int64) * self._n_arms + arm_out_ix
        known = self._movement["key"].to_numpy()
        at = np.searchsorted(known, wanted)
        missing = np.flatnonzero(known[np.minimum(at, len(known) - 1)] != wanted) if len(known) else wanted
        if len(wanted) and len(missing):
            first = int(missing[0]) if len(known) else 0
            raise RuntimeError(
                f"passage from arm {int(arm_in_ix[first])} to arm {int(arm_out_ix[first])} is no movement of "
                "the network; nothing was written; please report this"
            )
        part = self._movement[at]
        return {name: part[name] for name in _OF_MOVEMENT}

    def _passages(self, found: Records, names: pl.Series, codes: NDArray[np.uint64]) -> pl.DataFrame:
        of_in = self._of_arms(
            found["arm_in_ix"],
            {
                **{name: name for name in _OF_JUNCTION},
                "arm": "arm_in",
                "class": "class_in",
                "entry_gate_m": "gate_in_m",
                "limit_in_kmh": "in_kmh",
                "limit_kmh": "in_any_kmh",
            },
        )
        of_out = self._of_arms(
            found["arm_out_ix"],
            {
                "arm": "arm_out",
                "class": "class_out",
                "exit_gate_m": "gate_out_m",
                "limit_out_kmh": "out_kmh",
                "limit_kmh": "out_any_kmh",
            },
        )
        traversal = traversal_ms(found["entry_us"], found["exit_us"])
        unimpeded = unimpeded_ms(
            of_in["gate_in_m"].to_numpy(),
            found["inside_m"],
            of_out["gate_out_m"].to_numpy(),
            _mps(of_in.pop("in_kmh"), of_in.pop("in_any_kmh")),
            _mps(of_out.pop("out_kmh"), of_out.pop("out_any_kmh")),
        )
        rows = pl.DataFrame(
            {
                **_whose(found, names, codes),
                **of_in,
                **of_out,
                **self._of_movements(found["arm_in_ix"], found["arm_out_ix"]),
                **_columns(found, ("entry_us", "exit_us", "inside_m", "n_pings", "max_step_ms", "slow_ms")),
                **_columns(found, ("timing_error_ms", "entry_speed_mps")),
                "is_queued_at_gate": found["is_queued_at_gate"] != 0,
                "traversal_ms": traversal,
                "delay_ms": traversal - unimpeded,
            }
        ).with_columns(pl.lit(self._reference_id, dtype=pl.Int32).alias("reference_id"))
        return with_local_time(rows, self._settings.time, "entry_us")

    def _sections(self, found: Records, names: pl.Series, codes: NDArray[np.uint64]) -> pl.DataFrame:
        of_from = self._of_arms(
            found["arm_from_ix"],
            {
                "junction_id": "junction_from_id",
                "arm": "arm_from",
                "class": "arm_class",
                "zone": "arm_zone",
                "link_class": "link_class",
                "link_zone": "link_zone",
                "driving_side": "driving_side",
                "time_zone": "time_zone",
            },
        )
        of_to = self._of_arms(found["arm_to_ix"], {"junction_id": "junction_to_id", "arm": "arm_to"})
        rows = pl.DataFrame(
            {
                **_whose(found, names, codes),
                **of_from,
                **of_to,
                **_columns(found, ("from_us", "to_us", "path_m", "max_step_ms")),
                "duration_ms": traversal_ms(found["from_us"], found["to_us"]),
            }
        ).with_columns(
            pl.coalesce("link_class", "arm_class").alias("class"),
            pl.coalesce("link_zone", "arm_zone").alias("zone"),
        )
        return with_local_time(rows, self._settings.time, "from_us")

    def _unfinished(self, found: Records, names: pl.Series, codes: NDArray[np.uint64]) -> pl.DataFrame:
        of_in = self._of_arms(found["arm_in_ix"], {"junction_id": "junction_id", "arm": "arm_in"})
        rows = {
            **_whose(found, names, codes),
            **of_in,
            "reason": _labels(found["reason"], UNFINISHED_REASONS),
            **_columns(found, ("entry_us", "last_us")),
        }
        return pl.DataFrame(rows).select(self._names["unfinished"])

    def _trips(self, found: Records, names: pl.Series, codes: NDArray[np.uint64]) -> pl.DataFrame:
        as_found = set(found.dtype.names or ()) - {"end_reason"}
        given = [n for n in self._names["trip"] if n in as_found]
        rows = {
            **_whose(found, names, codes),
            "start_us": np.ascontiguousarray(found["trip_start_us"]),
            "end_reason": _labels(found["end_reason"], END_REASONS),
            **_columns(found, given),
        }
        met = pl.col("first_gate_us") >= 0
        gates = [pl.when(met).then(pl.col(n)).alias(n) for n in ("first_gate_us", "last_gate_us")]
        return pl.DataFrame(rows).with_columns(gates).select(self._names["trip"])


def _mps(kmh: pl.Series, any_kmh: pl.Series) -> NDArray[np.float64]:
    """Give the cruise speed: that of the direction, where the network has it."""
    return kmh.fill_null(any_kmh).to_numpy() / 3.6


def _columns(found: Records, names: Sequence[str]) -> dict[str, NDArray[Any]]:
    return {name: np.ascontiguousarray(found[name]) for name in names}


def _labels(codes: NDArray[Any], labels: Sequence[str]) -> pl.Series:
    return pl.Series(labels, dtype=pl.String)[codes.astype(np.int64)]


def _whose(found: Records, names: pl.Series, codes: NDArray[np.uint64]) -> dict[str, Any]:
    """Give vehicle and trip of each record."""
    vehicle_ix = found["vehicle_ix"].astype(np.int64)
    return {"vehicle": names[vehicle_ix], "trip_id": trip_id(codes[vehicle_ix], found["trip_start_us"])}
