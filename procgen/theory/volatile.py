"""Conditional variances on the axis: constructors of white shocks whose spread moves."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from procgen.theory import known
from procgen.theory.expression import Expression, opaque
from procgen.theory.garch import Garch
from procgen.theory.known import Known
from procgen.theory.linear import At, Base, Linear
from procgen.theory.logvariance import Egarch, Stochastic
from procgen.theory.processes import Process
from procgen.theory.sources import GARCH, SQUARES, Source, Space
from procgen.theory.unknown import Unknown
from procgen.theory.verdict import LEAVES_VARIANCE
from procgen.theory.volatility import ConditionalVariance, Gjr, Volatility


class Volatile:
    """The part of an Axis that makes shocks with a moving variance."""

    space: Space

    @property
    def name(self) -> str:
        """The term at work, as reasons name it."""
        return self.space.name

    def _noise(self, source: Source, started: bool = False) -> Expression:
        raise NotImplementedError

    def _base(self, source: Source, phi: tuple[float, ...], started: bool) -> Base:
        raise NotImplementedError

    def source(self, key: str, law: Any, sd: float) -> Expression:
        raise NotImplementedError

    def process(self, process: Process, mean: Known | None = None) -> Expression:
        raise NotImplementedError

    def garch(
        self,
        key: str,
        law: Any,
        omega: float,
        alpha: Sequence[float],
        beta: Sequence[float] = (),
        before_variance: Sequence[float] | None = None,
        before_shocks: Sequence[float] | None = None,
    ) -> Expression:
        """White shocks with conditional variance; the `before` ones are oldest first, without shocks e^2 is h."""
        squares: tuple[float, ...] = ()
        if before_variance is not None:
            squares = tuple(e * e for e in before_shocks or ()) or tuple(before_variance)
        process = Garch(
            law, float(omega), tuple(alpha), tuple(beta),
            tuple(before_variance) if before_variance is not None else None, squares,
        )  # fmt: skip
        path = process.variance_path if process.started else None
        settles = process.settles if process.started else 0.0
        source = self.space.add(Source(key, GARCH, process.variance, law, path, settles, detail=process))
        noise = self._noise(source, started=process.started)
        return Expression(
            self.space, self._past(before_shocks), noise.linear, outputs={"variance": lambda: self._variance(source)}
        )

    def gjr_garch(
        self,
        key: str,
        law: Any,
        omega: float,
        alpha: float,
        gamma: float,
        beta: float,
        first_variance: float | None = None,
        before: Sequence[float] | None = None,
    ) -> Expression:
        """White shocks, h(t) = omega + (alpha + gamma I(e(t-1) < 0)) e(t-1)^2 + beta h(t-1), or from a given h(0)."""
        return self._volatile(key, Gjr(law, omega, alpha, gamma, beta, first_variance), before)

    def egarch(
        self,
        key: str,
        law: Any,
        mean_log: float,
        beta: float,
        alpha: float,
        gamma: float,
        centre: float,
        first_log: float | None = None,
        before: Sequence[float] | None = None,
    ) -> Expression:
        """White shocks whose log variance has the shocks alpha (abs(z) - centre) + gamma z; from a given one or not."""
        return self._volatile(key, Egarch(law, mean_log, beta, alpha, gamma, centre, first_log), before)

    def stochastic_volatility(
        self, key: str, law: Any, mean_log: float, phi: float, eta: float, rho: float = 0.0
    ) -> Expression:
        """White shocks whose log variance is a Gaussian autoregression, its shocks correlated by rho with z."""
        return self._volatile(key, Stochastic(law, mean_log, phi, eta, rho), None)

    def _past(self, values: Sequence[float] | None) -> Known:
        """0 from step 0 on, the given values (oldest first) before it, not defined further back."""
        if values is None:
            return known.constant(0.0)
        past = np.array([np.nan, *values, 0.0])
        return known.whole(
            ("past", self.name, tuple(values)),
            lambda steps: past[np.clip(np.asarray(steps) + len(past) - 1, 0, len(past) - 1)],
            note=f"{self.name} {LEAVES_VARIANCE}",
            settles=True,
        )

    def _volatile(self, key: str, process: Volatility, before: Sequence[float] | None) -> Expression:
        path, settles = (process.variance_path, process.settles) if process.started else (None, 0.0)
        try:
            variance = process.variance
        except Unknown as unknown:  # its shocks have the mean 0 whatever their variance is
            return opaque(self.space, (self.source(key, process.law, 1.0),), f"{key}: {unknown}", self._past(before))
        source = self.space.add(Source(key, GARCH, variance, process.law, path, settles, detail=process))
        noise = self._noise(source, started=process.started)
        outputs = {"variance": lambda: self._conditional(source, noise)}
        return Expression(self.space, self._past(before), noise.linear, outputs=outputs)

    def _conditional(self, source: Source, noise: Expression) -> Expression:
        process = source.detail
        if process.started:
            return self._started_variance(source, noise)
        if not np.isfinite(process.variance):
            return opaque(self.space, (noise,), f"infinite mean of the variance of {source.key}")
        return self.process(ConditionalVariance(source, noise), known.constant(process.variance))

    def _variance(self, source: Source) -> Expression:
        process: Garch = source.detail
        if process.started:
            ingredient = Expression(self.space, known.constant(0.0), Linear({At(Base(source, (), True), 0): 1.0}))
            return self._started_variance(source, ingredient)
        squares = squares_of(self.space, source)
        base = self._base(squares, process.persistence, False)
        form = Linear({At(base, delay): c for delay, c in process.variance_weights.items()})
        return Expression(self.space, known.constant(process.variance), form)

    def _started_variance(self, source: Source, noise: Expression) -> Expression:
        key, process = source.key, source.detail
        path = known.whole(
            ("variance", key), process.variance_path, note=f"variance of {key}", settles=process.total < 1.0
        )
        return opaque(self.space, (noise,), f"the variance of {key}, which leaves from a given one", path)


def squares_of(space: Space, source: Source) -> Source:
    """The white source v = e^2 - h behind the squares of a garch; one object each."""
    key = f"{source.key} squared"
    if key not in space.sources:
        space.add(Source(key, SQUARES, source.detail.shock_variance, owner=source, detail=source.detail))
    return space.sources[key]
