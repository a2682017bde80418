"""Whether a delivery as a whole makes sense; if not, what is likely wrong with it and how to mend it.

Guarantee: single bad rows are counted, never refused; what is refused is a delivery of which hardly anything
could be right.
"""

from datetime import UTC, datetime
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stream.config import Settings
from stream.errors import InputError
from stream.ingest.job import Job
from stream.ingest.standing import LATE_SHARE, Standing
from stream.store.batch import BatchTotals
from stream.store.ledger import Delivery

_SAMPLE_ROWS = 10_000
_GPS_BEGINS_US = 315_964_800_000_000  # 1980-01-06T00:00:00Z, week 0 of GPS (IS-GPS-200)
Floats = NDArray[np.float64]


class Sample:
    """The first coordinates of a delivery, to tell where its pings lie."""

    def __init__(self) -> None:
        self._lon: list[Floats] = []
        self._lat: list[Floats] = []
        self._n = 0

    def add(self, lon: Floats, lat: Floats) -> None:
        """Keep what there is still room for."""
        room = _SAMPLE_ROWS - self._n
        if room > 0:
            self._lon.append(lon[:room].copy())
            self._lat.append(lat[:room].copy())
            self._n += len(self._lon[-1])

    def where(self) -> tuple[Floats, Floats]:
        """Give longitudes and latitudes kept."""
        none = [np.zeros(0)]
        return np.concatenate(none + self._lon), np.concatenate(none + self._lat)


def check_usable(
    job: Job, delivery: Delivery, totals: BatchTotals, standing: Standing, sample: Sample
) -> None:
    """Refuse a delivery that lies elsewhere, or in another time, out of order, in already, or gives nothing.

    Raises
    ------
    InputError
        With what is wrong, the file, and the mend.
    """
    settings = job.settings
    where = ", ".join(str(f) for f in delivery.files[:3]) + (" ..." if len(delivery.files) > 3 else "")
    if totals.last_ping_us is not None and totals.last_ping_us < _GPS_BEGINS_US:
        raise InputError(
            f"{where}: all its times lie before GPS began (the newest is {_utc(totals.last_ping_us)} UTC), "
            f"so they aren't in {settings.source.time_unit}: mend source.time_unit (s, ms, us or ns)"
        )
    if totals.dropped.get("late", 0) > LATE_SHARE * totals.rows_in:
        raise _late(job, where, totals, standing)
    if totals.rows_in and totals.rows_used == 0 and totals.rows_held <= 0:
        outside = sum(totals.dropped.get(r, 0) for r in ("outside_area", "bad_coordinate", "null_island"))
        if outside * 2 > totals.rows_in:
            raise _elsewhere(settings, where, totals, job.network, sample)
        raise InputError(
            f"{where}: none of its {totals.rows_in} rows can be used: {_reasons(totals)}; "
            "see the rows in question, or mend the keys under source"
        )


def _reasons(totals: BatchTotals) -> str:
    return ", ".join(f"{reason} {n}" for reason, n in sorted(totals.dropped.items()))


def _utc(us: int) -> str:
    return f"{datetime.fromtimestamp(us / 1e6, UTC):%Y-%m-%d %H:%M:%S}"


def _late(job: Job, where: str, totals: BatchTotals, standing: Standing) -> InputError:
    said = f"{where}: {totals.dropped['late']} of {totals.rows_in} rows"
    if not standing.is_backfill and standing.n_older > LATE_SHARE * totals.rows_in:
        return InputError(
            f"{said} are older than what is in of their vehicles, and {standing.n_newer} newer than all that "
            f"is in (up to {_utc(standing.newest_us)} UTC): split the delivery there "
            "and name its parts one by one"
        )
    if standing.n_in > LATE_SHARE * totals.rows_in:
        same = _at_that_time(job, totals)
        return InputError(
            f"{said} have times that are in already for their vehicles, in {', '.join(same)}; to replace "
            f"a batch, `turntally retract {same[0]}` first, else leave these rows out"
        )
    said += " are older than a row before them"
    if job.settings.source.order == "time":
        return InputError(
            f"{said}: if the file is in no order of time, set source.order to unsorted "
            "(it is then sorted first)"
        )
    return InputError(f"{said}: if a vehicle's rows are in no order of time, set source.order to unsorted")


def _at_that_time(job: Job, totals: BatchTotals) -> list[str]:
    """Name the batches whose times overlap with those read."""
    assert totals.first_ping_us is not None
    assert totals.last_ping_us is not None
    first, last = _utc(totals.first_ping_us), _utc(totals.last_ping_us)
    names = []
    for row in job.store.rows("ledger/all_batch"):
        begin, end = row["first_ping_at"], row["last_ping_at"]
        if begin is not None and f"{begin:%Y-%m-%d %H:%M:%S}" <= last and f"{end:%Y-%m-%d %H:%M:%S}" >= first:
            names.append(row["batch_name"])
    return names


def _elsewhere(
    settings: Settings, where: str, totals: BatchTotals, network: dict[str, Any], sample: Sample
) -> InputError:
    lon, lat = sample.where()
    columns = settings.source.columns
    said = f"{where}: none of its {totals.rows_in} rows lies inside the network ({_reasons(totals)})"
    if 2 * _n_inside(lat, lon, network) > len(lon):
        return InputError(
            f"{said}; with longitude and latitude swapped they would: "
            f"set source.columns.lon to {columns.lat} and source.columns.lat to {columns.lon}"
        )
    box = [round(network[k], 4) for k in ("min_lon", "min_lat", "max_lon", "max_lat")]
    around = (
        f"their middle is lon {np.median(lon):.4f}, lat {np.median(lat):.4f}"
        if len(lon)
        else "none has a place"
    )
    return InputError(
        f"{said}; {around}, the network spans lon {box[0]} to {box[2]}, lat {box[1]} to {box[3]}: "
        "name the extract of their region with `turntally network`, or mend source.columns"
    )


def _n_inside(lon: Floats, lat: Floats, network: dict[str, Any]) -> int:
    inside = (lon >= network["min_lon"]) & (lon <= network["max_lon"])
    inside &= (lat >= network["min_lat"]) & (lat <= network["max_lat"])
    return int(inside.sum())
