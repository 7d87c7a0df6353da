"""The bench of growth runs, and its slopes are those of known powers."""

import subprocess
import sys
from itertools import pairwise
from pathlib import Path
from xml.etree import ElementTree

import pytest

from tests.bench.bench_growth import START, Case, slope, sweeps

ROOT = Path(__file__).parents[1]


def test_the_bench_of_growth_writes_a_table_and_a_picture(tmp_path):
    command = [sys.executable, "-m", "tests.bench.bench_growth", "--quick", "--only", "terms", "series", "workers"]
    command += ["--out", str(tmp_path), "--dir", str(tmp_path)]
    told = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=True).stdout
    assert (tmp_path / "growth.md").read_text() == told
    rows = [[cell.strip() for cell in line.strip("| ").split(" | ")] for line in told.splitlines() if line[:2] == "| "]
    own = [[name, command] for name in ("terms", "series", "workers") for command in ("render", "validate")]
    assert [row[:2] for row in rows[2:8]] == own
    assert len(rows) == 2 + 6 + 2 + 2 * (1 + 3 * 2)
    assert all(float(cell) > 0 for row in rows[10:] for cell in row[-3:])
    drawn = ElementTree.parse(tmp_path / "growth.svg").getroot()
    assert [text.text for text in drawn.iter("{http://www.w3.org/2000/svg}text")].count("peak MB of a process") >= 3
    assert [path.name for path in sorted(tmp_path.iterdir())] == ["growth.md", "growth.svg", "growth.yaml"]


@pytest.mark.parametrize("power", [0.5, 1, 2])
def test_slopes_are_those_of_powers(power):
    sizes = [1, 2, 4, 8, 16]
    assert slope(sizes, [0.5 + 0.1 * size**power for size in sizes], 0.5) == f"{power:.2f}"
    assert slope(sizes, [0.5, 0.5, 0.51, 0.6, 0.7], 0.5) == "·"


def test_every_sweep_doubles_one_number_four_times():
    for name, cases in sweeps(quick=False).items():
        sizes = [getattr(case, name) for case in cases]
        assert [b / a for a, b in pairwise(sizes)] == [2, 2, 2, 2]
        assert len({case._replace(**{name: 0}) for case in cases}) == 1
        assert Case() in cases or name == "workers"
    assert START.paths * START.steps < 1000
