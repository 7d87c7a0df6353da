"""Theory of a week's memory is quick: the bench's own spec, once, against what is asked for."""

from __future__ import annotations

from tests.bench.bench_theory import measured


def test_theory_of_long_memories_takes_less_than_two_seconds_and_500_megabytes():
    """Processor time of the whole process, which other work on the machine stretches less than time by the clock."""
    for name, (run,) in measured(rounds=1).items():
        assert run.processor < 2.0 and run.peak < 500, f"{name}: {run}"
