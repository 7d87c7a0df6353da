"""`validate`: does an ensemble have the behaviour that its spec states?"""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from functools import partial
from itertools import combinations
from numbers import Real
from pathlib import Path
from typing import Any

import numpy as np

from procgen.checks import farthest, missing, repeated, spans
from procgen.checks.atoms import few_shocks, flattened, known_within, may_stay
from procgen.checks.copies import repeats_of
from procgen.checks.extremes import MARK, Reach
from procgen.checks.filled import FILLED
from procgen.checks.gather import Gather, Plan
from procgen.checks.judge_moments import cross_moments, moment_checks
from procgen.checks.judge_shocks import cross_checks, shock_checks
from procgen.checks.lane import in_one_process
from procgen.checks.neighbours import plan_neighbours
from procgen.checks.probes import PAIR_LIMIT, SeriesPlan, plan_cross, plan_series
from procgen.checks.recover import Cannot, Expected, Route, expected, route
from procgen.checks.relations import plan_relations
from procgen.checks.smooth import smooth
from procgen.checks.special import lumpy
from procgen.checks.squares import plan_squares
from procgen.checks.structure import Precision
from procgen.checks.support import Possible, possible_of, vanishes
from procgen.checks.tied import tied_checks
from procgen.checks.untied import UntiedSums, untied_checks
from procgen.checks.verdict import Check, Verdict
from procgen.checks.words import side_by_side
from procgen.ensemble.plan import Block

_PATH = re.compile(r"\b(paths? )(\d+(?: and \d+)?)\b")
_WORST = "worst: path "
_LONGEST = 1 << 14  # steps over which the end of a forgotten start is looked for

Tick = Callable[[int, int], None]
Blocks = Iterable[tuple[int, int, Mapping[str, np.ndarray]]]


def validate(
    data: Any,
    spec: Any = None,
    false_alarm: float = 0.001,
    columns: Mapping[str, str] | None = None,
    progress: Tick | None = None,
    workers: int | None = None,
    scheduler: str | None = None,
) -> Verdict:
    """A verdict on whether `data` behaves as the spec states.

    Parameters
    ----------
    data : Ensemble, DataFrame, or path
        An ensemble (or its folder), or anyone's table: a DataFrame, a CSV or a Parquet file, with a column a series
        (long), a row an observation (panel) or, for one series, a column a path (wide).
    spec : Spec or path, optional
        What the data should follow; an ensemble knows its own.
    false_alarm : float in (0, 1)
        Probability, at most, with which data of exactly the stated behaviour are said to depart.
    columns : mapping, optional
        For a table: where "path", "step" or "time", and each series are found, e.g. {"path": "run", "x": "load"}; of
        a panel also "id" and "value", and which id a series is.
    progress : callable, optional
        Called with (rows done, rows in all).
    workers : int, optional
        Processes that read an ensemble's parts; None is what the size repays, up to the processors there are. The
        verdict is the same for any number. A table, or an ensemble in memory, is read by this process.
    scheduler : str, optional
        Address of a Dask scheduler whose workers read an ensemble's parts (extra `cluster`), or "local" to start
        `workers` of them on this machine.

    Raises
    ------
    ValueError
        When the data cannot be read, or there is no spec to compare them with; EnsembleError, too, when a worker
        process died.
    """
    from procgen.checks import source

    if isinstance(false_alarm, bool) or not isinstance(false_alarm, Real) or not 0 < false_alarm < 1:
        raise ValueError(f"expected false_alarm to be a probability between 0 and 1, got {false_alarm!r}")
    if columns is not None and not isinstance(columns, Mapping):
        raise TypeError(
            f'expected columns to be a mapping such as {{"path": "run", "x": "value"}}, got {columns!r}'
        )
    if workers is not None and (isinstance(workers, bool) or not isinstance(workers, int) or workers < 1):
        raise ValueError(f"expected workers to be a whole number of at least 1, got {workers!r}")
    origin = source.origin(data, spec, columns)
    gather = origin.gathered(workers, progress, scheduler)
    rows = [*origin.checks(), *origin.faults, *judged(gather)]
    rows += spans.checks(origin, gather, rows)
    absent = getattr(origin, "absent", 0)
    if absent:  # rows that are missing are named once, not again as values that are not finite
        rows = [row for row in rows if not _only_absent(row, gather, absent)]
    marked = {row.series for row in rows if row.note.endswith(MARK)}  # told as a mark of what is missing
    rows = [row for row in rows if not (row.what == FILLED and row.series in marked)]
    for row in rows:
        _as_known(row, origin)
    verdict = Verdict(rows, false_alarm, origin.about(), origin)
    if verdict.agrees is False and hasattr(origin, "causes"):
        ours = {known: name for name, known in origin.columns.items()}
        departing = [name for row in rows if row.outcome == "departs" for name in row.series.split(" ~ ")]
        found = list(origin.causes([ours.get(name, name) for name in departing]))
        for row in found:
            _as_known(row, origin)
        verdict.explain(found)
    return verdict


