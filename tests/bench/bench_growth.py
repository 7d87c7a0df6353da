"""How cost grows: time and memory of rendering and validating against paths, steps, terms, series and workers.

    python -m tests.bench.bench_growth [--quick] [--rounds 2] [--only SWEEP ...] [--out build/bench]

    python -m tests.bench.bench_growth --out tests/bench    # writes growth.md and growth.svg there

Around 16,384 paths × 500 steps of one autoregression in one process, one number is doubled four times; workers share
65,536 × 500. Each case is a whole process each way; processor time is that of all processes, memory that of the
largest. The least of the rounds counts: other work only adds to it, and the first round may compile. Slopes are those
of the logarithms, by least squares, of what each case costs above 16 paths × 20 steps, where that is a tenth of it or
more: 1 is linear, 0 is no growth, "·" is too little to be told. 1.2 GB of disk are needed, and freed again afterwards.
"""

from __future__ import annotations

import argparse
import os
import platform
import shutil
from collections.abc import Iterator, Mapping, Sequence
from datetime import date
from math import log2, log10
from pathlib import Path
from typing import NamedTuple

from tests.bench.whole import PROCGEN, Run, run

COMMANDS = ("render", "validate")
TOLD = 1.1  # times the start: below, what a case costs above it is not told apart from chance


class Case(NamedTuple):
    """What is rendered and validated; terms are those of each series."""

    paths: int = 16_384
    steps: int = 500
    terms: int = 1
    series: int = 1
    workers: int = 1

    def spec(self) -> str:
        sums = [f"    - {{ar: {{phi: {0.95 - 0.05 * k:.2f}, sd: 1}}, as: part_{k}}}" for k in range(self.terms)]
        series = [line for k in range(self.series) for line in (f"  x{k}:", *sums)]
        head = f"procgen: 1\nseed: 1\npaths: {self.paths}\ntime: {{steps: {self.steps}}}\nseries:\n"
        return head + "\n".join(series) + "\n"


START = Case(paths=16, steps=20)
Measured = Mapping[tuple[Case, str], Run]


