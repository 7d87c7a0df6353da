"""How far apart neighbouring values are in double precision, where that shows beside what chance does to them.

A double has 53 bits: near 1e12 two of them lie 1.2e-4 apart. What is added to such a level is rounded to that, and
stays so where the level is taken away again.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

SEEN = 1e-6  # cell over the standard deviation of moves up to which nothing shows in any number of values
ROUGH = 0.02  # the same up to which roundings that add up, or differ by step, leave moments as they are
COARSE = 0.5  # the same of roundings that do neither
_SURE = 1e-12  # the same, of the standard deviation of the values: moves are no millionth of it
_FAR = 3.0  # standard deviations
_LOST = 1e-9  # share of a variance below which a difference of covariances is rounding
_QUARTERS = 1.3489795003921634  # between the quartiles of a normal law, in standard deviations
_PASSING = frozenset({"sum", "use", "lag", "difference", "integrate", ""})  # they keep the cells of what they are given
_ADDING = frozenset({"sum", "use", "lag", "difference", "exp", ""})  # each value of theirs is rounded by itself


@dataclass(frozen=True)
class Rounding:
    """What double precision does to a series.

    cell : the distance of neighbouring values where it is largest; least: where it is smallest
    level : the size of values there
    moves : the least standard deviation of its values, and of their first and second differences
    adds_up : whether a term that goes on from its own values rounds them at each step, or there are few values
    """

    cell: float
    least: float
    level: float
    moves: float
    adds_up: bool = False

    @property
    def share(self) -> float:
        return self.cell / self.moves

    @property
    def hides(self) -> bool:
        """Whether moments are not those of the spec, in a way that is not known."""
        return self.share > (ROUGH if self.adds_up or self.least < self.cell else COARSE)

    def __str__(self) -> str:
        return (
            f"near {self.level:.6g} double precision has values {self.cell:.3g} apart, which is {self.share:.3g} times "
            f"the standard deviation {self.moves:.3g} that chance moves them by; take the level away, or choose a "
            "larger unit"
        ).replace("e-", "e−")


def rounding_of(theory: Any, name: str, steps: int) -> Rounding | None:
    """What double precision does to a series of a spec; None where it does nothing that shows."""
    x, at = theory[name], _steps_of(steps)
    if theory.graph is None or not x.random:
        return None
    sizes = _sizes(x, at)
    if sizes is None:
        return None
    mean, sd = sizes
    cell, adds_up = _cell(theory, theory.graph.series[name], at, {})
    moving = sd[sd > 0.0]
    if not moving.size or cell <= _SURE * float(moving.min()):
        return None
    moves = _moves(x, float(moving.min()), steps)
    if cell <= SEEN * moves:
        return None
    lattice = getattr(x.marginal(int(at[-1])), "spacing", 0.0)
    if cell <= lattice or (x.discrete and cell <= ROUGH * moves):
        return None  # whole numbers are not rounded, and few values stay apart
    inner = np.maximum(np.abs(mean) - _FAR * sd, 0.0)
    least, level = float(np.spacing(inner.min())), float(np.max(np.abs(mean) + sd))
    return Rounding(cell, least, level, moves, adds_up or x.discrete)


def _steps_of(steps: int) -> np.ndarray:
    return np.unique(np.array([0, 1, 2, steps // 4, steps // 2, steps // 2 + 1, 3 * steps // 4, steps - 1]) % steps)


def _sizes(x: Any, at: np.ndarray) -> tuple[np.ndarray, np.ndarray] | None:
    """Means and standard deviations, or medians and what quartiles say where there are none; None where not known."""
    mean, variance = x.mean(at), x.variance(at)
    if mean is not None and variance is not None:
        return mean, np.sqrt(variance)
    law = x.marginal(int(at[-1]))
    if law is None:
        return None
    low, middle, high = (np.full(len(at), float(law.ppf(p))) for p in (0.25, 0.5, 0.75))
    return middle, (high - low) / _QUARTERS


def _cell(theory: Any, node: Any, at: np.ndarray, known: dict[int, Any]) -> tuple[float, bool]:
    """The largest distance of neighbouring values on the way to a node, and whether its roundings add up."""
    if id(node) not in known:
        known[id(node)] = _cell_of(theory, node, at, known) if hasattr(node, "term") else (0.0, False)
    return known[id(node)]


def _cell_of(theory: Any, node: Any, at: np.ndarray, known: dict[int, Any]) -> tuple[float, bool]:
    from procgen.theory.series import SeriesTheory

    written, kind = theory.written.get(id(node)), node.term.kind
    sizes = None if written is None else _sizes(SeriesTheory(node.key, written), at)
    size = 0.0 if sizes is None else float(np.max(np.abs(sizes[0]) + _FAR * sizes[1]))
    own = float(np.spacing(size)) if np.isfinite(size) else 0.0
    factor = size if kind == "exp" else abs(float(getattr(node.term, "factor", 1.0)))
    passing = kind in _PASSING or kind == "exp"
    given = [_cell(theory, part, at, known) for part in node.inputs] if passing else []
    passed = factor * max((cell for cell, _ in given), default=0.0)
    adds_up = any(adds for cell, adds in given if factor * cell >= own)
    if own >= passed and kind not in _ADDING:
        adds_up = written is None or bool(written.sources)
    return max(own, passed), adds_up


def _moves(x: Any, sd: float, steps: int) -> float:
    """The least standard deviation of values, and of their first and second differences early and later on."""
    found = [sd * sd]
    for t in {2, min(50, steps - 1)} if steps > 2 else ():
        for weights in ((1.0, -1.0), (1.0, -2.0, 1.0)):
            found += _difference(x.covariance, t, np.array(weights))
    return float(np.sqrt(min(found)))


def _difference(covariance: Callable[..., Any], t: int, weights: np.ndarray) -> list[float]:
    """The variance of Σ weights[i] x[t − i], where it is known and more than rounding."""
    at = t - np.arange(len(weights))
    matrix = covariance(at[:, None], at[None, :])
    if matrix is None:
        return []
    variance = float(weights @ matrix @ weights)
    return [variance] if variance > _LOST * float(np.max(np.diag(matrix))) else []
