"""Which planted departures the validator finds, and whether its first line names series and kind.

    python tests/studies/departures.py [--quick] [--seeds 100] [--only NAME] [--composed | --terms]

Each row plants one departure: paths are drawn from a spec that differs in one number, or true paths are spoiled by
hand, and are held against the stated spec. Printed as a Markdown table: how often it was found, how often the first
line named series and kind rightly, and that line for the last seed. `--composed` plants in one term of the specs of
`composed.py` instead, `--terms` in terms of all families (`planted_terms.py`).
"""

from __future__ import annotations

import argparse
import copy
import sys
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

PATHS, STEPS = 2000, 500
Values = dict[str, np.ndarray]


@dataclass(frozen=True)
class Departure:
    """One planted departure: the stated body of `x` (or whole spec), what is drawn instead, and what is to be named."""

    name: str
    stated: Any
    drawn: Any = None
    spoil: Callable[[Values, np.random.Generator], None] | None = None
    rewrite: Callable[[Any, np.random.Generator], Any] | None = None  # of the table in the file of an ensemble of ours
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
    from procgen.checks.planning import plan_of

    return plan_of(spec_of(eval(key), paths, steps, 1))  # a key is the repr of plain data


def draw(spec: Any) -> Values:
    """All values of a spec as it would be stored, {series: (paths, steps)}."""
    from procgen.ensemble import render

    ensemble = render(spec, out=None)
    return {name: np.array(ensemble[name]) for name in spec.series}


def sums(stated: Any, values: Values) -> Any:
    """The sums of one pass over arrays."""
    paths, steps = next(iter(values.values())).shape
    return gathered(_plan(repr(stated), paths, steps), [(0, 0, values)])


def gathered(plan: Any, blocks: Iterable[tuple[int, int, Values]]) -> Any:
    """The sums of one pass, in this process, over blocks that are the whole ensemble; they may be cut anywhere."""
    from procgen.checks.lane import in_one_process
    from procgen.ensemble.plan import Block

    listed = list(blocks)
    first = min(path for path, _, _ in listed)
    end = max(path + len(values[plan.names[0]]) for path, _, values in listed)
    return in_one_process(plan, listed, Block(first, end - first, 0, plan.steps))


def verdict(stated: Any, values: Values, false_alarm: float = 0.001) -> Any:
    """The verdict on arrays, without the digest (which would see any change of a stored value)."""
    from procgen.checks.judgement import judged
    from procgen.checks.verdict import Verdict

    return Verdict(list(judged(sums(stated, values))), false_alarm)


def planted(case: Departure, seed: int, paths: int = PATHS, steps: int = STEPS) -> Any:
    """The verdict on one departure, drawn with `seed`."""
    drawn = case.stated if case.drawn is None else case.drawn
    spec, rng = spec_of(drawn, paths, steps, seed), np.random.default_rng(seed)
    if case.rewrite is not None:
        return _rewritten(spec, case.rewrite, rng)
    values = draw(spec)
    if case.spoil is not None:
        case.spoil(values, rng)
    return verdict(case.stated, values)


def _rewritten(spec: Any, change: Callable[[Any, np.random.Generator], Any], rng: np.random.Generator) -> Any:
    """The verdict on an ensemble of ours on disk, one of whose files was written again with another table."""
    import pyarrow.parquet as pq

    from procgen.checks.validate import validate
    from procgen.ensemble import render

    with TemporaryDirectory() as folder:
        render(spec, out=Path(folder) / "ensemble")
        file = min((Path(folder) / "ensemble").glob("*.parquet"))
        pq.write_table(change(pq.read_table(file), rng), file)
        return validate(Path(folder) / "ensemble")


def named(case: Departure, found: Any) -> bool:
    """Whether the first line names the series (of a fault of the rows, none) and the kind."""
    who = f"{case.series}: " if case.series else ""
    lines = found.headline
    return bool(lines) and any(lines[0].startswith(f"{who}{kind}") for kind in case.kinds)


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


def _ten_rows_moved(table: Any, rng: np.random.Generator) -> Any:
    """Ten rows of a file in reverse order."""
    order = np.arange(table.num_rows)
    first = int(rng.integers(table.num_rows - 10))
    order[first : first + 10] = order[first : first + 10][::-1]
    return table.take(order).cast(table.schema)


def _one_value_changed(table: Any, rng: np.random.Generator) -> Any:
    """The next larger number in place of one value."""
    import pyarrow as pa

    at = table.schema.get_field_index("x")
    x = table.column("x").to_numpy().copy()
    row = int(rng.integers(len(x)))
    x[row] = np.nextafter(x[row], np.inf)
    return table.set_column(at, table.schema.field("x"), pa.array(x))


AR = [{"ar": {"phi": 0.6, "sd": 1}}]
NOISE = [{"white_noise": {"sd": 1}}]
WALK = [{"random_walk": {"sd": 1}}]
T5 = [{"white_noise": {"sd": 1, "law": {"student_t": {"df": 5}}}}]
T8 = [{"white_noise": {"sd": 1, "law": {"student_t": {"df": 8}}}}]
GARCH = [{"garch": {"omega": 0.05, "alpha": 0.10, "beta": 0.85}}]
SUM = [{"random_walk": {"sd": 0.3}}, {"ar": {"phi": 0.5, "sd": 1}}]


def _season(peak: float) -> list[Any]:
    return [{"seasonal": {"period": 24, "harmonics": [{"amplitude": 1, "peak": peak}]}}, *NOISE]


