"""Theory of a week's memory is quick: the bench's own spec, once, against what is asked for."""

from __future__ import annotations

import subprocess
import sys


def test_theory_of_long_memories_takes_less_than_two_seconds_and_500_megabytes():
    """Processor time of the whole process, which other work on the machine stretches less than time by the clock.

    The bench runs in a small process of its own: the peak that the system tells of a child counts its parent's too.
    """
    told = subprocess.run(
        [sys.executable, "-m", "tests.bench.bench_theory", "--quick"], capture_output=True, text=True, check=True
    ).stdout
    rows = {words[0]: words for words in map(str.split, told.splitlines()) if words and words[0] in ("text", "JSON")}
    assert len(rows) == 2
    for name, (*_, processor, peak) in rows.items():
        assert float(processor) < 2.0 and float(peak) < 500, f"{name}: {told}"
