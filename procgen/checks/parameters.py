"""Drawn parameters of an ensemble: whether they follow their laws, and whether their table is as it was drawn."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import judge
from procgen.checks.verdict import Check
from procgen.spec.draws import BetaDraw, ChoiceDraw, DrawLaw, LognormalDraw, NormalDraw, TableDraw, UniformDraw

PROBE = "all paths"


def parameter_checks(ensemble: Any, spec: Any) -> Iterator[Check]:
    """A check of the law of every parameter that `spec` draws by path, and one of the table in its folder."""
    from procgen.terms.varied import Varied

    stated = Varied(spec).parameters
    if not stated:
        return
    drawn = ensemble.parameters
    for name, parameter in stated.items():
        law = parameter.varying.law
        if name in drawn and not isinstance(law, TableDraw):
            yield from _law_checks(f"parameter {name}", drawn[name].to_numpy(), law)
    if len(drawn.columns) and getattr(ensemble, "manifest", None) is not None:
        yield _table(ensemble, drawn)


def _law_checks(what: str, values: NDArray, law: DrawLaw) -> Iterator[Check]:
    if isinstance(law, ChoiceDraw):
        weights = np.array(law.weights or (1.0,) * len(law.values))
        for value in sorted(set(law.values)):
            chance = float(weights[np.array(law.values) == value].sum() / weights.sum())
            if chance < 1.0:
                finding = judge.share(int(np.count_nonzero(values == value)), len(values), chance)
                yield Check.of("", f"{what}: share of {value:g}", PROBE, "law", finding)
        others = int(np.count_nonzero(~np.isin(values, law.values)))
        fault = f"{others} values are none of those that are stated" if others else ""
        yield Check.fact("", f"{what}: values", PROBE, fault, "every value is one of those that are stated")
        return
    u = np.sort(areas(law, values))
    place = np.arange(len(u)) / len(u)
    distance = float(max(np.max(u - place), np.max(place + 1 / len(u) - u)))
    yield Check.of("", f"{what}: distribution function", PROBE, "law", judge.kolmogorov(distance, len(u)))


def areas(law: DrawLaw, x: NDArray) -> NDArray:
    """The area of a law of draws below x."""
    from scipy.special import betainc

    if isinstance(law, UniformDraw):
        return (x - law.low) / (law.high - law.low)
    if isinstance(law, BetaDraw):
        return betainc(law.alpha, law.beta, (x - law.low) / (law.high - law.low))
    if isinstance(law, LognormalDraw):
        ends = None if law.within is None else np.log(np.array(law.within) / law.median) / law.sigma
        return _cut(np.log(x / law.median) / law.sigma, ends)
    assert isinstance(law, NormalDraw)
    ends = None if law.within is None else (np.array(law.within) - law.mean) / law.sd
    return _cut((x - law.mean) / law.sd, ends)


def _cut(z: NDArray, ends: NDArray | None) -> NDArray:
    """The area of the standard normal law below z, of what lies between two ends; on the side where it is small."""
    from scipy.special import ndtr

    if ends is None:
        return ndtr(z)
    low, high = ends
    if low + high > 0.0:
        return 1.0 - _cut(-z, np.array([-high, -low]))
    return (ndtr(z) - ndtr(low)) / (ndtr(high) - ndtr(low))


def _table(ensemble: Any, drawn: Any) -> Check:
    """Whether the table beside the parts says what the spec draws."""
    import pandas as pd

    from procgen.ensemble.revealed import PATHS

    what, fault = "table of parameters", ""
    try:
        found = pd.read_parquet(ensemble.path / PATHS).set_index("path")
    except (OSError, KeyError, ValueError) as error:
        fault = f"{PATHS} cannot be read: {str(error).splitlines()[0]}; render again with --resume (resume=True)"
    else:
        wrong = [name for name in drawn if name not in found or not np.array_equal(found[name], drawn[name])]
        fault = f"{PATHS} is not what the spec draws ({', '.join(wrong)}); it was changed" if wrong else ""
    return Check.fact("", what, PROBE, fault, "every parameter is the one that was drawn")