def _pair(value: float) -> dict[str, Any]:
    return {
        "series": {"x": [{"ar": {"phi": 0.5, "sd": 1}}], "y": [{"white_noise": {"sd": 1}}]},
        "correlation": [{"between": ["x.ar", "y.white_noise"], "value": value}],
    }


TWO = {"series": {"x": NOISE, "y": [{"constant": 1}, {"white_noise": {"sd": 2}}]}}
OTHER_GARCH = [{"garch": {"omega": 0.05, "alpha": 0.14, "beta": 0.81}}]
UNSCALED_T = [{"white_noise": {"sd": (5 / 3) ** 0.5, "law": {"student_t": {"df": 5}}}}]

# The smallest departures that must be found in at least 95 of 100 ensembles of 2,000 paths × 500 steps.
PROMISED = (
    Departure("AR φ 0.60 drawn as 0.61", AR, [{"ar": {"phi": 0.61, "sd": 1}}], kinds=("memory",)),
    Departure("sd 1 % high", AR, [{"ar": {"phi": 0.6, "sd": 1.01}}], kinds=("spread",)),
    Departure("random walk sd 1 % high", WALK, [{"random_walk": {"sd": 1.01}}], kinds=("spread",)),
    Departure("white noise with MA 0.01", NOISE, [{"ma": {"theta": 0.01, "sd": 1}}], kinds=("memory",)),
    Departure("t(8) drawn as normal of the same variance", T8, NOISE, kinds=("law",)),
    Departure("garch (0.05, 0.10, 0.85) drawn as (0.05, 0.14, 0.81)", GARCH, OTHER_GARCH, kinds=("clustering",)),
    Departure("AR 0.6 started at zero", AR, spoil=_from_zero, kinds=("spread",)),
    Departure("seasonal peak one step off", _season(6), _season(7), kinds=("level",)),
    Departure("correlation 0.35 drawn as 0.37", _pair(0.35), _pair(0.37), kinds=("dependence",), series="x ~ y"),
    Departure("every second path repeats its neighbour", AR, spoil=_repeat_neighbours, kinds=("structure",)),
    Departure("one path repeated once", AR, spoil=_repeat_one, kinds=("structure",)),
    Departure("two series share one stream", TWO, spoil=_shared_stream, kinds=("dependence",), series="x ~ y"),
    Departure("a float32 round trip", AR, spoil=_through_float32, kinds=("structure",)),
    Departure("ten rows out of order", AR, rewrite=_ten_rows_moved, kinds=("structure",), series=""),
    Departure("one NaN", AR, spoil=_one_nan, kinds=("structure",)),
    Departure("one value changed", AR, rewrite=_one_value_changed, kinds=("structure",)),
)

CASES = (
    *PROMISED,
    Departure("AR level off by 0.02 sd", AR, [{"constant": 0.02}, *AR], kinds=("level",)),
    Departure("AR sign of φ", AR, [{"ar": {"phi": -0.6, "sd": 1}}], kinds=("memory",)),
    Departure("AR φ at lag 2", AR, [{"ar": {"phi": [0, 0.6], "sd": 1}}], kinds=("memory",)),
    Departure(
        "variance given for the sd", [{"white_noise": {"sd": 0.5}}], [{"white_noise": {"sd": 0.25}}], kinds=("spread",)
    ),
    Departure("t(5) not standardised", T5, UNSCALED_T, kinds=("spread",)),
    Departure("garch drawn as white noise", GARCH, NOISE, kinds=("clustering",)),
    Departure("walk one step late", WALK, spoil=_last_step_shocked, kinds=("level", "spread")),
    Departure("sum: walk sd 3 % high", SUM, [{"random_walk": {"sd": 0.309}}, SUM[1]], kinds=("spread", "memory")),
    Departure(
        "sum: AR φ 0.50 drawn as 0.51", SUM, [SUM[0], {"ar": {"phi": 0.51, "sd": 1}}], kinds=("memory", "spread")
    ),
)


def table(cases: tuple[Departure, ...], seeds: int, only: str = "") -> Iterator[str]:
    """Lines of a Markdown table, a departure each, and one for all."""
    yield f"| departure, {PATHS:,} × {STEPS} | found | named | first line of the last seed |"
    yield "| --- | --- | --- | --- |"
    total = np.zeros(3, dtype=int)
    for case in cases:
        if only not in case.name:
            continue
        found = right = 0
        line = ""
        for seed in range(1, seeds + 1):
            answer = planted(case, seed)
            found += answer.agrees is False
            right += named(case, answer)
            line = answer.headline[0] if answer.headline else "nothing departs"
        total += found, right, seeds
        yield f"| {case.name} | {found}/{seeds} | {right}/{seeds} | {line} |"
    yield f"| all | {total[0]}/{total[2]} | {total[1]}/{total[2]} | |"


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seeds", type=int, default=100)
    parser.add_argument("--quick", action="store_true", help="one seed each")
    parser.add_argument("--only", default="", help="cases whose name contains this")
    parser.add_argument("--composed", action="store_true", help="departures in one term of composed specs")
    parser.add_argument("--terms", action="store_true", help="departures in terms of all families")
    options = parser.parse_args()
    cases = CASES
    if options.composed:
        from tests.studies import composed

        cases = composed.CASES
    if options.terms:
        from tests.studies import planted_terms

        cases = planted_terms.CASES
    for line in table(cases, 1 if options.quick else options.seeds, options.only):
        print(line, flush=True)


if __name__ == "__main__":
    main()
