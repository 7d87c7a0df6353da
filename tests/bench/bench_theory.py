"""Time and memory of `procgen theory` on five series of 100,000 steps with memories of a week of hours.

    python -m tests.bench.bench_theory [--quick] [--rounds 5]

Every case is a whole process, from its start to its last line; one before them leaves the bytecode that an installed
package has. Seconds are those of the clock, processor seconds those
of the process (wait4), memory its peak resident size; medians over the rounds, which are interleaved.

The series: a multiplicative seasonal ARMA of period 168, an autoregression with 168 coefficients, the airline model of
period 168 (so differences of 168 and 1 steps), another such autoregression with Student-t shocks beside a shared
weather and a weekly pattern, and the exponential of a random walk. Asked: under 2 s and 500 MB.
"""

from __future__ import annotations

import argparse
import os
import platform
import statistics
import tempfile
from pathlib import Path

from tests.bench.whole import PROCGEN, Run, run

SEASON = 24 * 7
SPEC = """\
procgen: 1
seed: 1
paths: 1000
time: {{steps: 100000}}
shared:
  weather: [{{ar: {{phi: 0.97, total_sd: 1}}}}]
series:
  seasonal: [{{arima: {{phi: 0.6, d: 0, theta: 0.2, seasonal: {{period: {s}, phi: 0.7, theta: -0.2}}, sd: 1}}}}]
  long: [{{ar: {{phi: {phi}, sd: 1}}}}]
  grown: [{{arima: {{d: 1, theta: -0.4, seasonal: {{period: {s}, d: 1, theta: -0.3}}, sd: 1}}}}]
  mixed:
    - use: weather
    - ar: {{phi: {phi}, sd: 1, law: {{student_t: {{df: 6}}}}}}
    - seasonal: {{period: {s}, harmonics: [{{amplitude: 2}}]}}
  price: [{{exp: [{{random_walk: {{sd: 0.01}}}}]}}]
"""


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--quick", action="store_true", help="one round")
    parser.add_argument("--rounds", type=int, default=5)
    args = parser.parse_args()
    seen = measured(1 if args.quick else args.rounds)
    print(f"{os.cpu_count()} processors, Python {platform.python_version()}\n")
    print(f"{'case':8}{'seconds':>9}{'range':>16}{'processor s':>13}{'peak MB':>9}")
    for name, runs in seen.items():
        times = [run.seconds for run in runs]
        print(
            f"{name:8}{statistics.median(times):9.2f}{f'{min(times):.2f} to {max(times):.2f}':>16}"
            f"{statistics.median(run.processor for run in runs):13.2f}{max(run.peak for run in runs):9.0f}"
        )


def measured(rounds: int) -> dict[str, list[Run]]:
    """Runs of both forms of the command, by name."""
    cases: dict[str, list[str]] = {"text": [], "JSON": ["--json"]}
    seen: dict[str, list[Run]] = {name: [] for name in cases}
    with tempfile.TemporaryDirectory() as folder:
        spec = Path(folder) / "long.yaml"
        spec.write_text(SPEC.format(s=SEASON, phi=coefficients()))
        command = [*PROCGEN, "theory", str(spec)]
        run(command)
        for _ in range(rounds):
            for name, options in cases.items():
                seen[name].append(run([*command, *options]))
    return seen


def coefficients() -> list[float]:
    """A stationary autoregression over a week: partial autocorrelations at an hour, a day and a week, small between."""
    partials = [0.07 * (-1) ** k / (1 + k % 7) for k in range(SEASON)]
    partials[0], partials[23], partials[-1] = 0.7, 0.3, 0.4
    phi: list[float] = []
    for r in partials:  # Durbin (1960)
        phi = [c - r * d for c, d in zip(phi, phi[::-1], strict=True)] + [r]
    return [round(c, 6) for c in phi]


if __name__ == "__main__":
    main()
