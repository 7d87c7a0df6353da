"""What was done to values before they came here: a cause in plain words, told where something departs already.

None of this is a departure by itself, so that no true table is accused by it.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import grids
from procgen.checks.verdict import Check
from procgen.checks.words import many, number

CAUSE = "what was done to the values"
_EXACT = 0.02  # standard errors within which a mean or spread is no accident; true ones are 1 time in 60
_FEWEST = 5  # paths of which each must be so
_MOST = 0.9  # share of values that must be rounded
_FINEST = 1e-4  # decimals that are told: tables are often written with more of them
_FINE = 1e-4  # the same of other grids, in standard deviations
_OVERLAP = 4  # equal values that make windows overlap


def causes(name: str, x: NDArray, plan: Any, declared: int | None) -> Iterator[Check]:
    """The first of the causes that the values (paths, steps) of a series show.

    plan: its SeriesPlan. declared: its decimals.
    """
    looked = (
        lambda: _overlapping(x),
        lambda: _standardised(x, plan),
        lambda: _phases(x, plan),
        lambda: _rounded(x, plan, declared),
    )
    for look in looked:
        if fault := look():
            yield Check.fact(name, CAUSE, "all steps", fault)
            return


def _overlapping(x: NDArray) -> str:
    """Paths that are windows of one series, each some steps after the one before."""
    if len(x) < 2 or x.shape[1] <= _OVERLAP:
        return ""
    for shift in (np.flatnonzero(x[0, 1:-_OVERLAP] == x[1, 0]) + 1).tolist():
        if np.array_equal(x[:-1, shift:], x[1:, :-shift]) and np.ptp(x[0, shift:]) > 0:
            steps = many(shift, "step")
            return f"paths are overlapping windows of one series: each begins {steps} after the one before"
    return ""


def _standardised(x: NDArray, plan: Any) -> str:
    """Means and spreads that are 0 and 1 as chance leaves none: of each path, of each step, or of all values."""
    for axis, whose in ((1, "path"), (0, "step")):
        if x.shape[axis] > 1 and x.shape[1 - axis] >= _FEWEST:
            mean, sd = x.mean(axis=axis), x.std(axis=axis)
            near = _EXACT / math.sqrt(x.shape[axis])
            alike = bool((np.abs(mean) <= near * sd).all())
            if alike and bool((_from_one(sd, x.shape[axis]) <= near).all()):
                return f"each {whose} has mean 0 and standard deviation 1, as if standardised by its own"
            if alike and bool((sd > 0).all()):
                return f"each {whose} has mean 0, as if its own mean had been taken away"
    near, mean, sd = _EXACT / math.sqrt(x.size), float(x.mean()), float(x.std())
    if x.size > 1 and abs(mean) <= near and float(_from_one(np.array(sd), x.size)) <= near:
        wide = float(np.sqrt(np.mean(plan.variance) + np.var(plan.mean)))
        stated = f"; the spec states about {number(float(np.mean(plan.mean)), 3)} and {number(wide, 3)}"
        return f"all values together have mean 0 and standard deviation 1, as if standardised{stated}"
    return ""


def _from_one(sd: NDArray, n: int) -> NDArray:
    """How far a standard deviation is from 1, divided by n or by n − 1."""
    return np.minimum(np.abs(sd - 1.0), np.abs(sd * math.sqrt(n / (n - 1)) - 1.0))


def _phases(x: NDArray, plan: Any) -> str:
    """A season that is in each path, and at a time of its own in each, so that the mean of paths has none."""
    period = plan.period
    turns = x.shape[1] // period if period else 0
    stated = plan.theory.mean(np.arange(x.shape[1])) if turns > 1 and len(x) >= _FEWEST else None
    if stated is None:
        return ""
    at = np.arange(turns * period)
    waves = np.exp(-2j * np.pi * np.outer(at, turns + np.arange(-1, 2)) / len(at)) * (2.0 / len(at))
    below, own, above = (x[:, : len(at)] @ waves).T
    power, beside = np.abs(own) ** 2, 0.5 * (np.abs(below) ** 2 + np.abs(above) ** 2)
    wanted = abs(stated[: len(at)] @ waves[:, 1]) ** 2
    excess = float(np.mean(power - beside))
    error = 4.0 * float(np.mean(beside)) / math.sqrt(len(x))
    if excess > max(0.5 * wanted, error) and abs(own.mean()) ** 2 < 0.3 * wanted:
        return f"the season of {period} steps is in each path at a time of its own: its phase is stated, and not drawn"
    return ""


def _rounded(x: NDArray, plan: Any, declared: int | None) -> str:
    """Values on a grid of decimals that is not declared, or coarser than that."""
    from procgen.checks.special import lumpy

    if lumpy(plan.theory) or not plan.smooth:
        return ""
    found, count = grids.spacing(x.ravel())
    if count <= _MOST * x.size:
        return ""
    grid = float(found)
    coarse = (_FINEST if grids.decimals(grid) is not None else _FINE * float(x.std())) * (1.0 - 1e-6)
    if grid < max(coarse, 0.0 if declared is None else (1.0 + 1e-6) * 10.0**-declared):
        return ""
    return grids.said(grid, declared)
