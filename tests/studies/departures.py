"""Which planted departures the validator finds, and whether its first line names series and kind.

    python tests/studies/departures.py [--quick] [--seeds 100] [--only NAME]

Each row plants one departure: paths are drawn from a spec that differs in one number, or true paths are spoiled by
hand, and are held against the stated spec. Printed: how often it was found, and how often the first line was right.
"""

from __future__ import annotations

import argparse
import copy
import sys
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np

PATHS, STEPS = 2000, 500
Values = dict[str, np.ndarray]


@dataclass(frozen=True)
class Departure:
    """One planted departure: the stated body of `x` (or whole spec), what is drawn instead, and what is to be named."""

    name: str
    stated: Any
    drawn: Any = None
    spoil: Callable[[Values, np.random.Generator], None] | None = None
    kinds: tuple[str, ...] = ()
    series: str = "x"


def spec_of(body: Any, paths: int, steps: int, seed: int) -> Any:
    """A Spec of one series `x` with this body, or of the mapping given."""
    from procgen.ensemble.source import read_spec

    raw = {"procgen": 1, "seed": seed, "paths": paths, "time": {"steps": steps}}
    raw |= (
        copy.deepcopy(body) if isinstance(body, dict) and "series" in body else {"series": {"x": copy.deepcopy(body)}}
    )
    return read_spec(raw)


@lru_cache(maxsize=64)
def _plan(key: str, paths: int, steps: int) -> Any:
    from procgen.checks.validate import plan_of

    return plan_of(spec_of(eval(key), paths, steps, 1))  # a key is the repr of plain data


def draw(spec: Any) -> Values:
    """All values of a spec as it would be stored, {series: (paths, steps)}."""
    from procgen.ensemble import render

    ensemble = render(spec, out=None)
    return {name: np.array(ensemble[name]) for name in spec.series}


def verdict(stated: Any, values: Values, false_alarm: float = 0.001) -> Any:
    """The verdict on arrays, without the digest (which would see any change of a stored value)."""
    from procgen.checks.validate import gathered, judged
    from procgen.checks.verdict import Verdict

    paths, steps = next(iter(values.values())).shape
    gather = gathered(_plan(repr(stated), paths, steps), [(0, 0, values)])
    return Verdict(list(judged(gather)), false_alarm)


def planted(case: Departure, seed: int, paths: int = PATHS, steps: int = STEPS) -> Any:
    """The verdict on one departure, drawn with `seed`."""
    drawn = case.stated if case.drawn is None else case.drawn
    values = draw(spec_of(drawn, paths, steps, seed))
    if case.spoil is not None:
        case.spoil(values, np.random.default_rng(seed))
    return verdict(case.stated, values)


def named(case: Departure, found: Any) -> bool:
    """Whether the first line names the series and the kind."""
    lines = found.headline
    return (
        bool(lines) and lines[0].startswith(f"{case.series}: ") and any(f": {kind}" in lines[0] for kind in case.kinds)
    )


# the departures


def _repeat_neighbours(values: Values, rng: np.random.Generator) -> None:
    x = values["x"]
    x[1::2] = x[::2]


def _repeat_one(values: Values, rng: np.random.Generator) -> None:
    a, b = rng.choice(len(values["x"]), 2, replace=False)
    values["x"][a] = values["x"][b]


def _through_float32(values: Values, rng: np.random.Generator) -> None:
    values["x"] = values["x"].astype(np.float32).astype(float)


def _one_nan(values: Values, rng: np.random.Generator) -> None:
    x = values["x"]
    x[rng.integers(x.shape[0]), rng.integers(x.shape[1])] = np.nan


def _shared_stream(values: Values, rng: np.random.Generator) -> None:
    values["y"] = 2 * values["x"] + 1


def _from_zero(values: Values, rng: np.random.Generator) -> None:
    """AR(1) with coefficient 0.6 started at zero: what is left of the stationary start is taken away."""
    x = values["x"]
    x -= x[:, :1] * 0.6 ** np.arange(x.shape[1])
    x[:, 0] = 0.0


def _last_step_shocked(values: Values, rng: np.random.Generator) -> None:
    values["x"][:, 1:] = values["x"][:, :-1].copy()


AR = [{"ar": {"phi": 0.6, "sd": 1}}]
NOISE = [{"white_noise": {"sd": 1}}]
T8 = [{"white_noise": {"sd": 1, "law": {"student_t": {"df": 8}}}}]
GARCH = [{"garch": {"omega": 0.05, "alpha": 0.10, "beta": 0.85}}]
SEASON = [{"seasonal": {"period": 24, "harmonics": [{"amplitude": 1, "peak": 6}]}}, *NOISE]
MOVED = [{"seasonal": {"period": 24, "harmonics": [{"amplitude": 1, "peak": 7}]}}, *NOISE]
SUM = [{"random_walk": {"sd": 0.3}}, {"ar": {"phi": 0.5, "sd": 1}}]


