"""What small jobs cost, whole processes, against what is asked for; and the bench by nanoseconds runs."""

import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).parents[1]


def rows_of(bench):
    command = [sys.executable, "-m", f"tests.bench.{bench}", "--quick"]
    told = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=True).stdout
    return [[cell.strip() for cell in line.strip("| ").split(" | ")] for line in told.splitlines() if line[:2] == "| "]


def test_small_jobs_take_less_processor_time_than_is_asked_for_by_the_clock():
    """On a quiet machine the clock shows the processor time of one process; on a busy one its double is allowed."""
    rows = rows_of("bench_small")[2:]
    assert len(rows) == 3
    for name, _, processor, goal, _ in rows:
        assert float(processor) < 2 * float(goal), name


def test_where_nanoseconds_go_is_told_for_every_stage_and_case():
    head, _, *rows = rows_of("bench_nanoseconds")
    assert [word for word in head if "compiled" not in word] == ["stage", "noise", "walk", "arma", "garch"]
    assert rows[-1][0] == "all" and len(rows) == 11
    for column in range(1, len(head)):
        parts = [float(row[column]) for row in rows[:-1]]
        assert min(parts) >= 0 and abs(sum(parts) - float(rows[-1][column])) < 0.6


def test_the_bench_of_large_ensembles_renders_and_validates_both_shapes_within_the_memory_of_a_worker():
    _, _, *rows = rows_of("bench_large")
    assert [(row[0], row[3]) for row in rows] == [
        (name, command) for name in ("wide", "long") for command in ("render", "validate")
    ]
    assert all(0 < float(row[-1]) < 700 for row in rows)
