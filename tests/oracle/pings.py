"""Plain twins of the reader: what is dropped and why, codes by first sight, the sort, the holding back."""

import datetime
import math
import zoneinfo
from collections.abc import Sequence

from tests.archives import Row

Ping = tuple[int, int, float, float]  # vehicle code, t_us, lon, lat


def readable(rows: Sequence[Row]) -> tuple[list[tuple[str, int, float, float]], dict[str, int]]:
    """Part rows into pings and drops; a row counts once, by its time, else its vehicle, else its place."""
    good = []
    dropped: dict[str, int] = {}
    for vehicle, t_us, lon, lat in rows:
        if t_us is None or t_us < 0:
            reason = "bad_time"
        elif not vehicle:
            reason = "bad_vehicle"
        elif lon is None or lat is None or not math.isfinite(lon) or not math.isfinite(lat):
            reason = "bad_coordinate"
        else:
            good.append((vehicle, t_us, lon, lat))
            continue
        dropped[reason] = dropped.get(reason, 0) + 1
    return good, dropped


def coded(good: Sequence[tuple[str, int, float, float]]) -> tuple[list[Ping], list[str]]:
    """Give codes by first sight."""
    names: list[str] = []
    out = []
    for vehicle, t_us, lon, lat in good:
        if vehicle not in names:
            names.append(vehicle)
        out.append((names.index(vehicle), t_us, lon, lat))
    return out, names


def by_time(good: Sequence[tuple[str, int, float, float]]) -> list[tuple[str, int, float, float]]:
    """Sort by time, then by place in the source."""
    return [one for _, _, one in sorted((one[1], i, one) for i, one in enumerate(good))]


def held_back(pings: Sequence[Ping], lateness_us: int) -> tuple[list[Ping], list[Ping]]:
    """Take pings one by one; give those set free, in order, and those held at the end."""
    free: list[Ping] = []
    held: list[Ping] = []
    newest: dict[int, int] = {}
    for ping in pings:
        vehicle = ping[0]
        newest[vehicle] = max(newest.get(vehicle, ping[1]), ping[1])
        held.append(ping)
        limit = newest[vehicle] - lateness_us
        due = [p for p in held if p[0] == vehicle and p[1] <= limit]
        free += sorted(due, key=lambda p: p[1])
        held = [p for p in held if p[0] != vehicle or p[1] > limit]
    return free, held


def utc_of_clock(clock: datetime.datetime, zone: str) -> int | None:
    """Take a local clock time to UTC microseconds; None where the clock skips it or shows it twice.

    Source: PEP 495 (fold) and the time zone database, through the standard library.
    """
    there = zoneinfo.ZoneInfo(zone)
    found = set()
    for fold in (0, 1):
        utc = clock.replace(tzinfo=there, fold=fold).astimezone(datetime.UTC)
        if utc.astimezone(there).replace(tzinfo=None) == clock:
            found.add(utc)
    if len(found) != 1:
        return None
    since = found.pop() - datetime.datetime(1970, 1, 1, tzinfo=datetime.UTC)
    return since // datetime.timedelta(microseconds=1)
