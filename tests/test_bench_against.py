"""The bench against scripts by hand runs; what it measures is not a test's to judge."""

import subprocess
import sys
from pathlib import Path

from tests.bench.bench_against import Script, drawn_by

ROOT = Path(__file__).parents[1]


def test_a_quick_run_gives_a_row_for_every_rival(tmp_path):
    command = [
        sys.executable,
        "-m",
        "tests.bench.bench_against",
        "--quick",
        "--only",
        "walk,garch",
        "--dir",
        str(tmp_path),
    ]
    run = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=True)
    rows = [line.split(" | ") for line in run.stdout.splitlines() if line.startswith("| garch")]
    assert [row[1] for row in rows] == ["1 × 2,000", "64 × 50"] * 2
    assert all("GARCH.simulate" in row[2] for row in rows[2:])
    assert all(float(seconds) > 0 for row in rows[:2] for seconds in row[2:5])
    assert "SHA instructions" in run.stdout
    (walk,) = [line.split(" | ") for line in run.stdout.splitlines() if line.startswith("| walk | 64")]
    assert float(walk[7]) > 0  # to the floor


def test_what_a_rival_would_take_minutes_for_is_drawn_in_part(tmp_path):
    assert drawn_by("by hand", "noise", (65_536, 1_000)) == 16_000
    assert drawn_by("by hand", "garch", (1_000_000, 50)) == 29_090
    assert drawn_by("by hand", "arma", (1, 1_000_000)) == 1
    assert Script("expert", "walk", (1_000_000, 50), tmp_path).times == 1_000_000 / 640_000
