"""The main job on the tiny town, command by command, with delays worked out by hand.

All vehicles drive 10 m/s. From west to east over (0, 1) and (1, 1) the limit is 50 km/h, gates stand 60 m
before and 40 m after the mouth: 100 m take 10.0 s and would take 100 / (50 / 3.6) = 7.2 s, a delay of 2.8 s.
To the right at (1, 1) the exit arm is residential without a limit, 40 km/h: 60 / (50 / 3.6) +
40 / (40 / 3.6) = 7.92 s, a delay of 2.08 s.
"""

import csv
import json
import os
import pty
import subprocess
from pathlib import Path

import polars as pl
import pytest

from tests.command import COMMAND, done, done_json, environment, refused, turntally
from tests.drives import START_S, crossings, write_csv

N_VEHICLES = 40
N_THROUGH, N_RIGHT = 60, 20
DELAY_S = {"through": 2.8, "right": 2.08}
PASSAGE_COLUMNS = (
    "vehicle, trip_id, junction_id, arm_in, arm_out, way_in_id, way_out_id, entry_at, exit_at, traversal_ms, "
    "delay_ms, turn_deg, maneuver, class_in, class_out, control, zone, driving_side, gate_in_m, gate_out_m, "
    "n_pings, max_step_ms, slow_ms, entry_speed_mps, is_queued_at_gate, is_banned, timing_error_ms, "
    "reference_id, batch_id"
)
ARM_COLUMNS = (
    "junction_id, arm, way_id, mouth_node_id, bearing_deg, is_inbound, is_outbound, class, limit_kmh, "
    "link_m, entry_gate_m, exit_gate_m, entry_lon1, entry_lat1, entry_lon2, entry_lat2, exit_lon1, "
    "exit_lat1, exit_lon2, exit_lat2"
)
WEST = {
    "type": "FeatureCollection",
    "features": [
        {
            "type": "Feature",
            "properties": {"zone": "west"},
            "geometry": {
                "type": "Polygon",
                "coordinates": [
                    [[9.99, 49.99], [10.002, 49.99], [10.002, 50.02], [9.99, 50.02], [9.99, 49.99]]
                ],
            },
        }
    ],
}


