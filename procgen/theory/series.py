"""The theory of a spec: what its series must look like, as numbers or as reasons why there are none."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from functools import cached_property
from typing import Any

import numpy as np

from procgen.theory import fourth, horizon, laws, memory, spectrum
from procgen.theory.covariance import condition
from procgen.theory.expression import Expression
from procgen.theory.horizon import Forecast
from procgen.theory.sources import PROCESS
from procgen.theory.system import System, system_of
from procgen.theory.unknown import Unknown
from procgen.theory.verdict import INFINITE, Stationarity, judge

WORTH_SAYING = 1e-9 / (100 * np.finfo(float).eps)  # a condition number above this weakens the promised 1e-9

FREQUENCIES = (0.0, 0.1, 0.2, 0.3, 0.4, 0.5)  # cycles a step
HORIZONS = (1, 2, 5, 10, 20, 50, 100)
COUNTS = (1, 10, 100, 1_000, 10_000)  # steps in a mean

OVERFLOW = "it is too large for double precision at a step that is asked for"


class SeriesTheory:
    """Exact moments of one series. Every unknown number is None, and `reason(name)` says why.

    Steps and lags are int64 arrays of any shape, steps from 0 on; answers have the shape asked for.
    """

    def __init__(self, name: str, expression: Expression, recorded: bool = False):
        self.name, self.expression = name, expression
        self.recorded = recorded  # whether it leaves from a recorded past, its own or that of what it is made of
        self._reasons: dict[str, str] = {}

    def __repr__(self) -> str:
        return f"<SeriesTheory of {self.name}>"

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

    @property
    def random(self) -> bool:
        """Whether anything is left to chance."""
        return bool(self.expression.sources)

    @cached_property
    def discrete(self) -> bool:
        """Whether chance only chooses among few values, as for a flag."""
        sources = self.expression.sources
        return bool(sources) and all(s.kind == PROCESS and s.detail.discrete for s in sources)

    @property
    def lumpy(self) -> bool:
        """Whether some values have a chance of their own, as 0 has where demand is intermittent: paths may be equal."""
        return self.expression.lumpy

    def marginal(self, step: int) -> Any | None:
        """The law at one step as a frozen SciPy distribution."""
        return self._try("marginal", lambda: laws.marginal(self.expression, int(step)))

    @cached_property
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

    def covariance_of_squares(self, t, s) -> np.ndarray | None:
        """Cov((x - E x)^2 at t, the same at s), for arrays of steps of one shape."""
        return self._try(
            "covariance_of_squares", lambda: fourth.autocovariance_of_squares(self.expression, _steps(t), _steps(s))
        )

    def autocorrelation_of_squares(self, lags, from_step: int = 0) -> np.ndarray | None:
        """Correlation of (x - E x)^2 at from_step + lag with the same at from_step, at lags >= 0."""

        def correlation() -> np.ndarray:
            x, later = self.expression, np.append(_steps(lags).ravel() + from_step, from_step)
            covariances = fourth.autocovariance_of_squares(x, later, np.full(later.shape, from_step))
            here = there = covariances[-1]
            if not self.stationarity.covariance_stationary:
                there = fourth.autocovariance_of_squares(x, later, later)[:-1]
            if np.any(here * there <= 0.0):
                raise Unknown("the variance of the squares is 0 at a step that is asked for")
            return (covariances[:-1] / np.sqrt(here * there)).reshape(np.shape(lags))

        return self._try("autocorrelation_of_squares", correlation)

    def partial_autocorrelation(self, lags) -> np.ndarray | None:
        """Correlation of x(t + lag) and x(t) given all values between, at lags >= 0; 1 at lag 0.

        For a series whose autocovariances depend on the lag alone. Source: Durbin (1960).
        """
        return self._try(
            "partial_autocorrelation", lambda: memory.partial_autocorrelation(self._steady(), _steps(lags))
        )

    def spectral_density(self, frequencies) -> np.ndarray | None:
        """S(f) = sum over all lags of gamma(h) exp(-2 pi i f h), at frequencies f in cycles a step.

        Two-sided and per cycle: the integral over one cycle is the variance, and S(0) the long-run variance. Raises
        ValueError for frequencies outside -1/2 .. 1/2. Source: Brockwell & Davis (1991), ch. 4, times 2 pi.
        """
        f = np.asarray(frequencies, float)
        if not np.all(np.abs(f) <= 0.5):
            raise ValueError(f"expected frequencies in cycles a step, from -0.5 to 0.5, got {f.ravel()[:5].tolist()}")
        return self._try("spectral_density", lambda: spectrum.spectral_density(self._steady(), f))

    @cached_property
    def half_life(self) -> int | None:
        """The first lag from which on no autocorrelation exceeds 1/2 in size, in steps.

        Where they do not die out it is looked for among the first 32,768.
        """
        return self._try("half_life", lambda: memory.half_life(self._steady()))

    @cached_property
    def long_run_variance(self) -> float | None:
        """The sum of the autocovariances over all lags: n times the variance of a mean of n steps, for large n."""
        return self._try("long_run_variance", lambda: spectrum.long_run_variance(self._steady()))

    def variance_of_mean(self, counts) -> np.ndarray | None:
        """Variance of the mean of the first n steps, n >= 1 (of any n steps in a row for a stationary series)."""
        n = _counted("numbers of steps", counts)
        steady = self.stationarity.covariance_stationary
        return self._try("variance_of_mean", lambda: memory.variance_of_mean(self.expression, n, steady))

    def fourth_moment_of_mean(self, count: int) -> float | None:
        """E (m - E m)^4 of the mean m of the first `count` steps (of any as many where covariances do not move)."""

        def answer() -> float:
            if not self.gaussian:
                raise Unknown("the law of a mean of what is not Gaussian is not known")
            return 3 * float(_known(self, "variance_of_mean", np.array([count]))[0]) ** 2

        return self._try("fourth_moment_of_mean", answer)

    def forecast_variance(self, horizons, given: str = "values") -> np.ndarray | None:
        """Variance of the error of the best linear forecast h >= 1 steps ahead, long after the start.

        `given` is what is known of the past: the series' own "values", or the shocks of all its "parts", which tell
        more where there are several and the series is linear in them. Where conditional variances move it is their
        mean. A series that leaves from a recorded past (`recorded`) is forecast from there, whatever `given`: it is
        the variance at step h - 1. Source: Box & Jenkins (1970), ch. 5; Harvey (1989), ch. 3; Kolmogorov (1941).
        """
        if given not in ("values", "parts"):
            raise ValueError(f"expected `given` to be values or parts, got {given!r}")
        h, x = _counted("horizons", horizons), self.expression
        if self.recorded:
            return self._try("forecast_variance", lambda: horizon.variance_given_record(x, h))
        answer = horizon.variance_given_values if given == "values" else horizon.variance_given_parts
        return self._try("forecast_variance", lambda: answer(x, h))

    def forecast(self, horizons, history: Sequence[float] = (), from_step: int = 0) -> Forecast | None:
        """Mean and variance of what comes h >= 1 steps after `history`, the values at from_step, from_step + 1, ..

        The conditional law of a Gaussian series, the best linear forecast of any other. Without a history it is what
        the spec alone says, its `before` included. Raises ValueError for a history that the spec rules out.
        """
        h = _counted("horizons", horizons)
        return self._try("forecast", lambda: horizon.forecast(self.expression, h, history, from_step))

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
        details = (getattr(source.detail, "condition", 1.0) for source in self.expression.sources)
        return max((*(condition(form) for form in forms), *details), default=1.0)

    def reason(self, name: str) -> str | None:
        """Why the last answer of that name was None; None when it was not."""
        return self._reasons.get(name)

    def as_dict(
        self,
        at: Sequence[int],
        lags: int | Sequence[int] = 40,
        frequencies: Sequence[float] = FREQUENCIES,
        horizons: Sequence[int] = HORIZONS,
    ) -> dict[str, Any]:
        """Plain numbers for JSON: moments at the steps `at`, and autocovariances from the first of them on.

        A stationary series is looked at from step 0. Unknown numbers are None, with their reasons beside them;
        `highest_moment` is "all" where every moment exists.
        """
        steps = np.asarray(at, np.int64)
        span = np.arange(lags + 1) if isinstance(lags, int) else np.asarray(lags, np.int64)
        first = 0 if self.stationarity.covariance_stationary or not len(steps) else int(steps[0])
        parts = plain(self.forecast_variance(horizons, given="parts"))
        why_no_parts = self.reason("forecast_variance")
        numbers: dict[str, Any] = {
            "mean": plain(self.mean(steps)),
            "variance": plain(self.variance(steps)),
            "autocovariance": {
                "from_step": first,
                "lags": span.tolist(),
                "values": plain(self.autocovariance(span, first)),
            },
            "autocorrelation": plain(self.autocorrelation(span, first)),
            "partial_autocorrelation": plain(self.partial_autocorrelation(span)),
            "autocorrelation_of_squares": plain(self.autocorrelation_of_squares(span, first)),
            "half_life": self.half_life,
            "long_run_variance": self.long_run_variance,
            "variance_of_mean": {"counts": list(COUNTS), "values": plain(self.variance_of_mean(COUNTS))},
            "spectral_density": {
                "frequencies": list(frequencies),
                "values": plain(self.spectral_density(frequencies)),
            },
            "forecast_variance": {
                "horizons": list(horizons),
                "given_record": self.recorded,
                "given_parts": parts,
                "values": plain(self.forecast_variance(horizons)),
            },
            "excess_kurtosis": self.excess_kurtosis,
            "highest_moment": "all" if self.highest_moment == np.inf else self.highest_moment,
        }
        out: dict[str, Any] = {
            "stationarity": {"verdict": self.stationarity.verdict, "reasons": list(self.stationarity.reasons)},
            "gaussian": self.gaussian,
            "steps": steps.tolist(),
            **numbers,
        }
        reasons = {name: self._reasons[name] for name in numbers if name in self._reasons}
        if why_no_parts:
            reasons["forecast_variance.given_parts"] = why_no_parts
        if reasons:
            out["unknown"] = reasons
        if self.condition > WORTH_SAYING:
            out["condition"] = self.condition
        return out

    def _steady(self) -> Expression:
        """The series, for what needs autocovariances that depend on the lag alone."""
        judged = self.stationarity
        if not judged.covariance_stationary:
            none = judged.verdict == INFINITE
            why = "it has no autocovariances" if none else "its autocovariances depend on the step"
            raise Unknown(f"{why}: {judged.reasons[0]}")
        return self.expression

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

    @property
    def gaussian(self) -> bool:
        """Whether the values of both at any steps are jointly Gaussian."""
        return laws.jointly_gaussian(self.first.expression, self.second.expression)

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


def _known(series: SeriesTheory, what: str, *args: Any) -> Any:
    """An answer of its own, or Unknown with the reason."""
    value = getattr(series, what)(*args)
    if value is None:
        raise Unknown(series.reason(what) or f"{what} is not known")
    return value


def _steps(steps) -> np.ndarray:
    steps = np.asarray(steps)
    if steps.size and (steps.dtype.kind not in "iu" or steps.min() < 0):
        raise ValueError(f"expected whole steps from 0 on, got {steps.ravel()[:5].tolist()}")
    return steps.astype(np.int64)


def _counted(what: str, numbers) -> np.ndarray:
    numbers = np.asarray(numbers)
    if numbers.size and (numbers.dtype.kind not in "iu" or numbers.min() < 1):
        raise ValueError(f"expected whole {what} from 1 on, got {numbers.ravel()[:5].tolist()}")
    return numbers.astype(np.int64)


def _mean(x: Expression, steps) -> np.ndarray:
    with np.errstate(over="ignore", invalid="ignore", under="ignore"):
        return x.mean(_steps(steps))


def _cov(x: Expression, y: Expression, t, s) -> np.ndarray:
    t, s = (steps.copy() for steps in np.broadcast_arrays(_steps(t), _steps(s)))
    with np.errstate(over="ignore", invalid="ignore", under="ignore"):
        return x.covariance(y, t, s)


def plain(values: np.ndarray | None) -> list | None:
    return None if values is None else np.asarray(values, float).tolist()
