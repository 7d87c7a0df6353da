"""The path that stands apart: one among many whose level, spread or memory no sum over paths would show.

Under the theory the normal scores of a path's shocks are independent. Hence the sum of n of them over sqrt(n) is
normal, the sum of their squares is a chi-square, and their products with the score before, over that sum of squares,
have a law that the size of the shocks does not enter: that a ratio of quadratic forms in normals is above r is that
one form with eigenvalues cos(pi j/(n + 1)) − r is above 0 (von Neumann 1941; Imhof 1961). Of N paths the
smallest p has the law 1 − (1 − p)^N, which bounds it, too, where paths are held against their mean (Sidak 1967).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator

import numpy as np
from numpy.typing import NDArray

from procgen.checks import judge, tails
from procgen.checks.judge import Finding
from procgen.checks.power import Z_POWER
from procgen.checks.verdict import Check

_EXACT_BELOW = 2_000  # shocks of a path whose products are judged by their exact law; of more they are normal

End = list[float]  # standardised, minus path, shocks of the path: a list, as JSON has it
Ends = dict[str, list[End]]  # what -> its lowest and its highest


def spreads(squares: NDArray, n: NDArray) -> NDArray:
    """Sums of n squared normal scores as normal scores of their chi-square law."""
    from scipy.special import chdtr, chdtrc, ndtri

    low = squares < n
    area = np.empty(len(squares))
    area[low], area[~low] = chdtr(n[low], squares[low]), chdtrc(n[~low], squares[~low])
    z = ndtri(np.maximum(area, 1e-300))
    return np.where(low, z, -z)


def ends_of(level: NDArray, spread: NDArray, memory: NDArray, n: NDArray, first_path: int) -> Ends:
    """The ends of standardised levels, spreads, and slopes on the step before, of paths with n shocks each."""
    paths, found = np.flatnonzero(n), {}
    for what, z, least in (("level", level, 1), ("spread", spread, 1), ("memory", memory, 2)):
        mine = paths[n[paths] >= least]
        at = (int(mine[np.argmin(z[mine])]), int(mine[np.argmax(z[mine])])) if mine.size else ()
        found[what] = [[float(z[path]), -first_path - path, int(n[path])] for path in at]
    return found


def merged(ours: Ends, theirs: Ends) -> Ends:
    """The ends of all; of equal ones that of the first path."""
    both = {what: [*ours.get(what, ()), *theirs.get(what, ())] for what in {**ours, **theirs}}
    return {
        what: [min(ends, key=lambda end: (end[0], -end[1])), max(ends, key=lambda end: end[:2])] if ends else []
        for what, ends in both.items()
    }


def checks(series: str, ends: Ends, sums: NDArray, pooled: dict[str, float]) -> Iterator[Check]:
    """The path farthest from the others in level and spread, and farthest from no memory.

    `sums`: number of paths, then sums of level², spread², level, spread. `pooled`: log p of the sum over paths.
    """
    paths = int(sums[0])
    means = {"level": sums[3] / paths, "spread": sums[4] / paths, "memory": 0.0}
    for what, kind in (("level", "level"), ("spread", "spread"), ("memory", "memory")):
        if not ends.get(what):
            continue
        share = 1.0 if what == "memory" else 1.0 - 1.0 / paths  # of the variance, beside the mean of all
        found = [((z - means[what]) / math.sqrt(share), -int(path), int(n)) for z, path, n in ends[what]]
        found = [one for one in found if math.isfinite(one[0])]  # a path that is 0 throughout has no slope
        if not found:
            continue
        z, path, n = max(found, key=lambda one: abs(one[0]))
        log_p = judge.of_many(_memory(z, n) if what == "memory" else tails.normal(z), paths)
        # A wider path has a wider law of its spread: on the cube root's scale (Wilson & Hilferty 1931) in proportion.
        wider = 1.0 / (1.0 - Z_POWER * math.sqrt(2.0 / (9.0 * n))) if what == "spread" else 1.0
        finding = Finding(0.0, z, 1.0, log_p, _reach(paths, wider))
        if what != "memory" and log_p > 2.0 * pooled[what]:  # not of one path alone
            kind = {"level": "memory", "spread": "clustering"}[what]
        yield Check.of(series, f"shocks: {what} by path", f"worst: path {path}", kind, finding)


def _reach(paths: int, wider: float) -> Callable[[float], float]:
    return lambda level: wider * judge.reach_of_worst(level, paths)


def _memory(z: float, n: int) -> float:
    """Log p of a slope on the step before, times sqrt(n + 2)."""
    if n > _EXACT_BELOW:
        return tails.normal(z)
    weights = np.cos(np.pi * np.arange(1, n + 1) / (n + 1)) - abs(z) / math.sqrt(n + 2)
    upper, _ = tails.weighted_chi_squares(0.0, weights, np.ones(n))
    return min(0.0, math.log(2.0) + upper)