def _pair(value: float) -> dict[str, Any]:
    return {
        "series": {"x": [{"ar": {"phi": 0.5, "sd": 1}}], "y": [{"white_noise": {"sd": 1}}]},
        "correlation": [{"between": ["x.ar", "y.white_noise"], "value": value}],
    }


TWO = {"series": {"x": NOISE, "y": [{"constant": 1}, {"white_noise": {"sd": 2}}]}}

CASES = (
    Departure("AR φ 0.60 drawn as 0.61", AR, [{"ar": {"phi": 0.61, "sd": 1}}], kinds=("memory",)),
    Departure("AR sd 1 % high", AR, [{"ar": {"phi": 0.6, "sd": 1.01}}], kinds=("spread",)),
    Departure("AR level off by 0.02 sd", AR, [{"constant": 0.02}, *AR], kinds=("level",)),
    Departure("AR sign of φ", AR, [{"ar": {"phi": -0.6, "sd": 1}}], kinds=("memory", "spread")),
    Departure(
        "variance given for the sd", [{"white_noise": {"sd": 0.5}}], [{"white_noise": {"sd": 0.25}}], kinds=("spread",)
    ),
    Departure(
        "random walk sd 1 % high", [{"random_walk": {"sd": 1}}], [{"random_walk": {"sd": 1.01}}], kinds=("spread",)
    ),
    Departure("white noise with MA 0.01", NOISE, [{"ma": {"theta": 0.01, "sd": 1}}], kinds=("memory",)),
    Departure("t(8) drawn as normal", T8, NOISE, kinds=("law",)),
    Departure(
        "t(8) not standardised",
        T8,
        [{"white_noise": {"sd": 1.1547005, "law": {"student_t": {"df": 8}}}}],
        kinds=("spread",),
    ),
    Departure(
        "garch α 0.10 drawn as 0.14, same persistence",
        GARCH,
        [{"garch": {"omega": 0.05, "alpha": 0.14, "beta": 0.81}}],
        kinds=("clustering",),
    ),
    Departure("garch drawn as white noise", GARCH, NOISE, kinds=("clustering", "law")),
    Departure("AR started at zero", AR, spoil=_from_zero, kinds=("spread", "level")),
    Departure("one step late", [{"random_walk": {"sd": 1}}], spoil=_last_step_shocked, kinds=("level", "spread")),
    Departure("seasonal peak one step late", SEASON, MOVED, kinds=("level",)),
    Departure("sum: walk sd 3 % high", SUM, [{"random_walk": {"sd": 0.309}}, SUM[1]], kinds=("spread", "memory")),
    Departure(
        "sum: AR φ 0.50 drawn as 0.51", SUM, [SUM[0], {"ar": {"phi": 0.51, "sd": 1}}], kinds=("memory", "spread")
    ),
    Departure("correlation 0.35 drawn as 0.37", _pair(0.35), _pair(0.37), kinds=("dependence",), series="x ~ y"),
    Departure("two series share one stream", TWO, spoil=_shared_stream, kinds=("dependence",), series="x ~ y"),
    Departure("every second path repeats its neighbour", AR, spoil=_repeat_neighbours, kinds=("structure",)),
    Departure("one path repeated once", AR, spoil=_repeat_one, kinds=("structure",)),
    Departure("through float32", AR, spoil=_through_float32, kinds=("structure",)),
    Departure("one NaN", AR, spoil=_one_nan, kinds=("structure",)),
)


def table(seeds: int, only: str = "", paths: int = PATHS, steps: int = STEPS) -> Iterator[tuple[str, int, int, str]]:
    """(name, times found, times named rightly, the last first line) of each case."""
    for case in CASES:
        if only not in case.name:
            continue
        found = right = 0
        line = ""
        for seed in range(1, seeds + 1):
            answer = planted(case, seed, paths, steps)
            found += answer.agrees is False
            right += named(case, answer)
            line = answer.headline[0] if answer.headline else "nothing departs"
        yield case.name, found, right, line


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seeds", type=int, default=100)
    parser.add_argument("--quick", action="store_true", help="one seed each")
    parser.add_argument("--only", default="", help="cases whose name contains this")
    options = parser.parse_args()
    seeds = 1 if options.quick else options.seeds
    print(f"{'departure':48s} {'found':>9s} {'named':>9s}  first line of the last seed")
    for name, found, right, line in table(seeds, options.only):
        print(f"{name:48s} {found:4d}/{seeds:<4d} {right:4d}/{seeds:<4d}  {line}")
        sys.stdout.flush()


if __name__ == "__main__":
    main()
