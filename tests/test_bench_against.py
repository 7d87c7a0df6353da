"""The bench against scripts by hand runs; what it measures is not a test's to judge."""

import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).parents[1]


def test_a_quick_run_gives_a_row_for_every_rival(tmp_path):
    command = [sys.executable, "-m", "tests.bench.bench_against", "--quick", "--only", "garch", "--dir", str(tmp_path)]
    run = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=True)
    rows = [line.split(" | ") for line in run.stdout.splitlines() if line.startswith("| garch")]
    assert [row[1] for row in rows] == ["1 × 2,000", "64 × 50"] * 2
    assert all("GARCH.simulate" in row[2] for row in rows[2:])
    assert all(float(seconds) > 0 for row in rows[:2] for seconds in row[2:5])
