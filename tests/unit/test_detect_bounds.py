"""One run of detection with every array access checked, in a process of its own."""

import os
import subprocess
import sys
from pathlib import Path

import pytest

SCENARIO = """
import numpy as np
from stream.detect.records import new_record
from stream.detect.search import ROUTES, find_route
from tests.property.test_detect_garbage import SETTINGS, TOWNS, Detector, check, rambles

for name, town in TOWNS.items():
    detector = Detector(town[0], SETTINGS, threads=1)
    n = sum(check(detector, town[0], rambles(name, seed, 600), 4) for seed in range(4))
    print(name, n)
try:
    find_route(new_record(ROUTES), 1 << 20, 5)
except IndexError:
    print("checked", 1)
"""


@pytest.mark.slow
def test_no_kernel_reads_or_writes_beyond_an_array(tmp_path: Path) -> None:
    """Tidy to wild pings on four towns with bounds checked: nothing is raised (compiled anew, a minute)."""
    root = Path(__file__).parent.parent.parent
    more = {"NUMBA_BOUNDSCHECK": "1", "NUMBA_CACHE_DIR": str(tmp_path), "PYTHONPATH": str(root)}
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", SCENARIO],
        env={**os.environ, **more},
        cwd=root,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    found = dict(line.rsplit(" ", 1) for line in done.stdout.splitlines())
    assert found.pop("checked") == "1", "bounds were not checked"
    assert set(found) == {"blocks", "dense", "one-way", "across 180"}
    assert sum(int(n) for n in found.values()) > 50
