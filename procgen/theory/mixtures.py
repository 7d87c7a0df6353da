"""The law at one step of a series whose law is known in each state of a chain: a mixture (Hamilton 1989)."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from procgen.chance.laws.mixture import Normals
from procgen.theory import known
from procgen.theory.expression import Expression
from procgen.theory.laws import is_gaussian, marginal
from procgen.theory.linear import At, Linear, base_of
from procgen.theory.lumps import Lumped, Point
from procgen.theory.markov import Indicator
from procgen.theory.mixedlaw import Normal
from procgen.theory.monomials import Term
from procgen.theory.sources import Source
from procgen.theory.unknown import Unknown

ROUNDING = 1e-24  # of the variance: what is left of a spread that a state takes away


def mixture_at(x: Expression, step: int) -> Any:
    """The law of x at a step, with the calls of a frozen SciPy distribution; Unknown where it is no mixture."""
    try:
        return _mixed(_by_state(x, step))
    except Unknown:
        if x.branches is None:
            raise
        return _mixed(_by_branch(x.branches(), step))


def _mixed(parts: Sequence[tuple[float, Any]]) -> Any:
    if all(isinstance(law, Normal) for _, law in parts):
        return Normals(tuple((p, law.mean, law.sd) for p, law in parts)).distribution()
    from scipy import stats

    laws = [stats.norm(law.mean, law.sd) if isinstance(law, Normal) else law for _, law in parts]
    return Lumped([p for p, _ in parts], laws)


def _by_state(x: Expression, step: int) -> list[tuple[float, Any]]:
    """The chance of each state of the one chain behind x, and the law of x in it."""
    states = [source for source in x.sources if _is_state(source)]
    if not states:
        raise Unknown("a sum or product of a flag and other chance has no law that is computed")
    forms = [x.linear, *(form for term in x.terms for form in term.factors)]
    delays = {key.delay for form in forms for key in form if _is_state(base_of(key).source) and isinstance(key, At)}
    if len(delays) != 1 or len({source.detail.chain for source in states}) != 1:
        raise Unknown("it depends on a chain at several steps, or on several chains: its law is not computed")
    at = np.array([step - delays.pop()], np.int64)
    chances = states[0].detail.chain.chances(at)[0]
    here, whole = np.array([step], np.int64), _variance(x, np.array([step], np.int64))
    possible = [int(state) for state in np.flatnonzero(chances > 0.0)]
    return [(float(chances[state]), _law(_given(x, state, chances, here), step, whole)) for state in possible]


def _by_branch(branches: Sequence[tuple[Expression | None, Expression]], step: int) -> list[tuple[float, Any]]:
    """The chance of each branch, and its law, where what chooses tells nothing of the branches."""
    here = np.array([step], np.int64)
    chooses = [source for flag, _ in branches if flag is not None for source in flag.sources]
    parts, left = [], 1.0
    for flag, branch in reversed(branches):
        if branch.space.linked(chooses, branch.sources):
            raise Unknown("what chooses a branch has a part in it: its law is not computed")
        chance = left if flag is None else float(flag.mean(here)[0])
        left -= chance
        if chance > 0.0:
            parts.append((chance, _law(branch, step, _variance(branch, here))))
    return parts


def _variance(x: Expression, here: np.ndarray) -> float:
    """Of x at a step; 0 where there is none."""
    try:
        variance = float(x.covariance(x, here, here)[0])
    except Unknown:
        return 0.0
    return variance if np.isfinite(variance) else 0.0


def _law(x: Expression, step: int, whole: float) -> Any:
    """The law in one state, of a series whose variance over all states is `whole`."""
    here = np.array([step], np.int64)
    if x.sources and not is_gaussian(x):
        try:
            return marginal(x, step)
        except Unknown as unknown:
            raise Unknown(f"in a state of its chain, {unknown.reason}") from None
    variance = float(x.covariance(x, here, here)[0])
    mean = float(x.mean(here)[0])
    if variance > ROUNDING * whole:
        return Normal(mean, float(np.sqrt(variance)))
    # A mean of differences: what these have rounded is below the 13th digit of the whole.
    size = abs(mean) + float(np.sqrt(whole))
    return Point(round(mean, 13 - int(np.ceil(np.log10(size)))) if size else mean)


def _given(x: Expression, state: int, chances: np.ndarray, at: np.ndarray) -> Expression:
    """x at a step with the indicators replaced by what they are in a state, less their means."""
    number, linear = _split(x.linear, state, chances)
    terms: dict[Term, float] = {}
    for term, c in x.terms.items():
        factors: list[Linear] = []
        for form in term.factors:
            value, rest = _split(form, state, chances)
            if value and rest:
                raise Unknown("a product of sums that hold a chain has no law that is computed")
            if rest or not form:
                factors.append(rest)
            else:
                c = c * value
        if len(factors) == 1 and not term.exponent and term.summed is None:
            linear = linear + factors[0].scaled(c * float(term.coefficient(at)[0]))
        elif factors or term.exponent or term.summed is not None:
            inner = Term(term.knowns, tuple(factors), term.exponent, term.summed)
            terms[inner] = terms.get(inner, 0.0) + c
        else:
            number = number + c * float(term.coefficient(at)[0])
    return Expression(x.space, x.mean_path + known.constant(number), linear, {t: c for t, c in terms.items() if c})


def _split(form: Linear, state: int, chances: np.ndarray) -> tuple[float, Linear]:
    """The part of a form that a state makes known, and the rest."""
    value, rest = 0.0, {}
    for key, c in form.items():
        source = base_of(key).source
        if _is_state(source):
            value += c * (float(source.detail.state == state) - float(chances[source.detail.state]))
        else:
            rest[key] = c
    return value, Linear(rest)


def _is_state(source: Source) -> bool:
    return isinstance(source.detail, Indicator)
