"""Functions of the value at the same step: bends, bounds and curves, with moments where the body is Gaussian.

Their laws at a step follow from that of the body, whatever it is.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from functools import partial
from typing import Any

import numpy as np

from procgen.theory import known
from procgen.theory.expression import Expression, chosen, opaque, product
from procgen.theory.joint import larger_law, product_law
from procgen.theory.known import Known
from procgen.theory.lattice import Rounded
from procgen.theory.laws import LOST, highest_moment, is_gaussian, marginal
from procgen.theory.lumps import Bounded, Folded, Mapped, powered
from procgen.theory.processes import Curved, Hinged, Process, mean_at
from procgen.theory.sources import Space
from procgen.theory.unknown import Unknown
from procgen.theory.verdict import judge


class Bending:
    """The part of an Axis where values are bent one by one."""

    space: Space
    _processes: list[Any]

    @property
    def name(self) -> str:
        """The term at work, as reasons name it."""
        return self.space.name

    def level(self, value: float) -> Expression:
        raise NotImplementedError

    def process(self, process: Process, mean: Known | None = None) -> Expression:
        raise NotImplementedError

    def opaque(self, ingredients: Sequence[Expression], reason: str) -> Expression:
        raise NotImplementedError

    def hinge(self, x: Expression) -> Expression:
        """max(x, 0): closed where x is known or Gaussian.

        What is mostly above 0 is x + max(-x, 0), whose second part is small: differences of such parts keep digits.
        """
        return self.lawful(self._hinged(x), x, lambda law: Bounded(law, low=0.0))

    def lawful(self, made: Expression, x: Expression, law: Callable[[Any], Any]) -> Expression:
        """What is made of the values of x at the same step alone, with its law from that of x."""
        return replace(made, law=lambda step: law(marginal(x, step))) if x.sources else made

    def larger(self, x: Expression, y: Expression, sign: float) -> Expression:
        """max(x, y) = y + (x − y)₊, or with a negative sign min(x, y) = y − (y − x)₊."""
        made = y + self._hinged((x + y * -1.0) * sign) * sign
        return replace(made, law=lambda step: larger_law(x, y, sign, step)) if made.sources else made

    def chosen(self, branches: Sequence[tuple[Expression | None, Expression]]) -> Expression:
        """What is each of the branches where its flag is 1, and the first, whose flag is None, elsewhere."""
        return chosen(branches)

    def power(self, x: Expression, n: int) -> Expression:
        """x to the whole power n."""
        made = product(x.space, [x] * n)

        def law(step: int) -> Any:
            try:
                return marginal(made, step)
            except Unknown:
                return powered(marginal(x, step), n)

        return replace(made, law=law) if x.sources else made

    def product(self, expressions: Sequence[Expression]) -> Expression:
        """The product of series."""
        made = product(self.space, expressions)

        def law(step: int) -> Any:
            try:
                return marginal(made, step)
            except Unknown:
                return product_law(expressions, step)

        return replace(made, law=law) if made.sources and made.law is None else made

    def bounded(self, x: Expression, low: float | None, high: float | None) -> Expression:
        """x held between bounds: min(max(x, l), h) = l + (x − l)₊ − (x − h)₊, and x − (x − h)₊ where there is no l."""
        held = x if low is None else self.level(low) + self._hinged(x + self.level(-low))
        if high is not None:
            held = held + self._hinged(x + self.level(-high)) * -1.0
        ends = -np.inf if low is None else low, np.inf if high is None else high
        return self.lawful(held, x, lambda law: Bounded(law, *ends))

    def folded(self, x: Expression) -> Expression:
        """The size of x: |x| = 2 (x)₊ − x."""
        return self.lawful(self._hinged(x) * 2.0 + x * -1.0, x, Folded)

    def _hinged(self, x: Expression) -> Expression:
        level = x.mean_path.value
        if level is not None and level > 0.0 and x.sources and not x.terms and is_gaussian(x):
            return x + self._bent(x * -1.0, _positive, partial(Hinged, self.name))
        return self._bent(x, _positive, partial(Hinged, self.name))

    def curved(self, x: Expression, f: Callable[[np.ndarray], np.ndarray]) -> Expression:
        """f(x) for a smooth f of slow growth: by its Hermite series where x is Gaussian."""
        return self._bent(x, f, lambda body: Curved(self.name, body, f))

    def squeezed(
        self,
        x: Expression,
        f: Callable[[np.ndarray], np.ndarray],
        low: float,
        high: float,
        told: tuple[float, float] = (-np.inf, np.inf),
    ) -> Expression:
        """f(x) for the S-curve f from one level to another, whose digits are lost where x is not within `told`."""

        def law(of: Any) -> Mapped:
            if float(of.cdf(told[0]) + of.sf(told[1])) > LOST:
                raise Unknown(f"values of {name} are nearer to its levels than double precision tells apart")

            def rise(y: np.ndarray) -> np.ndarray:
                return (high - low) / ((y - low) * (high - y))

            return Mapped(of, f, lambda y: np.log((y - low) / (high - y)), rise, (low, high))

        name = self.name
        return self.lawful(self.curved(x, f), x, law)

    def log_odds(self, x: Expression, f: Callable[[np.ndarray], np.ndarray], low: float, high: float) -> Expression:
        """f(x) for the f that undoes the S-curve between two levels."""
        if not x.sources:
            return self._of_known(x, f)
        made = self.opaque((x,), f"{self.name}: log odds of a random body have no closed moments")

        def law(of: Any) -> Mapped:
            from scipy.special import expit

            def rise(y: np.ndarray) -> np.ndarray:
                return (high - low) * expit(y) * expit(-y)

            return Mapped(of, f, lambda y: low + (high - low) * expit(y), rise)

        return self.lawful(made, x, law)

    def rounded(
        self, x: Expression, f: Callable[[np.ndarray], np.ndarray], to: float, shift: float = 0.0
    ) -> Expression:
        """f(x), which is x + `shift` multiples of `to`, rounded to multiples of it: closed where x is Gaussian."""

        def process(body: Expression) -> Rounded:
            return Rounded(self.name, body + self.level(shift * to), to, lambda steps: f(mean_at(body, steps)))

        return self._bent(x, f, process)

    def _of_known(self, x: Expression, f: Callable[[np.ndarray], np.ndarray]) -> Expression:
        if x.mean_path.value is not None:
            return Expression(self.space, known.constant(float(f(np.array(x.mean_path.value)))))
        path, note = x.mean_path, known.said(x.mean_path.notes)
        whole = known.whole(("of", self.name, path.key), lambda t: f(path.as_drawn(t)), path.periods, note)
        return Expression(self.space, whole)

    def _bent(
        self, x: Expression, f: Callable[[np.ndarray], np.ndarray], made: Callable[[Expression], Any]
    ) -> Expression:
        """f(x), by the process that is made of a Gaussian body; of a choice, of each of its branches."""
        if not x.sources:
            return self._of_known(x, f)
        if not is_gaussian(x):
            if x.branches is not None:
                return chosen([(flag, self._bent(branch, f, made)) for flag, branch in x.branches()])
            why = f"{self.name}: moments of a bend are not worked out for a body that is not Gaussian"
            return opaque(self.space, (x,), why, highest=_order(x))  # no bend grows faster than its body
        process, steady = made(x), judge(x).covariance_stationary
        if steady and x.mean_path.value is not None:
            return self.process(process, known.constant(float(process.mean(np.zeros(1, np.int64))[0])))
        periods, note = x.mean_path.periods if steady else None, f"the mean moves in {self.name}"
        key = ("mean", self.name, len(self._processes))
        return self.process(process, known.whole(key, process.mean, periods, note))


def _order(x: Expression) -> float | None:
    try:
        return highest_moment(x)
    except Unknown:
        return None


def _positive(v: np.ndarray) -> np.ndarray:
    return np.maximum(v, 0.0)
