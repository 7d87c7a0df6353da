"""Time of every term against white noise of the same size, in memory, 16,384 paths × 1,000 steps.

    python -m tests.bench.bench_terms [--quick] [--rounds 3] [--only KIND ...] [--laws]

Each term is drawn as its own example (`procgen terms KIND`), whatever that holds: a body below it is drawn too, and
`draws` says how many numbers of chance a value takes. Where one value is made of k finer steps of a body (`aggregate`,
`subsample`), `of` is k, and white noise of k times as many values is what it is held against. Kernels are compiled
where numba is installed. Rounds are interleaved with white noise, so that a slow minute of the machine meets both; the
table gives medians, of processor time, and is Markdown. `--laws` draws white noise of every law instead.
"""

from __future__ import annotations

import argparse
import os
import platform
import statistics
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from procgen.chance import kernel
from procgen.chance.laws import LAWS
from procgen.ensemble import render
from procgen.report.catalogue import example_spec
from procgen.spec.model import Spec
from procgen.spec.reader import read_text
from procgen.terms import catalogue
from procgen.terms.graph import build
from tests.chance.golden import PARAMETERS

WHITE = "white_noise: {sd: 1}"
HEAD = "procgen: 1\nseed: 1\npaths: {}\ntime: {{start: 2027-01-04, every: 1h, steps: {}}}\n"
ALLOWED = 3.0  # times white noise
MORE = {  # by another method, and with numbers drawn by path
    "arfima, exact": "arfima: {d: 0.3, phi: 0.4, sd: 1, method: exact}",
    "garch, alpha by path": "garch: {sd: 6.3, alpha: {draw: {uniform: [0.05, 0.15]}, over: path}, beta: 0.8}",
    "ar, phi by path": "ar: {phi: {draw: {uniform: [0.3, 0.9]}, over: path}, sd: 1}",
}


def main() -> None:
    args = arguments()
    paths, steps = (1024, 100) if args.quick else (16_384, 1_000)
    cases = dict(laws() if args.laws else terms())
    chosen = {name: text for name, text in cases.items() if not args.only or name in args.only}
    draw_white = drawer(WHITE, paths, steps)
    print(f"{paths:,} × {steps:,}, median of {args.rounds}, {os.cpu_count()} processors, Python", end=" ")
    numba = "numba" if kernel.available() else "no numba"
    print(f"{platform.python_version()}, NumPy {np.__version__}, {numba}\n")
    print("| term | of | draws | ns a value | white noise | times | |")
    print("| --- | ---: | ---: | ---: | ---: | ---: | --- |")
    values = paths * steps / 1e9
    for name, text in chosen.items():
        draw = drawer(text, paths, steps)
        draw()  # compiles, and makes tables
        graph = build(spec_of(text, paths, steps))
        count = sum(source.pace for source in graph.sources)
        rounds = [(seconds(draw), graph.pace * seconds(draw_white)) for _ in range(args.rounds)]
        times = statistics.median(a / b for a, b in rounds)
        own, white = (statistics.median(part) / values for part in zip(*rounds, strict=True))
        slow = "slow" if times > ALLOWED else ""
        print(f"| {name} | {graph.pace} | {count} | {own:.1f} | {white:.1f} | {times:.2f} | {slow} |", flush=True)


def arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--quick", action="store_true", help="1,024 × 100: does it run?")
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--only", nargs="*", default=(), help="names of the table")
    parser.add_argument("--laws", action="store_true", help="white noise of every law instead of every term")
    return parser.parse_args()


def terms() -> Iterator[tuple[str, str]]:
    """Name and text of every case: a whole example, or the term alone."""
    yield from ((kind, example_spec(kind)) for kind in catalogue())
    yield from MORE.items()


def laws() -> Iterator[tuple[str, str]]:
    """White noise of every law, with the parameters of the golden digests."""
    for name, law in LAWS.items():
        given = str(PARAMETERS.get(name, {})).replace("(", "[").replace(")", "]").replace("'", "")
        if name == "normal_mixture":
            given = "{components: [{weight: 0.6, mean: -1, sd: 0.5}, {weight: 0.3}, {weight: 0.1, mean: 2, sd: 3}]}"
        yield name, f"white_noise: {{{law.scaled_by}: 1, law: {{{name}: {given}}}}}"


def drawer(text: str, paths: int, steps: int) -> Callable[[], object]:
    """What draws an example, or a term alone, in this size."""
    spec = spec_of(text, paths, steps)

    def draw() -> object:
        with kernel.compiling(kernel.available()):
            return render(spec, out=None)

    return draw


def spec_of(text: str, paths: int, steps: int) -> Spec:
    """The spec of an example, or of a term alone, in this size."""
    body = text.partition("steps: 50}\n")[2] or f"series:\n  x: [{{{text}}}]\n"
    return read_text(HEAD.format(paths, steps) + body, catalogue(), LAWS)


def seconds(draw: Callable[[], object]) -> float:
    """Processor time of one drawing."""
    began = time.process_time()
    draw()
    return time.process_time() - began


if __name__ == "__main__":
    main()
