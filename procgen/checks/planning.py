"""From a spec to the plan of the pass: where it looks, what theory says there, and how shocks are recovered."""

from __future__ import annotations

import math
from collections.abc import Mapping
from itertools import combinations
from typing import Any

import numpy as np

from procgen.checks import missing, repeated
from procgen.checks.atoms import flattened, known_within, made_of_few, may_stay
from procgen.checks.copies import repeats_of
from procgen.checks.extremes import Reach
from procgen.checks.gather import Plan
from procgen.checks.neighbours import plan_neighbours
from procgen.checks.probes import PAIR_LIMIT, SeriesPlan, plan_cross, plan_series
from procgen.checks.recover import Cannot, Expected, Route, expected, in_doubles, route
from procgen.checks.relations import plan_relations
from procgen.checks.smooth import smooth
from procgen.checks.special import lumpy
from procgen.checks.squares import plan_squares
from procgen.checks.structure import Precision
from procgen.checks.support import possible_of, vanishes
from procgen.terms.supports import column_type, support_of
from procgen.theory.lumps import atoms_of

_OFF = 1e-9  # of its size, that a value may be off a grid and lie on it


def plan_of(spec: Any, steps: int | None = None, same_draws: bool = True, paths: int | None = None) -> Plan:
    """Everything that the pass over the data must know, from the spec's theory; `same_draws` as for `route`.

    `paths`, `steps`: how many the data have, if not those of the spec.
    """
    from procgen.terms.graph import build
    from procgen.theory import theory
    from procgen.theory.doubles import beyond_doubles, rounding_of

    graph = build(spec)
    gaps = missing.taken_out(graph, spec)
    th = theory(spec, graph)
    steps, paths = steps or spec.time.steps, paths or spec.paths
    series, routes, precision = [], {}, []
    for name, declared in spec.series.items():
        doubles = rounding_of(th, name, steps)
        grain = max(_grain(declared, th[name], graph.series[name], steps), 0.0 if doubles is None else doubles.cell)
        lost = str(doubles) if doubles is not None and doubles.hides else beyond_doubles(th, name, steps)
        found = Cannot(lost) if lost else route(name, th[name], graph, grain, same_draws, (paths, steps))
        routes[name] = way = in_doubles(found, doubles)
        if isinstance(way, Route):
            way.salt = f" of seed {spec.seed}"
        plan = plan_series(name, th[name], steps, grain, _periods(graph, name), _unseen(way), lost)
        flat = flattened(th, name, steps)
        plan.may_stay = bool(lost) or may_stay(th[name], graph, name, flat)
        plan.smooth, plan.of_few = smooth(graph, name, steps, flat), made_of_few(graph, name)
        plan.within = known_within(th, name, steps)
        series.append(plan)
        stored = _precision(declared, graph, plan, bool(flat), steps, spec.paths * steps)
        stored.cell, stored.reach = (0.0 if doubles is None else doubles.cell), (None if lost else stored.reach)
        if stored.random:
            stored.repeats = repeats_of(plan, way, graph, stored.discrete, spec.paths * steps)
        precision.append(stored)
    pairs, squares = _shock_pairs(routes, th), _squares(series, routes, steps)
    whole = Plan(steps, series, precision, plan_cross(series, th.cross), routes, pairs, squares, gaps)
    apart = [p for p in combinations(routes, 2) if p not in pairs and not gaps.keys() & set(p)]
    whole.relations = plan_relations(graph, th, steps, {plan.name: plan.grain for plan in series}, apart)
    whole.strangers = repeated.strangers(graph, [what.name for what in precision if what.random])
    return missing.adapted(whole, gaps) if gaps else whole


def _grain(declared: Any, theory: Any, node: Any, steps: int) -> float:
    """The distance of neighbouring values as stored: of decimals, whole numbers, or float32.

    0 where chance only chooses among few values, stored as they are: nothing is spread, least of all over a cell.
    """
    grain = 10.0 ** -(declared.decimals or 0) if declared.decimals is not None or declared.type == "int64" else 0.0
    if declared.type == "float32":  # far from 0 its spacing is wider than the decimals
        at = np.array([0, steps // 2, steps - 1])
        mean, variance = theory.mean(at), theory.variance(at)
        reach = np.abs(mean if mean is not None else 1.0) + 3 * np.sqrt(variance if variance is not None else 1.0)
        grain = max(grain, float(np.spacing(np.float32(np.max(reach)))))
    return 0.0 if theory.discrete and (not grain or _on_grid(theory, node, grain, steps)) else grain


def _on_grid(theory: Any, node: Any, grain: float, steps: int) -> bool:
    """Whether the few values of a series are multiples of a grain, by their laws or by what its terms can give."""
    laws = [theory.marginal(step) for step in (0, steps // 2, steps - 1)]
    if None in laws:
        numbers = [support_of(node).step or math.nan]
    else:
        numbers = [x for law in laws for x in (law.ppf(0.5), getattr(law, "spacing", 0.0), *atoms_of(law))]
    places = np.array(numbers, float) / grain
    return bool(np.all(np.abs(places - np.rint(places)) <= _OFF * np.maximum(1.0, np.abs(places))))


def _periods(graph: Any, name: str) -> list[int]:
    """Whole periods of the seasonal terms of a series."""
    found = []
    for node in graph.order([graph.series[name]]):
        period = getattr(node, "term", None) and node.term.values.get("period")
        if period and float(period).is_integer():
            found.append(int(period))
    return found


def _unseen(way: Route | Cannot) -> bool:
    """Whether averages along paths tell more than shocks: there are none, or ranks that follow hidden states."""
    return isinstance(way, Cannot) or way.scores is None or way.hidden


def _precision(declared: Any, graph: Any, plan: SeriesPlan, flat: bool, steps: int, count: int) -> Precision:
    """How the `count` values of a series are stored, and which values it cannot have."""
    name, theory = plan.name, plan.theory
    kind, few = column_type(graph, name), lumpy(theory)
    if not theory.random:
        return Precision(name, kind, declared.decimals, False, few, smooth=plan.smooth)
    reach = Reach(theory, plan.grain, steps, count)
    possible = possible_of(graph, name, declared, flat or vanishes(theory, steps))
    return Precision(name, kind, declared.decimals, True, few, reach, possible=possible, smooth=plan.smooth)


def _shock_pairs(routes: Mapping[str, Route | Cannot], th: Any) -> dict[tuple[str, str], Expected]:
    """What is expected of the shocks of two series, of the first pairs whose shocks can be recovered."""
    ways = [way for way in routes.values() if isinstance(way, Route) and way.scores is not None]
    pairs = {(a.series, b.series): expected(a, b, th.axis.space) for a, b in list(combinations(ways, 2))[:PAIR_LIMIT]}
    hidden = {way.series for way in ways if way.hidden}
    return {pair: stated for pair, stated in pairs.items() if not (stated.unknown and hidden & {*pair})}


def _squares(series: list[SeriesPlan], routes: Mapping[str, Route | Cannot], steps: int) -> dict[str, Any]:
    """Clustering that is judged by the values themselves, as their shocks cannot be recovered or tell too little."""
    found: dict[str, Any] = {}
    for plan in series:
        if _unseen(routes[plan.name]) and (squares := plan_squares(plan.theory, steps, plan.grain)) is not None:
            found[plan.name] = squares
    for plan in series:
        if not plan.unknown and (short := plan_neighbours(plan.theory, steps, plan.grain)) is not None:
            found[plan.name] = short
    return found
