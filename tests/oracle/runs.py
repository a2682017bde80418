"""Plain cleaning and trips of one vehicle (DESIGN.md section 5, Clean and Trips; lists and dicts)."""

import math
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass, field

from stream.config import Settings
from tests.oracle.ground import Point, apart_m, e7

Fix = tuple[int, Point]


@dataclass
class Cleaner:
    """What one vehicle's pings become: used ones, in runs without a jump, and drops by reason."""

    settings: Settings
    is_in_area: Callable[[Point], bool]
    dropped: Counter[str] = field(default_factory=Counter)
    runs: list[list[Fix]] = field(default_factory=lambda: [[]])
    held: Fix | None = None

    def offer(self, t_us: int, lon: float, lat: float) -> None:
        """Take, hold or drop a ping."""
        if not (math.isfinite(lon) and math.isfinite(lat) and abs(lon) <= 180.0 and abs(lat) <= 90.0):
            self.dropped["bad_coordinate"] += 1
        elif abs(lon) < 1e-6 and abs(lat) < 1e-6:
            self.dropped["null_island"] += 1
        elif not self.is_in_area(e7(lon, lat)):
            self.dropped["outside_area"] += 1
        else:
            self._weigh((t_us, e7(lon, lat)))

    def _weigh(self, fix: Fix) -> None:
        last = self.runs[-1][-1] if self.runs[-1] else None
        newest = self.held or last
        if last is None or newest is None:
            self.runs[-1].append(fix)
        elif fix[0] < newest[0]:
            self.dropped["late"] += 1
        elif fix[0] == newest[0]:
            self.dropped["duplicate" if fix[1] == newest[1] else "same_time_elsewhere"] += 1
        elif self._can_reach(last, fix):  # there and back: the one in between was the outlier
            self.drop_held()
            self.runs[-1].append(fix)
        elif self.held and self._can_reach(self.held, fix):  # two that agree elsewhere: it is there now
            self.runs.append([self.held, fix])
            self.held = None
        else:
            self.drop_held()
            self.held = fix

    def _can_reach(self, a: Fix, b: Fix) -> bool:
        clean = self.settings.clean
        farthest = clean.jump_slack_m + clean.max_speed_kmh / 3.6 * (b[0] - a[0]) / 1e6
        return apart_m(a[1], b[1]) <= farthest

    def drop_held(self) -> None:
        """Drop the held ping, where there is one."""
        if self.held:
            self.dropped["impossible_speed"] += 1
            self.held = None

    @property
    def n_used(self) -> int:
        """Count the used pings."""
        return sum(len(run) for run in self.runs)


@dataclass
class Trip:
    """One trip: its pings, and how it ended."""

    fixes: list[Fix]
    stay: Fix
    end_us: int = -1
    ending: str = ""

    def row(self) -> tuple[int, int, int, str]:
        """Give what a trip's row tells: start, end, pings, reason."""
        return self.fixes[0][0], self.end_us, len(self.fixes), self.ending


def split_trips(
    runs: list[list[Fix]], settings: Settings, is_inside: Callable[[Point], bool]
) -> list[tuple[int, int, int, str]]:
    """Split the used pings of a vehicle into trips, ended by gap, dwell, jump, and at last by close.

    Parameters
    ----------
    runs
        Used pings; each run but the first begins after a jump.
    is_inside
        Whether a vehicle there is between the gates of a junction; asked once a stand is as long as a dwell.
    """
    rule = settings.trips
    done: list[Trip] = []
    trip: Trip | None = None
    parked: Point | None = None

    def end(at_us: int, ending: str) -> None:
        nonlocal trip
        if trip is not None:
            trip.end_us, trip.ending = at_us, ending
            done.append(trip)
            trip = None

    last_us = -1
    last: Fix | None = None
    for number, run in enumerate(runs):
        for place, fix in enumerate(run):
            if number and place == 0:
                end(last_us, "jump")
                parked = None
            elif trip is not None and fix[0] - last_us > rule.max_gap_s * 1e6:
                end(last_us, "gap")
            before, last, last_us = last, fix, fix[0]
            if parked is not None:
                if apart_m(parked, fix[1]) <= rule.dwell_radius_m:
                    continue
                parked = None
                if before is not None and fix[0] - before[0] <= rule.max_gap_s * 1e6:
                    trip = Trip([before], before)  # it drove off from where it was last seen
            if trip is None:
                trip = Trip([fix], fix)
                continue
            trip.fixes.append(fix)
            if apart_m(trip.stay[1], fix[1]) > rule.dwell_radius_m:
                trip.stay = fix
            stayed_us = fix[0] - trip.stay[0]
            if stayed_us < rule.dwell_s * 1e6:
                continue
            if stayed_us >= rule.max_passage_s * 1e6 or not is_inside(fix[1]):
                parked = trip.stay[1]
                end(trip.stay[0], "dwell")
    end(last_us, "close")
    return [t.row() for t in done]