@pytest.fixture(scope="module")
def job(town_osm: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Give a folder in which network and ingest have run; tests only read it."""
    home = tmp_path_factory.mktemp("job")
    (home / "zones.geojson").write_text(json.dumps(WEST), encoding="utf-8")
    write_csv(home / "pings.csv", crossings(N_VEHICLES))
    done("network", town_osm, "--zones", "zones.geojson", cwd=home)
    done("ingest", "pings.csv", "--close", cwd=home)
    return home


def test_network_tells_what_it_built_and_left_out(town_osm: Path, tmp_path: Path) -> None:
    """Text and JSON name the 12 junctions of the plan and the ways that are no roads."""
    whole = done_json("network", town_osm, cwd=tmp_path)
    said = done("network", town_osm, cwd=tmp_path)
    assert whole["counts"]["junctions"]["built"] == 12
    assert whole["counts"]["ways_left_out"] == {"class": 2}  # a service road and a footway
    assert whole["network_digest"][:12] in said
    lines = [line.split(maxsplit=0)[0] for line in said.splitlines()[1:]]
    for part, words in (("ways left out", "2 class"), ("junctions", "12 built")):
        assert any(line.startswith(part) and words in line for line in lines)
    assert done_json("status", cwd=tmp_path)["network"]["n_junctions"] == 12


def test_ingest_counts_rows_passages_and_batch(job: Path) -> None:
    """All rows are used; each vehicle gives two passages."""
    whole = done_json("status", cwd=job)
    n_rows = len(crossings(N_VEHICLES))
    assert (whole["rows_in"], whole["rows_used"], whole["rows_dropped"]) == (n_rows, n_rows, 0)
    assert (whole["passages"], whole["n_vehicles"]) == (2 * N_VEHICLES, N_VEHICLES)
    assert [b["batch"] for b in whole["batches"]] == ["pings.csv"]


def test_ingest_again_says_it_is_in(job: Path) -> None:
    """The same delivery, even under another name, is told to be in, and changes nothing."""
    (job / "renamed.csv").write_bytes((job / "pings.csv").read_bytes())
    before = done_json("status", cwd=job)
    for name in ("pings.csv", "renamed.csv"):
        assert "already in" in done("ingest", name, cwd=job)
        assert done_json("ingest", name, cwd=job)["batches"][0]["status"] == "already in"
    after = done_json("status", cwd=job)
    assert (after["batches"], after["passages"]) == (before["batches"], before["passages"])


def test_audit_after_ingest_is_sound(job: Path) -> None:
    """The store proves itself."""
    assert done_json("audit", cwd=job)["is_sound"] is True
    assert done("audit", cwd=job).splitlines()[-1] == "sound"


def test_quantiles_by_maneuver_are_those_worked_out(job: Path) -> None:
    """Counts are exact; mean and percentiles lie at the delay worked out by hand, within a bin."""
    rows = {row["maneuver"]: row for row in done_json("quantiles", "--by", "maneuver", cwd=job)["rows"]}
    assert {name: row["n"] for name, row in rows.items()} == {"through": N_THROUGH, "right": N_RIGHT}
    assert {name: row["vehicles"] for name, row in rows.items()} == {
        "through": N_VEHICLES,
        "right": N_VEHICLES // 2,
    }
    for name, row in rows.items():
        assert row["mean_s"] == pytest.approx(DELAY_S[name], abs=0.05)
        assert row["p50_s"] == pytest.approx(DELAY_S[name], abs=0.25)


def test_quantiles_where_leaves_the_rest_out(job: Path) -> None:
    """Conditions keep only the strata they name; the zone holds only (0, 1) of the two junctions."""
    (row,) = done_json("quantiles", "--by", "zone", "--where", "zone=west", cwd=job)["rows"]
    assert (row["zone"], row["n"]) == ("west", N_VEHICLES)


def test_quantiles_table_shows_the_numbers_of_the_object(job: Path) -> None:
    """The table has a line for each row of the object, with its count, and no colour."""
    rows = done_json("quantiles", "--by", "maneuver", cwd=job)["rows"]
    said = done("quantiles", "--by", "maneuver", cwd=job)
    for row in rows:
        (line,) = [line for line in said.splitlines() if line.split()[0] == row["maneuver"]]
        assert str(row["n"]) in line.split()
    assert "…" not in said
    assert "\x1b" not in said


@pytest.mark.parametrize(
    ("args", "parts"),
    [
        (["--tally", "maneuvers"], ["maneuvers", "maneuver"]),
        (["--by", "zone,manoeuvre"], ["manoeuvre", "maneuver"]),
        (["--where", "zon=west"], ["zon", "zone"]),
    ],
    ids=["tally", "by", "where"],
)
def test_quantiles_unknown_name_offers_the_nearest(args: list[str], parts: list[str], job: Path) -> None:
    """A wrong tally or dimension is refused with one that exists."""
    ran = turntally("quantiles", *args, cwd=job)
    assert ran.returncode in (1, 2)
    assert all(part in ran.stderr for part in parts)
    assert "Traceback" not in ran.stderr


@pytest.mark.parametrize("ending", ["csv", "parquet"])
@pytest.mark.parametrize(("what", "columns"), [("passages", PASSAGE_COLUMNS), ("arms", ARM_COLUMNS)])
def test_export_has_the_columns_promised(
    what: str, columns: str, ending: str, job: Path, tmp_path: Path
) -> None:
    """Columns that outside programs rely on (DESIGN section 9) are there, in both formats."""
    path = tmp_path / f"out.{ending}"
    n_rows = done_json("export", what, "--to", path, cwd=job)["n_rows"]
    if ending == "csv":
        with path.open(encoding="utf-8", newline="") as lines:
            heads, *rows = csv.reader(lines)
    else:
        frame = pl.read_parquet(path)
        heads, rows = frame.columns, frame.rows()
    assert set(columns.split(", ")) - set(heads) == set()
    assert len(rows) == n_rows
    if what == "passages":
        assert n_rows == 2 * N_VEHICLES


@pytest.mark.parametrize("what", ["links", "junctions", "movements", "histogram"])
def test_export_of_other_tables(what: str, job: Path, tmp_path: Path) -> None:
    """Every table named in the help can be written."""
    assert done_json("export", what, "--to", tmp_path / "out.parquet", cwd=job)["n_rows"] > 0


@pytest.mark.parametrize(
    ("args", "part"),
    [(["passage", "--to", "a.csv"], "passages"), (["passages", "--to", "a.xlsx"], ".parquet")],
    ids=["table", "ending"],
)
def test_export_of_a_wrong_name_offers_the_right_one(
    args: list[str], part: str, job: Path, tmp_path: Path
) -> None:
    """A table or an ending that doesn't exist is refused with what does; nothing is written."""
    ran = turntally("export", *args, "--store", job / "turntally.duckdb", cwd=tmp_path)
    assert ran.returncode in (1, 2)
    assert part in ran.stderr
    assert list(tmp_path.iterdir()) == []


def test_report_stands_alone(job: Path, tmp_path: Path) -> None:
    """The page is HTML that loads nothing from elsewhere."""
    path = tmp_path / "report.html"
    done("report", "--to", path, cwd=job)
    page = path.read_text(encoding="utf-8")
    assert page.lstrip().lower().startswith("<!doctype html>")
    assert 'src="http' not in page


def test_progress_is_drawn_on_a_terminal_only(job: Path, town_osm: Path, tmp_path: Path) -> None:
    """On a terminal stderr shows the batch on its way; with --quiet it shows nothing."""
    done("network", town_osm, cwd=tmp_path)
    seen = []
    for more in ([], ["--quiet"]):
        write_csv(tmp_path / "a.csv", crossings(2, START_S + 3600 * len(more)))
        main, terminal = pty.openpty()
        args = [*COMMAND, "ingest", "a.csv", "--batch", f"b{len(more)}", *more]
        running = subprocess.Popen(
            args, cwd=tmp_path, env=environment(TERM="xterm"), stdout=subprocess.PIPE, stderr=terminal
        )
        os.close(terminal)
        got = b""
        try:
            while piece := os.read(main, 65536):
                got += piece
        except OSError:  # Linux: the other end was closed
            pass
        os.close(main)
        running.communicate()
        assert running.returncode == 0, got
        seen.append(got.decode())
    assert "b0" in seen[0]
    assert seen[1] == ""


def test_configuration_that_changes_results_is_refused_later(job: Path, tmp_path: Path) -> None:
    """A store filled under one setting refuses pings under another, and names the key."""
    (tmp_path / "other.yaml").write_text("trips:\n  max_gap_s: 90\n", encoding="utf-8")
    write_csv(tmp_path / "more.csv", crossings(3, START_S + 86_400))
    message = refused("ingest", tmp_path / "more.csv", "--config", tmp_path / "other.yaml", cwd=job)
    assert "trips.max_gap_s" in message
