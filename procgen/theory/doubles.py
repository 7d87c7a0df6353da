"""How far apart neighbouring values are in double precision, where that shows beside what chance does to them.

A double has 53 bits: near 1e12 two of them lie 1.2e-4 apart. What is added to such a level is rounded to that, and
stays so where the level is taken away again.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from procgen.spec.records import dataclass

LEAST, MOST = 1e-30, 1e30  # standard deviations whose fourth powers, and those of their statistics, doubles hold
SEEN = 1e-6  # cell over the standard deviation of moves up to which nothing shows in any number of values
ROUGH = 0.02  # the same up to which roundings that add up, or differ by step, leave moments as they are
COARSE = 0.5  # the same of roundings that do neither
_SURE = 1e-12  # the same, of the standard deviation of the values: moves are no millionth of it
_NOTHING = 1e-12  # share of the largest standard deviation: what is less is left by rounding
_FAR = 3.0  # standard deviations
_LOST = 1e-9  # share of a variance below which a difference of covariances is rounding
_QUARTERS = 1.3489795003921634  # between the quartiles of a normal law, in standard deviations
_PASSING = frozenset({"sum", "use", "lag", "difference", "integrate", ""})  # they keep the cells of what they are given
_EXPONENTIALS = frozenset({"exp", "geometric_brownian_motion", "merton"})
_KEEPING = frozenset({"integrate", "lag", "difference"})  # their values are made of earlier ones
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
    cells, adds_up = _cell(theory, theory.graph.series[name], at, {})
    if not np.any(cells > _SURE * np.where(sd > 0.0, sd, np.inf)):
        return None
    all_moves = _moves(x, at, sd)
    worst = int(np.argmax(cells / all_moves))
    cell, moves = float(cells[worst]), float(all_moves[worst])
    if cell <= SEEN * moves:
        return None
    lattice = getattr(x.marginal(int(at[-1])), "spacing", 0.0)
    if cell <= lattice or (x.discrete and cell <= ROUGH * moves):
        return None  # whole numbers are not rounded, and few values stay apart
    inner = np.maximum(np.abs(mean) - _FAR * sd, 0.0)
    least, level = float(np.spacing(inner.min())), float(np.max(np.abs(mean) + sd))
    return Rounding(cell, least, level, moves, adds_up or x.discrete)


def beyond_doubles(theory: Any, name: str, steps: int) -> str:
    """Why sums of fourth powers of a series' values are no numbers; empty where they are, or logarithms are judged."""
    x, at = theory[name], _steps_of(steps)
    if theory.graph is not None and theory.graph.series[name].term.kind in _EXPONENTIALS:
        return ""
    law = x.marginal(int(at[-1]))
    sizes = _sizes(x, at) if law is None else _quartiles(law, at)  # a long tail is no large unit
    moving = np.zeros(0) if sizes is None else sizes[1][sizes[1] > 0.0]
    spread = float(moving.max(initial=0.0))
    if not np.isfinite(spread) or spread == 0.0 or LEAST <= spread <= MOST:
        return ""
    return f"its standard deviation of {spread:.3g} has powers that no double holds: choose another unit".replace(
        "e-", "e−"
    )


def _steps_of(steps: int) -> np.ndarray:
    return np.unique(np.array([0, 1, 2, steps // 4, steps // 2, steps // 2 + 1, 3 * steps // 4, steps - 1]) % steps)


def _sizes(x: Any, at: np.ndarray) -> tuple[np.ndarray, np.ndarray] | None:
    """Means and standard deviations, or medians and what quartiles say where there are none; None where not known."""
    mean, variance = x.mean(at), x.variance(at)
    if mean is not None and variance is not None:
        return mean, np.sqrt(variance)
    law = x.marginal(int(at[-1]))
    return None if law is None else _quartiles(law, at)


def _quartiles(law: Any, at: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    low, middle, high = (np.full(len(at), float(law.ppf(p))) for p in (0.25, 0.5, 0.75))
    return middle, (high - low) / _QUARTERS


def _cell(theory: Any, node: Any, at: np.ndarray, known: dict[int, Any]) -> tuple[np.ndarray, bool]:
    """The largest distance of neighbouring values on the way to a node by step, and whether its roundings add up."""
    if id(node) not in known:
        known[id(node)] = _cell_of(theory, node, at, known) if hasattr(node, "term") else (np.zeros(len(at)), False)
    return known[id(node)]


def _cell_of(theory: Any, node: Any, at: np.ndarray, known: dict[int, Any]) -> tuple[np.ndarray, bool]:
    from procgen.theory.series import SeriesTheory

    written, kind = theory.written.get(id(node)), node.term.kind
    sizes = None if written is None else _sizes(SeriesTheory(node.key, written), at)
    size = np.zeros(len(at)) if sizes is None else np.abs(sizes[0]) + _FAR * sizes[1]
    own = np.where(np.isfinite(size), np.spacing(np.where(np.isfinite(size), size, 0.0)), 0.0)
    factor = size if kind == "exp" else abs(float(getattr(node.term, "factor", 1.0)))
    passing = kind in _PASSING or kind == "exp"
    given = [_cell(theory, part, at, known) for part in node.inputs] if passing else []
    passed = factor * np.max([np.zeros(len(at)), *(cell for cell, _ in given)], axis=0)
    adds_up = any(adds for cell, adds in given if np.any(factor * cell >= own))
    if np.any(own >= passed) and kind not in _ADDING:
        adds_up = written is None or bool(written.sources)
    cell = np.maximum(own, passed)
    return (np.maximum.accumulate(cell) if kind in _KEEPING else cell), adds_up


def _moves(x: Any, at: np.ndarray, sd: np.ndarray) -> np.ndarray:
    """The least standard deviation of values, and of their first and second differences, at each step; inf for none."""
    found = np.where(sd > _NOTHING * sd.max(), sd * sd, np.inf)
    for i, t in enumerate(at):
        for weights in ((1.0, -1.0), (1.0, -2.0, 1.0)) if t >= 2 else ():
            found[i] = min([found[i], *_difference(x.covariance, int(t), np.array(weights))])
    return np.sqrt(found)


def _difference(covariance: Callable[..., Any], t: int, weights: np.ndarray) -> list[float]:
    """The variance of Σ weights[i] x[t − i], where it is known and more than rounding."""
    at = t - np.arange(len(weights))
    matrix = covariance(at[:, None], at[None, :])
    if matrix is None:
        return []
    variance = float(weights @ matrix @ weights)
    return [variance] if variance > _LOST * float(np.max(np.diag(matrix))) else []
