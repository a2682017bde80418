"""Local time of passages across clock changes, through the whole job: extract, pings, store, ladders.

Source: METHODS.md section 13, instants worked out there from the IANA time zone database; the zone itself
is found from the place alone (Helsinki, New York), so nothing here names it to the program.
"""

from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import polars as pl
import pytest

from stream.config import load_settings
from stream.export import quantile_rows
from stream.store import Store
from tests.trajectory import Motion, Row, crosses, pings, straight, whole_job

V_MPS = 10.0
ENTRY_M, EXIT_M = 60.0, 40.0
# Each local hour is a band of its own; the default bands are coarser.
BANDS = {f"h{hour:02d}": hour for hour in range(24)}
TALLY = {"clock": {"value": "delay", "dimensions": ["time_band", "hour", "weekday", "day_type"]}}

# UTC, then local hour and weekday (1 = Monday) as tabulated.
HELSINKI = [
    ("2026-03-29T00:59:59", 2, 7),  # 02:59:59+02
    ("2026-03-29T01:00:00", 4, 7),  # 04:00:00+03
    ("2026-10-25T00:30:00", 3, 7),  # 03:30+03
    ("2026-10-25T01:30:00", 3, 7),  # 03:30+02
]
NEW_YORK = [
    ("2026-03-08T06:59:59", 1, 7),  # 01:59:59-05
    ("2026-03-08T07:00:00", 3, 7),  # 03:00:00-04
]
PLACES = {"Europe/Helsinki": ((24.94, 60.17), HELSINKI), "America/New_York": ((-73.98, 40.75), NEW_YORK)}
TRAVERSAL_MS = 10_000  # 100 m at 10 m/s, whatever the clock does meanwhile
# Entry lies so far behind the tabulated second that rounding of coordinates can't move it before.
BEHIND_S = 0.2


def rows_of(place: tuple[float, float], instants: list[tuple[str, int, int]]) -> tuple[Any, list[Row]]:
    """Give a crossing at a place and one vehicle for each instant, which then passes its entry gate."""
    sketch = crosses([36], 300.0, *place)
    rows: list[Row] = []
    for text, _, _ in instants:
        motion = Motion(-200.0, V_MPS)
        motion.cruise_to(220.0)
        entry_s = datetime.fromisoformat(text).replace(tzinfo=UTC).timestamp() + BEHIND_S
        rows += pings(text, straight(sketch, 0), motion, entry_s - (200.0 - ENTRY_M) / V_MPS, 200.0)
    return sketch, rows


@pytest.mark.parametrize("zone", PLACES)
def test_passages_are_counted_in_local_time_across_clock_changes(tmp_path: Path, zone: str) -> None:
    """Each instant falls into the tabulated local hour and day; entry stays in UTC, durations unharmed."""
    place, instants = PLACES[zone]
    over = {
        "gates": {"entry_m": ENTRY_M, "exit_m": EXIT_M},
        "time": {"bands": BANDS},
        "tallies": TALLY,
        "privacy": {"plain_ids": True},
    }
    settings = load_settings(over=over)
    got = whole_job(tmp_path, *rows_of(place, instants), settings).sort("vehicle")
    wanted = [(text, f"h{hour:02d}", "sunday") for text, hour, _ in sorted(instants)]
    assert got.select("vehicle", "time_band", "day_type").rows() == wanted
    seconds = got.select(pl.col("entry_at").dt.convert_time_zone("UTC").dt.strftime("%Y-%m-%dT%H:%M:%S"))
    assert seconds.to_series().to_list() == [text for text, _, _ in sorted(instants)]
    assert got["traversal_ms"].to_list() == pytest.approx([TRAVERSAL_MS] * len(instants), abs=20)
    with Store.open(tmp_path / "s.duckdb", read_only=True) as store:
        lines = quantile_rows(store, "clock", ["hour", "weekday"], None, settings)
    counted = {(int(line["hour"]), int(line["weekday"])): line["n"] for line in lines}
    hours = [(hour, weekday) for _, hour, weekday in instants]
    assert counted == {key: hours.count(key) for key in hours}