def sweeps(quick: bool) -> dict[str, list[Case]]:
    """The cases of every sweep, by the name of what is doubled."""
    base, doublings = (Case(256, 50), 1) if quick else (Case(), 4)
    found = {}
    for name in Case._fields:
        begin = base
        if name in ("paths", "steps") and not quick:
            begin = base._replace(**{name: getattr(base, name) // 4})
        if name == "workers":
            begin = base._replace(paths=4 * base.paths)
        found[name] = [begin._replace(**{name: getattr(begin, name) << k}) for k in range(doublings + 1)]
    return found


def main() -> None:
    args = arguments()
    for folder in (args.dir, args.out):
        folder.mkdir(parents=True, exist_ok=True)
    chosen = {name: cases for name, cases in sweeps(args.quick).items() if not args.only or name in args.only}
    different = dict.fromkeys([START, *(case for cases in chosen.values() for case in cases)])
    rounds = [{key: run for case in different for key, run in both(case, args.dir)} for _ in range(args.rounds)]
    measured = {key: Run(*map(min, zip(*(each[key] for each in rounds), strict=True))) for key in rounds[0]}
    told = "\n".join([*report(chosen, measured, args.rounds), ""])
    print(told, end="")
    (args.out / "growth.md").write_text(told, encoding="utf-8")
    (args.out / "growth.svg").write_text(picture(chosen, measured), encoding="utf-8")


def arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--quick", action="store_true", help="small, one doubling, once: does it run?")
    parser.add_argument("--rounds", type=int, default=2)
    parser.add_argument("--only", nargs="*", choices=Case._fields, help="sweeps, all when absent")
    parser.add_argument("--out", type=Path, default=Path("build/bench"), help="where growth.md and growth.svg go")
    parser.add_argument("--dir", type=Path, default=Path("build/bench"), help="where ensembles are meanwhile")
    args = parser.parse_args()
    if args.quick:
        args.rounds = 1
    return args


def both(case: Case, folder: Path) -> Iterator[tuple[tuple[Case, str], Run]]:
    """Render and validate a case."""
    file, out = folder / "growth.yaml", folder / "growth"
    file.write_text(case.spec())
    shutil.rmtree(out, ignore_errors=True)
    try:
        for command, words in (("render", [str(file), "-o", str(out)]), ("validate", [str(out)])):
            yield (case, command), run([*PROCGEN, command, *words, "--workers", str(case.workers)])
    finally:
        shutil.rmtree(out, ignore_errors=True)


def slope(sizes: Sequence[int], costs: Sequence[float], start: float) -> str:
    """Of the logarithm of what costs above the start, by least squares; "·" where fewer than three can be told."""
    above = [(log2(size), log2(cost - start)) for size, cost in zip(sizes, costs, strict=True) if cost > TOLD * start]
    if len(above) < 3:
        return "·"
    x, y = zip(*above, strict=True)
    middle, mean = sum(x) / len(x), sum(y) / len(y)
    return f"{sum((a - middle) * (b - mean) for a, b in above) / sum((a - middle) ** 2 for a in x):.2f}"


def report(chosen: Mapping[str, Sequence[Case]], measured: Measured, rounds: int) -> Iterator[str]:
    of = f"{os.cpu_count()} processors ({platform.machine()}), Python {platform.python_version()}"
    yield f"`bench_growth.py` on {date.today()}, {of}, least of rounds: {rounds}. Picture: [growth.svg](growth.svg)."
    yield ""
    yield "| doubled | command | processor time grows as | seconds as | memory as |"
    yield "| --- | --- | ---: | ---: | ---: |"
    for name, cases in chosen.items():
        for command in COMMANDS:
            sizes = [getattr(case, name) for case in cases]
            runs = [measured[case, command] for case in cases]
            start = measured[START, command]
            own = [slope(sizes, costs, least) for costs, least in zip(zip(*runs, strict=True), start, strict=True)]
            seconds, processor, peak = own
            yield f"| {name} | {command} | {processor} | {seconds} | {peak} |"
    yield ""
    yield "| doubled | paths × steps | terms | series | workers | command | processor s | seconds | peak MB |"
    yield "| --- | --- | ---: | ---: | ---: | --- | ---: | ---: | ---: |"
    for name, cases in {"start": [START], **chosen}.items():
        for case in cases:
            for command in COMMANDS:
                seconds, processor, peak = measured[case, command]
                yield (
                    f"| {name} | {case.paths:,} × {case.steps:,} | {case.terms} | {case.series} | {case.workers} "
                    f"| {command} | {processor:.2f} | {seconds:.2f} | {peak:.0f} |"
                )


def picture(chosen: Mapping[str, Sequence[Case]], measured: Measured) -> str:
    """Processor time, time by the clock and memory of each sweep, as one SVG."""
    from procgen.report.pictures.svg import poster

    groups = [
        (f"{name} doubled", [chart(name, cases, measured, what, field) for what, field in WHAT.items()])
        for name, cases in chosen.items()
    ]
    lines = ["Whole processes, both axes logarithmic. Dashed: what would be linear, through the last of render."]
    return poster("How cost grows", lines, groups)


WHAT = {"processor seconds": "processor", "seconds by the clock": "seconds", "peak MB of a process": "peak"}


def chart(name: str, cases: Sequence[Case], measured: Measured, what: str, field: str) -> object:
    from procgen.report.pictures.chart import Axis, Chart, Dots, Line

    x = [log2(getattr(case, name)) for case in cases]
    y = {command: [log10(getattr(measured[case, command], field)) for case in cases] for command in COMMANDS}
    every = [value for values in y.values() for value in values]
    ticks = [n * 10.0**p for p in range(-2, 5) for n in (1, 2, 5)]
    low, high = min(every) - 0.1, max(every) + 0.1
    shown = tuple((log10(tick), f"{tick:g}") for tick in ticks if low <= log10(tick) <= high)
    marks = [Line(x, [y["render"][-1] + (at - x[-1]) * log10(2) for at in x], "compare", "linear")]
    for command, role in zip(COMMANDS, ("stated", "seen"), strict=True):
        marks += [Line(x, y[command], role, command), Dots(x, y[command], role)]
    places = tuple((at, f"{getattr(case, name):,}") for at, case in zip(x, cases, strict=True))
    return Chart(what, "", Axis(x[0], x[-1], places, name), Axis(low, high, shown, what), marks)


if __name__ == "__main__":
    main()
