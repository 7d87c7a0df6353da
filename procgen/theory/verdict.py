"""Whether a series is stationary, and why not.

Weak stationarity speaks of mean and autocovariances, strict stationarity of all laws; a conditionally
heteroskedastic series can be both. A verdict is the first that applies of

    infinite variance, variance grows, variance not constant, autocovariance not constant,
    settles from its given start, mean not constant, cyclostationary, weakly stationary, strictly stationary

and its reasons name every term that contributes.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import field

import numpy as np

from procgen.spec.records import dataclass
from procgen.theory.arma import spectral_radius
from procgen.theory.expression import Expression
from procgen.theory.known import Known, said
from procgen.theory.linear import At, Frozen, Key, Linear, Season, Sum, base_of
from procgen.theory.monomials import Term
from procgen.theory.sources import GARCH, OPAQUE, PROCESS, SQUARES, Source, Space
from procgen.theory.unknown import Unknown

INFINITE = "infinite variance"
GROWS = "variance grows"
VARIES = "variance not constant"
MEMORY = "autocovariance not constant"
SETTLES = "settles from its given start"
MEAN = "mean not constant"
CYCLES = "cyclostationary"
WEAK = "weakly stationary"
STRICT = "strictly stationary"
ORDER = (INFINITE, GROWS, VARIES, MEMORY, SETTLES, MEAN, CYCLES, WEAK, STRICT)
LEAVES = "leaves from a given past and forgets it"
LEAVES_VARIANCE = "leaves from a given variance and forgets it"
UNIT_ROOT = 1e-9  # a root nearer to the unit circle than this counts as on it


@dataclass(frozen=True)
class Stationarity:
    """A verdict and its reasons.

    `stationary`: mean and autocovariances do not depend on the step. `covariance_stationary`: the
    autocovariances do not, so that deviations from the (known) mean may be pooled over time.
    `strict_deviations`: no joint law of these deviations does.
    """

    verdict: str
    reasons: tuple[str, ...]
    stationary: bool
    covariance_stationary: bool
    strict_deviations: bool = False

    def __iter__(self):
        return iter((self.verdict, self.reasons))


@dataclass
class _Findings:
    space: Space
    found: dict[str, list[str]] = field(default_factory=dict)
    notes: list[str] = field(default_factory=list)

    def say(self, verdict: str, reason: str) -> None:
        reasons = self.found.setdefault(verdict, [])
        if reason not in reasons:
            reasons.append(reason)


def judge(x: Expression) -> Stationarity:
    """The verdict on a series, from what it is made of."""
    findings = _Findings(x.space)
    _random_parts(findings, x)
    _mean(findings, x.mean_path)
    found = findings.found
    verdict = next((v for v in ORDER if v in found), STRICT)
    reasons = [reason for v in ORDER for reason in found.get(v, ())] + findings.notes
    if not x.parts and verdict == STRICT:
        reasons.append("a constant")
    lasting = any(source.kind == PROCESS for source in x.sources)  # such as a chain, whose start is drawn once
    same = "its joint law is the same" if lasting else "the same function of independent shocks"
    return Stationarity(
        verdict,
        tuple(dict.fromkeys(reasons)) or (f"{same} at every step",),
        stationary=not set(found) - {WEAK},
        covariance_stationary=not set(found) - {WEAK, MEAN},
        strict_deviations=not set(found) - {MEAN},
    )


def _mean(findings: _Findings, mean: Known) -> None:
    try:
        moving = mean.movement(findings.space.horizon)
        settling = {piece.note for piece in moving.pieces if piece.settles}
        for note in moving.notes:
            findings.say(SETTLES if note in settling else MEAN, note)
    except Unknown as unknown:
        findings.notes.append(f"mean unknown: {unknown.reason}")


def _random_parts(findings: _Findings, x: Expression) -> None:
    _form(findings, x.linear)
    for term in x.terms:
        _term(findings, term)
    _frozen(findings, x)


def _term(findings: _Findings, term: Term) -> None:
    for factor in term.knowns:
        cyclic = factor.periods is not None
        why = said(factor.notes) or "known as it is"
        if factor.settles:
            findings.say(SETTLES, f"a random part is multiplied by what settles ({why})")
        elif cyclic:
            findings.say(CYCLES, f"a random part is multiplied by a pattern ({why})")
        else:
            findings.say(VARIES, f"a random part is multiplied by what moves ({why})")
    for form in (*term.factors, term.exponent):
        _form(findings, form)
    for source in term.exponent.sources:
        if source.power_tailed:
            findings.say(INFINITE, f"an exponential of {source.key}, whose tails are power laws, has no finite mean")
    if term.summed is not None:
        _term(findings, term.summed)
        findings.say(GROWS, "a running sum of products or exponentials")


def _form(findings: _Findings, form: Linear) -> None:
    for key in form:
        if isinstance(key, Sum):
            findings.say(GROWS, f"unit root in {_origin(findings.space, key)}")
        elif isinstance(key, Season):
            findings.say(GROWS, f"seasonal unit roots in {_origin(findings.space, key._replace(delay=0))}")
        elif base_of(key).started:
            _started(findings, key)
    for source in form.sources:
        if source.kind == PROCESS:
            _ingredients(findings, source.detail.ingredients)
            of_it = Linear({key: c for key, c in form.items() if source.detail.goes_with(base_of(key).source)})
            for verdict, reason in source.detail.verdicts(of_it):
                findings.say(verdict, reason)
        else:
            _source(findings, source)


def _started(findings: _Findings, key: Key) -> None:
    base = base_of(key)
    if base.source.kind == GARCH and not base.phi and isinstance(key, At) and not key.delay:
        return  # it is said of the source itself
    where = findings.space.origins.get(base, base.source.key)
    radius = spectral_radius(base.phi)
    if radius > 1.0 + UNIT_ROOT:
        findings.say(GROWS, f"explosive root of modulus {1.0 / radius:.6g} in {where}, run from a given past")
    elif radius > 1.0 - UNIT_ROOT:
        findings.say(GROWS, f"unit root in {where}")
    elif base.phi or (isinstance(key, At) and key.delay) or not _constant_path(base.source):
        findings.say(SETTLES, f"{where} {LEAVES}")


def _constant_path(source: Source) -> bool:
    if source.path is None:
        return True
    try:
        path = source.path(np.arange(256))
    except Unknown:  # a variance without a number is not a constant one
        return False
    return bool(np.abs(path - source.variance).max() <= 1e-12 * source.variance)


def _source(findings: _Findings, source: Source) -> None:
    if source.kind == OPAQUE:
        behind = _Findings(findings.space)
        _ingredients(behind, source.detail)
        if source.highest is not None and source.highest > 2.0:  # it has a variance, whatever its ingredients have
            behind.found.pop(INFINITE, None)
        for verdict, reasons in behind.found.items():
            for reason in reasons:
                findings.say(verdict, reason)
        findings.notes += behind.notes
        findings.notes.append(f"moments unknown: {source.reason}")
    elif source.kind in (GARCH, SQUARES):
        _heteroskedastic(findings, source)
    elif not np.isfinite(source.variance):
        findings.say(INFINITE, f"{source.key} has a law without a variance")


def _ingredients(findings: _Findings, ingredients: Iterable[Expression]) -> None:
    for ingredient in ingredients:
        _random_parts(findings, ingredient)
        moving = ingredient.mean_path
        if moving.periods is None or moving.periods:
            verdict = CYCLES if moving.periods else SETTLES if moving.settles else VARIES
            for note in moving.notes:
                findings.say(verdict, note)


def _heteroskedastic(findings: _Findings, source: Source) -> None:
    process, name = source.detail, (source.owner or source).key
    strict, why = process.strictly_stationary
    if process.started:
        if process.total >= 1.0:
            findings.say(GROWS, f"{name} leaves from a given variance and {why}")
        elif _constant_path(source):
            findings.say(WEAK, f"{name} leaves from its own unconditional variance, known at step 0 only")
        else:
            findings.say(SETTLES, f"{name} {LEAVES_VARIANCE}")
        return
    if not np.isfinite(source.variance):
        moment = "variance" if source.kind == GARCH else "fourth moment"
        stands = {True: "strictly stationary", False: "not stationary", None: "strict stationarity open"}[strict]
        findings.say(INFINITE, f"{name} has no finite {moment}; {stands}: {why}")
        return
    # A shock goes by the name of the term that it drives, whose own values may be correlated.
    findings.notes.append(f"shocks of {name} are uncorrelated but not independent: their conditional variance moves")


def _frozen(findings: _Findings, x: Expression) -> None:
    forms = [x.linear, *(f for term in x.terms for f in (*term.factors, term.exponent))]
    if any(isinstance(key, Frozen) for form in forms for key in form) and not _has_sum(forms):
        findings.say(SETTLES, "a sum that keeps its value of step 0 for ever")


def _has_sum(forms: Iterable[Linear]) -> bool:
    return any(isinstance(key, Sum | Season) for form in forms for key in form)


def _origin(space: Space, key: Key) -> str:
    if key in space.origins:
        return space.origins[key]
    while isinstance(key, Sum):
        key = key.of
    return space.origins.get(key, f"the running sum of {base_of(key).source.key}")