def _as_known(row: Check, origin: Any) -> None:
    """Put the names that the reader knows in the place of ours: of series, and of the paths of a table."""
    labels = getattr(origin, "labels", None)
    if labels is not None and row.series and (row.kind in ("structure", "law") or row.probe.startswith(_WORST)):
        row.note, row.probe = (_PATH.sub(partial(_labelled, labels), text) for text in (row.note, row.probe))
    row.series = " ~ ".join(origin.columns.get(name, name) for name in row.series.split(" ~ "))
    for name in sorted(origin.columns, key=len, reverse=True):
        if name != origin.columns[name]:
            row.note = row.note.replace(name, origin.columns[name])


def _labelled(labels: Sequence[Any], match: re.Match[str]) -> str:
    numbers = [int(number) for number in match[2].split(" and ")]
    return match[1] + " and ".join(str(labels[k]) if k < len(labels) else str(k) for k in numbers)


def _only_absent(row: Check, gather: Gather, absent: int) -> bool:
    return row.what == "finite values" and gather.structure.not_finite.get(row.series, [0])[0] == absent


def gathered(plan: Plan, blocks: Blocks) -> Gather:
    """The sums of one pass, in this process, over blocks that are the whole ensemble; they may be cut anywhere."""
    listed = list(blocks)
    first = min(path for path, _, _ in listed)
    end = max(path + len(values[plan.names[0]]) for path, _, values in listed)
    return in_one_process(plan, listed, Block(first, end - first, 0, plan.steps))


def plan_of(spec: Any, steps: int | None = None, same_draws: bool = True) -> Plan:
    """Everything that the pass over the data must know, from the spec's theory; `same_draws` as for `route`."""
    from procgen.terms.graph import build
    from procgen.terms.supports import column_type
    from procgen.theory import theory

    graph = build(spec)
    gaps = missing.taken_out(graph, spec)
    th = theory(spec, graph)
    steps = steps or spec.time.steps
    series, routes, precision = [], {}, []
    for name, declared in spec.series.items():
        grain = grain_of(declared, th[name], steps)
        way = route(name, th[name], graph, grain, same_draws)
        if isinstance(way, Route):
            way.salt = f" of seed {spec.seed}"
        blind = _unseen(way)
        plan = plan_series(name, th[name], steps, grain, _periods(graph, name), blind)
        flat = flattened(th, name, steps)
        plan.may_stay = may_stay(th[name], graph, name, flat)
        plan.smooth = smooth(graph, name, steps, flat)
        plan.within = known_within(th, name, steps)
        series.append(plan)
        routes[name] = way
        random = th[name].random
        reach = Reach(th[name], grain, steps, spec.paths * steps) if random else None
        possible = possible_of(graph, name, declared, bool(flat) or vanishes(th[name], steps)) if random else Possible()
        kind, few = column_type(graph, name), lumpy(th[name])
        precision.append(
            Precision(name, kind, declared.decimals, random, few, reach, possible=possible, smooth=plan.smooth)
        )
        precision[-1].repeats = repeats_of(plan, way, graph, few, spec.paths * steps) if random else None
    ways = [way for way in routes.values() if isinstance(way, Route) and way.scores is not None]
    pairs = {(a.series, b.series): expected(a, b, th.axis.space) for a, b in list(combinations(ways, 2))[:PAIR_LIMIT]}
    hidden = {way.series for way in ways if way.hidden}
    pairs = {pair: stated for pair, stated in pairs.items() if not (stated.unknown and hidden & {*pair})}
    unseen = [name for name, way in routes.items() if _unseen(way)]
    grains = {plan.name: plan.grain for plan in series}
    found = {name: plan_squares(th[name], steps, grains[name]) for name in unseen}
    squares: dict[str, Any] = {name: each for name, each in found.items() if each is not None}
    for plan in series:
        if not plan.unknown and (short := plan_neighbours(th[plan.name], steps, plan.grain)) is not None:
            squares[plan.name] = short
    whole = Plan(steps, series, precision, plan_cross(series, th.cross), routes, pairs, squares, gaps)
    apart = [p for p in combinations(routes, 2) if p not in pairs and not gaps.keys() & set(p)]
    whole.relations = plan_relations(graph, th, steps, grains, apart)
    whole.strangers = repeated.strangers(graph, [what.name for what in precision if what.random])
    return missing.adapted(whole, gaps) if gaps else whole


