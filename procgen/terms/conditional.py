"""What noises with a conditional variance share: where they leave from, and how their past is drawn."""

from __future__ import annotations

import math
from functools import cached_property
from typing import ClassVar

import numpy as np

from procgen.spec.declare import Flag, Parameter, Real, Reals, Record
from procgen.terms.base import Draw, Term, rows, stated
from procgen.terms.burnt import BURN_TILE, burnt
from procgen.terms.rows import each_path, row_in
from procgen.terms.start import decay_lengths, lasting

# What is left of an unknown first variance where recovered shocks begin, as a share. Shocks of few values are told
# apart to 1e-6 of their size, and a first variance may be hundreds of times the next: 1e-7 would be too much.
FORGOTTEN = 1e-9
BURN_LEAST = 4_096  # values of a tile of a burn-in, for few paths
OMEGA = Parameter("omega", "ω", Real(above=0), "the constant in the variance", default=None, unit="series²")
SD = Parameter(
    "sd", "σ", Real(above=0), "unconditional standard deviation, instead of `omega`", default=None, unit="series"
)
INFINITE = Parameter(
    "allow_infinite_variance",
    "",
    Flag(),
    "run it on purpose where it is strictly stationary but has no variance",
    default=False,
)
BEFORE = Parameter(
    "before",
    "",
    Record(
        Parameter("variance", "h", Reals(above=0), "variances before step 0, oldest first", unit="series²"),
        Parameter("shocks", "e", Reals(), "values before step 0, oldest first", unit="series"),
    ),
    "what came before step 0, to leave from a known variance instead of the stationary law",
    default=None,
)


class Conditional(Term):
    """A white noise whose variance follows its own past, from a given past or through a burn-in.

    Subclasses give `burn`, the steps until the variance has forgotten where it began; `rest`, the state it begins
    from then; and `left`, the state that follows from the given past.
    """

    family = "volatility"
    knows = "variance, kurtosis and autocorrelation of squares where they exist; uncorrelated, not independent"
    noise = True
    burns_in = True
    outputs: ClassVar[tuple[str, ...]] = ("variance",)

    def burn(self):
        raise NotImplementedError

    def persistence(self):
        """The number below 1 whose powers `burn` follows, or a row of them; None where it is not one number."""
        return None

    def fades(self):
        """Whether differences of variances become smaller on average."""
        raise NotImplementedError

    def early(self):
        return lasting(lambda: self.burns.max()) if self.fades() else math.inf

    def rest(self):
        raise NotImplementedError

    def left(self):
        raise NotImplementedError

    def as_member(self):
        """None: a past that follows the squares cannot be drawn with linear terms."""
        return None

    def draws(self):
        return (Draw("innovation", self.law),)

    def past(self):
        return None if self.before is None else min(len(self.before["shocks"]), len(self.before["variance"]))

    def reach(self, head):
        return (max(0 if self.before is not None else int(self.burns.max()), head),)

    @cached_property
    def burns(self):
        """`burn` of every path where numbers are rows, and of all paths otherwise."""
        share = self.persistence()
        if np.ndim(share) and np.all(share < 1.0):
            return decay_lengths(share)
        return np.array([term.burn() for term in each_path(self)])

    def begin(self, before):
        if self.before is not None:
            h, past = rows(self.before["variance"]), rows(self.before["shocks"])
            values = {"": past[len(past) - before.head :], "variance": h[len(h) - before.head :]}
            return values, self.left()
        if paths := row_in((self.values, before.heads)):
            lengths = np.maximum(self.burns, before.head if before.heads is None else before.heads)
            rest = {name: state + np.zeros(paths) for name, state in self.rest().items()}
            return burnt(self, lengths, rest, before.head, before.inputs[0])
        return self._burnt_in(before, self.rest())

    def _burnt_in(self, before, state):
        """Values at steps −head … −1 and the state at step 0, from `state` on, tile by tile."""
        (count,) = self.reach(before.head)
        z, kept = before.inputs[0], []
        size = max(BURN_TILE, BURN_LEAST // max(z[:0].shape[1], 1))
        for first in range(len(z) - count, len(z), size):
            values, state = self.recurse((z[first : min(first + size, len(z))],), state, None)
            if first + size > len(z) - before.head:
                kept.append(values)
        if not before.head:
            return None, state
        whole = {name: np.concatenate([part[name] for part in kept]) for name in kept[0]}
        return {name: part[len(part) - before.head :] for name, part in whole.items()}, state


def row_of(state, like):
    """The last values of a state of one row, one a path of a tile."""
    return np.broadcast_to(state[0], like.shape[1:]).copy()


def burn_without_variance(law, factor):
    """Steps until a variance that grows by `factor(z)` has forgotten where it began, where it has no mean.

    E factor^s < 1 for some s < 1 bounds how long the start is felt. The length is rounded up to a power of two, which
    no rounding of the expectation can move.
    """
    rate = min(law.expect(lambda z, s=s: factor(z) ** s) for s in (0.05, 0.1, 0.25, 0.5, 0.75))
    return 2 ** min(16, math.ceil(math.log2(math.log(1e-12) / math.log(rate))))


def left_from(before):
    """The variance and the shock just before step 0 where they are given, for the end of an equation."""
    if before is None:
        return ""
    return f",  {stated('h', before['variance'][-1:])}, {stated('e', before['shocks'][-1:])}"
