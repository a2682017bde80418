"""The whole job on the invented town: build, drive, take in, and set what was measured beside the truth."""

import json
import os
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import polars as pl

from stream.config import Demo, Settings, load_demo, load_settings
from stream.demo.compare import accuracy, between_pings, compare
from stream.demo.drive import drive
from stream.demo.fleet import Fleet, day_trips
from stream.demo.plan import Plan, write_osm, write_zones
from stream.demo.roads import Roads
from stream.demo.rules import LEVEL, town_roads
from stream.demo.town import TIME_ZONE, UTC_OFFSET_S, build_plan
from stream.demo.truth import true_passages
from stream.demo.write import Receivers, receive, vehicle_intervals, write_pings
from stream.detect.ahead import is_compiled
from stream.errors import InputError
from stream.ingest import ingest
from stream.network import Built, build_network
from stream.report import write_report
from stream.store import Store, put_network
from stream.store.ledger import network_config

if TYPE_CHECKING:
    from stream.ingest import Progress

Show = Callable[[str, float, float, str], None]


@dataclass
class _Clock:
    """Seconds by stage."""

    seconds: dict[str, float] = field(default_factory=dict)
    since: float = field(default_factory=time.perf_counter)

    def stop(self, stage: str) -> None:
        """Book the time since the last stop to a stage."""
        now = time.perf_counter()
        self.seconds[stage] = round(self.seconds.get(stage, 0.0) + now - self.since, 3)
        self.since = now


@dataclass(frozen=True)
class _Paths:
    """Where the demo writes."""

    town: Path
    zones: Path
    pings: tuple[Path, ...]
    truth: Path
    faults: Path
    store: Path
    report: Path


def _paths(into: Path, demo: Demo) -> _Paths:
    days = [demo.first_day + timedelta(days=i) for i in range(demo.days)]
    return _Paths(
        into / "town.osm",
        into / "zones.geojson",
        tuple(into / f"pings_{day:%Y-%m-%d}.parquet" for day in days),
        into / "truth.parquet",
        into / "faults.json",
        into / "turntally.duckdb",
        into / "report.html",
    )


def _make_room(into: Path, paths: _Paths) -> None:
    """Make the folder; an earlier demo's own files are replaced, any other store is left alone.

    Raises
    ------
    InputError
        The folder can't be made, or holds a store without the demo's files beside it.
    """
    if paths.store.exists() and not paths.truth.exists():
        raise InputError(f"{into}: holds a store that no demo made; name another folder with --into")
    try:
        into.mkdir(parents=True, exist_ok=True)
        wal = paths.store.with_name(paths.store.name + ".wal")
        for path in (*into.glob("pings_*.parquet"), paths.store, wal, paths.faults, paths.report):
            path.unlink(missing_ok=True)
    except OSError as err:
        raise InputError(f"{into}: can't be used ({err}); name another folder with --into") from err


def _lay_out(plan: Plan, paths: _Paths, settings: Settings) -> Built:
    """Write the town down and build its network."""
    write_osm(plan, paths.town)
    write_zones(plan, paths.zones, TIME_ZONE)
    return build_network(paths.town, paths.zones, settings)


def _build(plan: Plan, paths: _Paths, settings: Settings) -> Built:
    """Build the town's network into a new store."""
    built = _lay_out(plan, paths, settings)
    run = settings.run
    with Store.open(paths.store, create=True, memory_mb=run.memory_mb, threads=run.threads) as store:
        put_network(store, built, network_config(settings))
    return built


@dataclass(frozen=True)
class _Traffic:
    """What all days share."""

    roads: Roads
    fleet: Fleet
    receivers: Receivers
    interval_s: np.ndarray[tuple[int], np.dtype[np.float64]]


def _traffic(plan: Plan, demo: Demo) -> _Traffic:
    receivers = Receivers(
        dict(demo.intervals), demo.noise.sigma_m, demo.noise.tau_s, demo.faults.model_dump()
    )
    return _Traffic(
        town_roads(plan),
        Fleet(demo.vehicles, demo.trips_a_day, demo.reach_s, demo.park_share, demo.park_s),
        receivers,
        vehicle_intervals(receivers, demo.vehicles, demo.seed),
    )


def _drive_day(
    traffic: _Traffic, built: Built, demo: Demo, day: int, path: Path, clock: _Clock
) -> tuple[pl.DataFrame, int, dict[str, int]]:
    """Drive one day and write its pings; returns its true passages, rows written, and faults put in."""
    local = datetime.combine(demo.first_day, datetime.min.time(), UTC) + timedelta(days=day)
    midnight_us = (round(local.timestamp()) - UTC_OFFSET_S) * 1_000_000
    seed = demo.seed + 1000 * (day + 1)
    trips = day_trips(traffic.roads, traffic.fleet, LEVEL, midnight_us, seed)
    tracks = drive(traffic.roads, trips, LEVEL, seed + 1)
    clock.stop("drive")
    pings, faults = receive(tracks, traffic.receivers, traffic.interval_s, seed + 2)
    write_pings(pings, path)
    clock.stop("write pings")
    true = true_passages(tracks, built.tables["arm"], built.tables["junction"], built.tables["movement"])
    true = true.with_columns(between_pings(true, pings))
    clock.stop("true passages")
    return true, pings.height, faults