def _unseen(way: Route | Cannot) -> bool:
    """Whether averages along paths tell more than shocks: there are none, or ranks that follow hidden states."""
    return isinstance(way, Cannot) or way.scores is None or way.hidden


def grain_of(declared: Any, theory: Any, steps: int) -> float:
    """The distance of neighbouring values as stored: of decimals, whole numbers, or float32.

    0 where chance only chooses among few values: rounding then spreads nothing, least of all over a cell.
    """
    if theory.discrete:
        return 0.0
    grain = 10.0 ** -(declared.decimals or 0) if declared.decimals is not None or declared.type == "int64" else 0.0
    if declared.type == "float32":  # far from 0 its spacing is wider than the decimals
        at = np.array([0, steps // 2, steps - 1])
        mean, variance = theory.mean(at), theory.variance(at)
        reach = np.abs(mean if mean is not None else 1.0) + 3 * np.sqrt(variance if variance is not None else 1.0)
        grain = max(grain, float(np.spacing(np.float32(np.max(reach)))))
    return grain


def _periods(graph: Any, name: str) -> list[int]:
    """Whole periods of the seasonal terms of a series."""
    found = []
    for node in graph.order([graph.series[name]]):
        period = getattr(node, "term", None) and node.term.values.get("period")
        if period and float(period).is_integer():
            found.append(int(period))
    return found


def judged(gather: Gather) -> Iterator[Check]:
    """All checks of what one pass has gathered."""
    plan = gather.plan
    equal = {p.name: _chance_of_equal(p, plan) + missing.chance_of_none(plan, p) for p in plan.series}
    yield from gather.structure.checks(equal)
    if gather.structure.prints:
        yield from repeated.checks(plan.strangers, plan.names, *gather.structure.fingerprints(), equal)
    for column, series in enumerate(plan.series):
        yield from missing.checks(gather, series.name)
        if not plan.precision[column].random:
            yield _known(gather, series)
            continue
        yield from moment_checks(gather, column)
        yield from _shocks(gather, series.name)
        if series.name in gather.squares and not series.unknown:
            yield from gather.squares[series.name].checks(series.name)
    for place in range(len(plan.cross)):
        yield from cross_moments(gather, place)
    for relation, powers in zip(plan.relations, gather.related, strict=True):
        yield from relation.checks(powers)
    pairs = math.comb(len(plan.series), 2)
    if pairs > len(plan.cross):
        note = f"{len(plan.cross)} of the {pairs} pairs of series are compared, the first ones of the spec"
        yield Check("", "pairs of series", "", "dependence", outcome="reported", note=note)
    for pair, sums in gather.cross.items():
        name, stated = " ~ ".join(pair), plan.shock_pairs[pair]
        stopped = "; ".join(f"{one}: {gather.stopped[one]}" for one in pair if one in gather.stopped)
        if why := stated.unknown or stopped:
            yield Check(name, "shocks: correlation between series", "", "dependence", outcome="untestable", note=why)
        elif stated.tie is not None:
            yield from tied_checks(name, sums, stated)
        else:
            yield from cross_checks(name, sums, stated.at)
            if isinstance(sums, UntiedSums):
                yield from untied_checks(name, sums)


def _known(gather: Gather, series: SeriesPlan) -> Check:
    """A series without chance must be its mean."""
    if series.unknown:
        return Check(series.name, "values", "all steps", "level", outcome="untestable", note=series.unknown)
    gap, _, _, seen, stated = gather.gaps.get(series.name, (0.0, 0, 0, math.nan, math.nan))
    scale = float(np.max(np.abs(series.mean)))
    room = series.grain / 2 + max(1e-9 * scale, 1e-12 * series.within, 1e-309)
    given, wanted = side_by_side(seen, stated, 10)
    fault = "" if gap <= room else f"a value is {given}, stated {wanted}, without any chance in the spec"
    check = Check.fact(series.name, "values", "all steps", fault, "every value is the known one")
    check.kind, check.theory, check.estimate = "level", stated, seen
    return check


def _shocks(gather: Gather, name: str) -> Iterator[Check]:
    way = gather.plan.routes[name]
    if isinstance(way, Cannot):
        yield Check(name, "recovered shocks", "all steps", "law", outcome="untestable", note=str(way))
        return
    if name in gather.errors:
        series = next(plan for plan in gather.plan.series if plan.name == name)
        yield from gather.errors[name].checks(name, series.highest)
        return
    sums = gather.shocks[name]
    if name in gather.stopped:
        note = gather.stopped[name]
        yield Check(name, "recovered shocks", "all steps", "law", outcome="untestable", note=note)
        return
    noise = gather.plan.noise.get(name, 0.0)
    if math.isinf(noise):
        note = "stored rounding hides which of the values of its law a shock has"
        yield Check(name, "recovered shocks", "all steps", "law", outcome="untestable", note=note)
        return
    if sums.n and noise > 0.1 * math.sqrt(2 / sums.n):
        note = f"stored rounding moves the shocks by {math.sqrt(noise):.2g} of their sd, too much for {sums.n} of them"
        yield Check(name, "recovered shocks", "all steps", "law", outcome="untestable", note=note)
        return
    if sums.n == 0:
        yield Check(name, "recovered shocks", "", "law", outcome="untestable", note=_none_recovered(way, gather))
        return
    yield from shock_checks(name, sums, way.words)
    if name in gather.led:
        yield from gather.led[name].checks(name)
    ranks = way.ranked is not None or way.few is not None
    yield from farthest.checks(name, sums.scores, sums.far, sums.n, noise, ranks)
    points = getattr(sums.scores.law, "points", None) is not None or lumpy(way.theory)
    if not (ranks or points or noise or way.grain):
        yield from farthest.ties(name, sums.scores, sums.far, sums.n)
    if name in gather.events:
        yield from gather.events[name].checks(name)


def _none_recovered(way: Route, gather: Gather) -> str:
    """Why a way that can be gone has led to no shock, and how many steps would mend it."""
    needed = way.needed(_LONGEST)
    if needed is None:
        return f"no shock could be recovered: {_LONGEST} steps would not be enough to forget what came before step 0"
    if needed > gather.plan.steps:
        return (
            f"no shock could be recovered: what came before step 0 is not known and must be forgotten first, which "
            f"needs about {needed} steps, not {gather.plan.steps}"
        )
    return "no shock could be recovered: no path has finite values throughout"


def _chance_of_equal(series: SeriesPlan, plan: Plan) -> float:
    """Probability that two paths of a series are equal by rounding; 0 where values are not rounded."""
    few = few_shocks(series.theory)
    if few is not None and not series.grain:
        return few.same**plan.steps
    if lumpy(series.theory):
        return 1.0
    if series.may_stay:
        return 1.0
    step = plan.precision[plan.names.index(series.name)].possible.support.step
    if step and not series.grain:
        return _equal_on_lattice(series, step, plan.steps)
    if not np.isfinite(series.variance).all():
        return 0.0
    moving = int(np.count_nonzero(series.drawn > 0))
    if series.grain == 0.0:
        return 0.0 if moving else 1.0
    way = plan.routes[series.name]
    sd = math.sqrt(float(series.drawn.max()))
    if isinstance(way, Route) and way.kalman is not None:
        sd = min(sd, way.kalman.roots[-1])
        moving = plan.steps - 1 if moving < len(series.steps) else plan.steps
    # Two normals of this sd fall in one cell with probability grain / (2 sqrt(pi) sd).
    return min(1.0, series.grain / (2 * math.sqrt(math.pi) * sd)) ** max(moving, 1) if sd else 1.0


def _equal_on_lattice(series: SeriesPlan, step: float, steps: int) -> float:
    """The same of values that a term has put on a lattice, by what is new in each since the step before it.

    Where theory does not know that, or it is small beside the lattice, equal paths are no wonder.
    """
    neighbours = [(i, j, cov) for (i, j), cov in series.covariance.items() if series.steps[j] == series.steps[i] + 1]
    if not neighbours or not np.all(series.variance > 0) or any(cov is None for _, _, cov in neighbours):
        return 1.0
    new = min(float(series.variance[j]) - (cov or 0.0) ** 2 / float(series.variance[i]) for i, j, cov in neighbours)
    return min(1.0, step / (2 * math.sqrt(math.pi * new))) ** steps if new > 0 else 1.0


def read_spec(spec: Any) -> Any:
    """A Spec, from itself or from the path of its file."""
    if isinstance(spec, str | Path):
        from procgen.chance.laws import LAWS
        from procgen.spec.reader import read_file
        from procgen.terms import catalogue

        return read_file(spec, catalogue(), LAWS)
    return spec


__all__ = ["Expected", "plan_of", "read_spec", "validate"]
