"""The theory of a spec: what its series must look like, as numbers or as reasons why there are none."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from functools import cached_property
from typing import Any

import numpy as np

from procgen.theory import fourth, laws
from procgen.theory.covariance import condition
from procgen.theory.expression import Expression
from procgen.theory.sources import PROCESS
from procgen.theory.system import System, system_of
from procgen.theory.unknown import Unknown
from procgen.theory.verdict import Stationarity, judge

WORTH_SAYING = 1e-9 / (100 * np.finfo(float).eps)  # a condition number above this weakens the promised 1e-9

OVERFLOW = "it is too large for double precision at a step that is asked for"


class SeriesTheory:
    """Exact moments of one series. Every unknown number is None, and `reason(name)` says why.

    Steps and lags are int64 arrays of any shape, steps from 0 on; answers have the shape asked for.
    """

    def __init__(self, name: str, expression: Expression):
        self.name = name
        self.expression = expression
        self._reasons: dict[str, str] = {}

    def mean(self, steps) -> np.ndarray | None:
        """E x at steps."""
        return self._try("mean", lambda: _mean(self.expression, steps))

    def variance(self, steps) -> np.ndarray | None:
        """Var x at steps."""
        return self._try("variance", lambda: np.maximum(_cov(self.expression, self.expression, steps, steps), 0.0))

    def covariance(self, t, s) -> np.ndarray | None:
        """Cov(x(t), x(s)); t and s broadcast against each other."""
        return self._try("covariance", lambda: _cov(self.expression, self.expression, t, s))

    def autocovariance(self, lags, from_step: int = 0) -> np.ndarray | None:
        """Cov(x(from_step + lag), x(from_step)) at lags >= 0."""
        later = _steps(lags) + from_step
        return self._try("autocovariance", lambda: _cov(self.expression, self.expression, later, from_step))

    def autocorrelation(self, lags, from_step: int = 0) -> np.ndarray | None:
        """The same, divided by the standard deviations of both steps; None where one of them is 0."""

        def correlation() -> np.ndarray:
            later = _steps(lags) + from_step
            x = self.expression
            spread = _cov(x, x, later, later) * float(_cov(x, x, from_step, from_step))
            if np.any(spread <= 0.0):
                raise Unknown("the variance is 0 at a step that is asked for")
            return _cov(x, x, later, from_step) / np.sqrt(spread)

        return self._try("autocorrelation", correlation)

    @cached_property
    def stationarity(self) -> Stationarity:
        """Verdict and reasons; unpacks as (verdict, reasons)."""
        return judge(self.expression)

    @cached_property
    def gaussian(self) -> bool:
        """Whether the series at any steps is jointly Gaussian."""
        return laws.is_gaussian(self.expression)

    @cached_property
    def discrete(self) -> bool:
        """Whether chance only chooses among few values, as for a flag."""
        sources = self.expression.sources
        return bool(sources) and all(s.kind == PROCESS and s.detail.discrete for s in sources)

    def marginal(self, step: int) -> Any | None:
        """The law at one step as a frozen SciPy distribution."""
        return self._try("marginal", lambda: laws.marginal(self.expression, int(step)))

    @property
    def excess_kurtosis(self) -> float | None:
        """Excess kurtosis, the same at every step; `excess_kurtosis_at` where it changes."""
        return self._try("excess_kurtosis", lambda: fourth.steady_excess_kurtosis(self.expression, self.stationarity))

    def excess_kurtosis_at(self, step: int) -> float | None:
        """Excess kurtosis at one step."""
        return self._try("excess_kurtosis_at", lambda: fourth.excess_kurtosis(self.expression, int(step)))

    def autocovariance_of_squares(self, lags, from_step: int = 0) -> np.ndarray | None:
        """Cov((x - E x)^2 at from_step + lag, the same at from_step) at lags >= 0."""
        later = _steps(lags) + from_step
        return self._try(
            "autocovariance_of_squares",
            lambda: fourth.autocovariance_of_squares(self.expression, later, np.full(later.shape, from_step)),
        )

    @cached_property
    def highest_moment(self) -> float | None:
        """The order below which absolute moments are known to exist (inf: all do); a lower bound where not exact."""
        return self._try("highest_moment", lambda: laws.highest_moment(self.expression))

    def system(self) -> System | None:
        """The state space of a linear series: s(t) = A s(t-1) + B e(t), x(t) = mean(t) + C s(t)."""

        def build() -> System:
            if self.expression.terms:
                raise Unknown("the series is not linear with constant coefficients")
            return system_of(self.expression.space, (self.expression.linear,))

        return self._try("system", build)

    @property
    def condition(self) -> float:
        """Condition number behind the autocovariances: relative errors are about 1e-16 times it."""
        forms = [f for term, _ in self.expression.parts for f in (*term.factors, term.exponent)]
        return max((condition(form) for form in forms), default=1.0)

    def reason(self, name: str) -> str | None:
        """Why the last answer of that name was None; None when it was not."""
        return self._reasons.get(name)

    def as_dict(self, at: Sequence[int], lags: int | Sequence[int] = 40) -> dict[str, Any]:
        """Plain numbers for JSON: moments at the steps `at`, and autocovariances from the first of them on.

        A stationary series is looked at from step 0. Unknown numbers are None, with their reasons beside them.
        """
        steps = np.asarray(at, np.int64)
        span = np.arange(lags + 1) if isinstance(lags, int) else np.asarray(lags, np.int64)
        first = 0 if self.stationarity.covariance_stationary or not len(steps) else int(steps[0])
        out: dict[str, Any] = {
            "stationarity": {"verdict": self.stationarity.verdict, "reasons": list(self.stationarity.reasons)},
            "gaussian": self.gaussian,
            "steps": steps.tolist(),
            "mean": plain(self.mean(steps)),
            "variance": plain(self.variance(steps)),
            "autocovariance": {
                "from_step": first,
                "lags": span.tolist(),
                "values": plain(self.autocovariance(span, first)),
            },
            "autocorrelation": plain(self.autocorrelation(span, first)),
            "excess_kurtosis": self.excess_kurtosis,
        }
        asked = ("mean", "variance", "autocovariance", "autocorrelation", "excess_kurtosis")
        reasons = {name: self._reasons[name] for name in asked if name in self._reasons}
        if reasons:
            out["unknown"] = reasons
        if self.condition > WORTH_SAYING:
            out["condition"] = self.condition
        return out

    def _try(self, name: str, answer: Callable[[], Any]) -> Any:
        try:
            with np.errstate(over="ignore", invalid="ignore", under="ignore"):
                value = answer()
        except Unknown as unknown:
            self._reasons[name] = unknown.reason
            return None
        except ArithmeticError:  # of plain numbers: arrays become infinite
            self._reasons[name] = OVERFLOW
            return None
        if isinstance(value, np.ndarray | np.floating) and not np.isfinite(value).all():
            self._reasons[name] = OVERFLOW
            return None
        self._reasons.pop(name, None)
        return value


class CrossTheory:
    """Exact covariances between two series."""

    def __init__(self, first: SeriesTheory, second: SeriesTheory):
        self.first, self.second = first, second
        self._reason: str | None = None

    def covariance(self, t, s) -> np.ndarray | None:
        """Cov(first(t), second(s)); t and s broadcast against each other; None with `reason` where unknown."""
        try:
            value = _cov(self.first.expression, self.second.expression, t, s)
            self._reason = None if np.isfinite(value).all() else OVERFLOW
        except Unknown as unknown:
            self._reason = unknown.reason
        except ArithmeticError:
            self._reason = OVERFLOW
        return value if self._reason is None else None

    def correlation(self, t, s) -> np.ndarray | None:
        """The same, divided by both standard deviations."""
        value = self.covariance(t, s)
        if value is None:
            return None
        a, b = self.first.variance(t), self.second.variance(s)
        if a is None or b is None or np.any(np.asarray(a) * np.asarray(b) <= 0.0):
            self._reason = self.first.reason("variance") or self.second.reason("variance") or "a variance is 0"
            return None
        return value / np.sqrt(a * b)

    def reason(self, name: str = "covariance") -> str | None:
        """Why the last answer was None."""
        del name
        return self._reason


def _steps(steps) -> np.ndarray:
    steps = np.asarray(steps)
    if steps.size and (steps.dtype.kind not in "iu" or steps.min() < 0):
        raise ValueError(f"expected whole steps from 0 on, got {steps.ravel()[:5].tolist()}")
    return steps.astype(np.int64)


def _mean(x: Expression, steps) -> np.ndarray:
    with np.errstate(over="ignore", invalid="ignore", under="ignore"):
        return x.mean(_steps(steps))


def _cov(x: Expression, y: Expression, t, s) -> np.ndarray:
    t, s = (steps.copy() for steps in np.broadcast_arrays(_steps(t), _steps(s)))
    with np.errstate(over="ignore", invalid="ignore", under="ignore"):
        return x.covariance(y, t, s)


def plain(values: np.ndarray | None) -> list | None:
    return None if values is None else np.asarray(values, float).tolist()