def _drive_days(
    traffic: _Traffic, built: Built, demo: Demo, paths: _Paths, clock: _Clock, show: Show
) -> dict[str, Any]:
    """Drive day by day; write pings, true passages, and how many faults were put in."""
    rows, faults, truths = 0, dict.fromkeys(demo.faults.model_dump(), 0), []
    for day, path in enumerate(paths.pings):
        true, n, put = _drive_day(traffic, built, demo, day, path, clock)
        truths.append(true)
        rows += n
        faults = {kind: faults[kind] + put[kind] for kind in faults}
        show("driving", day + 1, demo.days, f"{rows:,} pings")
    pl.concat(truths).write_parquet(paths.truth, compression="zstd")
    paths.faults.write_text(json.dumps(faults, indent=2) + "\n", encoding="utf-8")
    return {"pings": rows, "faults_put_in": faults}


def _measure(paths: _Paths, settings: Settings) -> tuple[pl.DataFrame, pl.DataFrame]:
    """Leave the report; read true passages and measured ones."""
    run = settings.run
    with Store.open(paths.store, read_only=True, memory_mb=run.memory_mb, threads=run.threads) as store:
        write_report(store, paths.report, settings)
        seen = store.frame("demo/measured_passage")
    return pl.read_parquet(paths.truth), seen


def prepare_demo(
    into: Path,
    days: int | None = None,
    drive_on: str = "right",
    settings_over: dict[str, Any] | None = None,
    progress: Show | None = None,
) -> dict[str, Any]:
    """Write the invented town and its pings, day by day, and nothing else: to take them in by hand.

    Parameters
    ----------
    into, days, drive_on, settings_over, progress
        As for `run_demo`.

    Returns
    -------
    `pings`, `faults_put_in`, `days`, `drive_on`, and `paths`: `town`, `zones`, `pings`, `truth`.

    Raises
    ------
    InputError, ConfigError
        The folder can't be used, a value is out of range.
    """
    settings = load_settings(over=settings_over)
    demo = load_demo({} if days is None else {"days": days})
    paths = _paths(into, demo)
    _make_room(into, paths)
    plan = build_plan(drive_on == "left")
    built = _lay_out(plan, paths, settings)
    driven = _drive_days(_traffic(plan, demo), built, demo, paths, _Clock(), progress or (lambda *_: None))
    files = {"town": paths.town, "zones": paths.zones, "truth": paths.truth}
    return {
        "drive_on": drive_on,
        "days": demo.days,
        **driven,
        "paths": {**{k: str(v) for k, v in files.items()}, "pings": [str(p) for p in paths.pings]},
    }


def _compile_aside() -> "subprocess.Popen[bytes] | None":
    """Begin to compile in another process; None where nothing is to compile.

    Its result is the cache on disk: wait for its end before the pass is needed. Should it fail, the pass is
    compiled when it is first used.
    """
    if is_compiled():
        return None
    code = "from stream.detect.ahead import compile_here; compile_here()"
    env = {**os.environ, "PYTHONPATH": os.pathsep.join(p or str(Path.cwd()) for p in sys.path)}
    quiet = subprocess.DEVNULL
    return subprocess.Popen([sys.executable, "-c", code], env=env, stdin=quiet, stdout=quiet, stderr=quiet)


def run_demo(
    into: Path,
    days: int | None = None,
    drive_on: str = "right",
    settings_over: dict[str, Any] | None = None,
    progress: Show | None = None,
    demo_over: dict[str, Any] | None = None,
) -> dict[str, Any]:
    """Build the invented town, drive through it, run the whole job, and compare with the truth.

    Parameters
    ----------
    into
        Folder for everything; an earlier demo there is replaced.
    days
        Days to drive; None as in `config/demo.yaml`.
    drive_on
        "right" or "left".
    settings_over
        Values over the default configuration; vehicle ids stay plain, they are invented.
    progress
        Told (what, done, total, note).
    demo_over
        Values over `config/demo.yaml`.

    Returns
    -------
    `table` (measured against true by zone and maneuver, see `compare`), `accuracy`, `pings`,
    `faults_put_in`, `batches` (ingest's reports), `network` (what was built), `seconds` by stage, `paths`.

    Raises
    ------
    InputError, ConfigError, StoreError
        The folder can't be used, a value is out of range, the store is in use.
    """
    over = {**(settings_over or {})}
    over["privacy"] = {**over.get("privacy", {}), "plain_ids": True}
    settings = load_settings(over=over)
    demo = load_demo({**(demo_over or {}), **({} if days is None else {"days": days})})
    show: Show = progress or (lambda *_: None)
    paths = _paths(into, demo)
    _make_room(into, paths)
    clock = _Clock()
    aside = _compile_aside()
    plan = build_plan(drive_on == "left")
    built = _build(plan, paths, settings)
    clock.stop("network")
    driven = _drive_days(_traffic(plan, demo), built, demo, paths, clock, show)

    def tell(at: "Progress") -> None:
        show("taking in", at.batch_ix + at.done / max(at.total, 1), at.n_batches, f"{at.passages:,} passages")

    if aside is not None:
        aside.wait()
    clock.stop("compile")
    batches = ingest(paths.store, paths.pings, settings, close=True, progress=tell)
    clock.stop("ingest")
    true, seen = _measure(paths, settings)
    clock.stop("report")
    table = compare(true.filter("is_between_pings"), seen)
    figures = accuracy(true, seen)
    clock.stop("compare")
    return {
        "drive_on": drive_on,
        "days": demo.days,
        **driven,
        "network": built.report,
        "batches": batches,
        "table": table.to_dicts(),
        "accuracy": figures,
        "seconds": {**clock.seconds, "whole": round(sum(clock.seconds.values()), 3)},
        "paths": {
            "town": str(paths.town),
            "zones": str(paths.zones),
            "pings": [str(p) for p in paths.pings],
            "truth": str(paths.truth),
            "store": str(paths.store),
            "report": str(paths.report),
        },
    }
