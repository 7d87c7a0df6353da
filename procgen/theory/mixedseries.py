"""One series whose parameters are drawn by path: every answer averaged over a `Mixture`, or refused."""

from __future__ import annotations

from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.spec.draws import LognormalDraw, NormalDraw
from procgen.theory.horizon import Forecast
from procgen.theory.memory import _durbin_levinson, searched_half_life
from procgen.theory.mixedlaw import MixedNormals, Normal
from procgen.theory.mixedlumps import UNEVEN, mixed_law, refuse_moving
from procgen.theory.series import OVERFLOW, SeriesTheory, _counted, _steps
from procgen.theory.unknown import Unknown
from procgen.theory.varied import Mixture, Node, sum_of
from procgen.theory.verdict import Stationarity

NOT_ERGODIC = "not ergodic"
LONGEST_MEAN = 1_000_000  # steps
SMALL = 64  # steps
SAME = 1e-11  # of numbers that can only differ by rounding
AREA = 1e-9  # of a law, anywhere


class MixedSeries(SeriesTheory):
    """Exact moments of a series with parameters drawn by path; each number within `TOLERANCE`."""

    def __init__(self, name: str, typical: SeriesTheory, mixture: Mixture):
        super().__init__(name, typical.expression)  # what it is made of; its numbers are those at the medians
        self.typical, self.mixture = typical, mixture

    @property
    def lumpy(self) -> bool:
        return any(node.theory[self.name].lumpy for node in self._few)

    @property
    def random(self) -> bool:
        return True

    def _ask(self, node: Node, what: str, *args: Any) -> Any:
        """What the theory at a node answers; Unknown with its reason where it does not know."""
        small = all(np.size(arg) <= SMALL for arg in args)  # the same few steps are asked for again and again
        key = (self.name, what, *((np.shape(arg), np.asarray(arg).tobytes()) for arg in args)) if small else None
        if key is None or key not in node.known:
            series = node.theory[self.name]
            value = getattr(series, what)(*args)
            if value is None:
                reason = series.reason(what) or f"{what} is not known given the parameters"
                raise Unknown(self._too_large(node, what, *args) if reason == OVERFLOW else reason)
            if key is None:
                return value
            node.known[key] = value
        return node.known[key]

    def _too_large(self, node: Node, what: str, *args: Any) -> str:
        """Why the average is not given where the theory at a node is beyond double precision.

        An exponential of a power of what is drawn has no mean under a lognormal law, which has no exponential moments
        (Johnson, Kotz & Balakrishnan 1994, ch. 14).
        """
        wide = [(name, p.varying.law) for name, p in self.mixture.parameters.items() if np.isinf(p.varying.law.high)]
        if not wide:
            return OVERFLOW
        values = dict(zip(self.mixture.parameters, node.values, strict=True))
        at = ", ".join(f"{name} = {value:.4g}" for name, value in values.items())
        exponential = any(term.exponent for term in node.theory[self.name].expression.terms)
        alone = len(values) == 1 and getattr(self.typical, what)(*args) is not None
        if what == "covariance" and exponential and alone and isinstance(wide[0][1], LognormalDraw):
            name, law = wide[0]
            return (
                f"infinite: given {name} it grows as an exponential of it, and the tail of {law} falls more slowly "
                "than that; hold the draws `within` bounds"
            )
        return f"it is too large for double precision at {at}, which may be drawn: the average may be infinite"

    def _mean(self, steps: Any) -> NDArray:
        steps = _steps(steps)
        return self.mixture.average(lambda nodes: [self._ask(n, "mean", steps) for n in nodes])

    def _covariance(self, t: Any, s: Any) -> NDArray:
        t, s = np.broadcast_arrays(_steps(t), _steps(s))

        def answer(nodes: list[Node]) -> list[NDArray]:
            within = [self._ask(n, "covariance", t, s) for n in nodes]  # first, for its reason where both are too large
            both = [(self._ask(n, "mean", t), self._ask(n, "mean", s)) for n in nodes]
            a, b = (sum_of(nodes, [pair[i] for pair in both]) for i in (0, 1))
            return [c + (x - a) * (y - b) for c, (x, y) in zip(within, both, strict=True)]

        return self.mixture.average(answer)

    def mean(self, steps):
        return self._try("mean", lambda: self._mean(steps))

    def variance(self, steps):
        return self._try("variance", lambda: np.maximum(self._covariance(steps, steps), 0.0))

    def covariance(self, t, s):
        return self._try("covariance", lambda: self._covariance(t, s))

    def autocovariance(self, lags, from_step: int = 0):
        later = _steps(lags) + from_step
        return self._try("autocovariance", lambda: self._covariance(later, np.full(later.shape, from_step)))

    def autocorrelation(self, lags, from_step: int = 0):
        def correlation() -> NDArray:
            later = _steps(lags) + from_step
            first = np.full(later.shape, from_step)
            spread = self._covariance(later, later) * self._covariance(first, first)
            if np.any(spread <= 0.0):
                raise Unknown("the variance is 0 at a step that is asked for")
            return self._covariance(later, first) / np.sqrt(spread)

        return self._try("autocorrelation", correlation)

    @cached_property
    def _few(self) -> list[Node]:
        """The theories at few nodes, for what holds at all of them or at none."""
        return self.mixture.nodes()

    @cached_property
    def stationarity(self) -> Stationarity:
        verdicts = [node.theory[self.name].stationarity for node in self._few]
        names = ", ".join(f"{name} ({p.varying.law})" for name, p in self.mixture.parameters.items())
        given = self.typical.stationarity
        return Stationarity(
            NOT_ERGODIC,
            (f"a parameter drawn by path: {names}", f"given it: {given.verdict}", *given.reasons),
            stationary=all(v.stationary for v in verdicts),
            covariance_stationary=all(v.covariance_stationary for v in verdicts) and self._parallel(),
        )

    def _parallel(self) -> bool:
        """Whether the means given the parameters differ by constants: else their covariance depends on the step."""
        if all(node.theory[self.name].stationarity.stationary for node in self._few):
            return True
        last = max(self.expression.space.horizon - 1, 1)
        steps = np.unique(np.linspace(0, last, 64).astype(np.int64))
        means = [node.theory[self.name].mean(steps) for node in self._few]
        if any(mean is None for mean in means):
            return False
        gaps = np.array(means) - means[0]
        return bool(np.all(np.abs(gaps - gaps[:, :1]) <= 1e-12 * (1e-300 + np.max(np.abs(means)))))

    @cached_property
    def gaussian(self) -> bool:
        """Whether it stays Gaussian over the law of its parameters: normal ones, that only shift it."""
        series = [node.theory[self.name] for node in self._few]
        laws = [p.varying.law for p in self.mixture.parameters.values()]
        if not all(isinstance(law, NormalDraw) and law.within is None for law in laws):
            return False
        return all(one.gaussian for one in series) and self._only_shifted(series)

    def _only_shifted(self, series: list[SeriesTheory]) -> bool:
        """Whether, at some steps, covariances do not depend on the parameters and means are linear in them.

        Asked at products of four nodes each, which tell lines from all that is curved.
        """
        last = max(self.expression.space.horizon - 1, 0)
        t, s = (grid.ravel() for grid in np.meshgrid(*[np.unique(np.minimum([0, 1, 2, 7, last // 2, last], last))] * 2))
        covariances, means = [one.covariance(t, s) for one in series], [one.mean(t) for one in series]
        if any(found is None for found in (*covariances, *means)):
            return False
        spread, middle = np.array(covariances), np.array(means)
        design = np.array([(1.0, *node.values) for node in self._few])
        fitted = design @ np.linalg.lstsq(design, middle, rcond=None)[0]
        return bool(
            np.all(np.abs(spread - spread[0]) <= SAME * (np.max(np.abs(spread)) + 1e-300))
            and np.all(np.abs(fitted - middle) <= SAME * (np.max(np.abs(middle)) + 1e-300))
        )

    @cached_property
    def discrete(self) -> bool:
        nodes = [node.theory[self.name] for node in self._few]
        return self.mixture.exact and all(one.discrete or not one.random for one in nodes)

    def marginal(self, step: int) -> Any | None:
        return self._try("marginal", lambda: self._marginal(int(step), np.array([step])))

    def _marginal(self, step: int, at: NDArray) -> Any:
        if self.gaussian:
            from scipy import stats

            return stats.norm(float(self._mean(at)[0]), float(np.sqrt(self._covariance(at, at)[0])))
        spread = np.sqrt(np.maximum(self._covariance(at, at), 0.0))
        x = self._mean(at) + spread * np.linspace(-7.0, 7.0, 57)
        try:
            _, nodes = self.mixture.settled(lambda nodes: [law.cdf(x) for law in self._laws(nodes, step)], AREA, UNEVEN)
        except Unknown:  # a jump of the distribution function that moves is no sum of such as stand still
            refuse_moving([self._laws(nodes, step) for nodes in self.mixture.rules], float(spread[0]), AREA)
            raise
        laws, weights = self._laws(nodes, step), [node.weight for node in nodes]
        if not all(isinstance(law, Normal) for law in laws):
            return mixed_law(weights, laws, lambda: self._laws(self._few, step), float(spread[0]), AREA)
        return MixedNormals(weights, [law.mean for law in laws], [law.sd for law in laws])

    def _laws(self, nodes: list[Node], step: int) -> list[Any]:
        gaussian = [node.theory[self.name].gaussian for node in nodes]
        return [
            self._normal(node, step) if normal else self._ask(node, "marginal", step)
            for node, normal in zip(nodes, gaussian, strict=True)
        ]

    def _normal(self, node: Node, step: int) -> Normal:
        at = np.array([step])
        variance = float(self._ask(node, "variance", at)[0])
        if variance <= 0.0:
            raise Unknown("given its parameters the value at that step is known: its law has no density")
        return Normal(float(self._ask(node, "mean", at)[0]), variance**0.5)

    @cached_property
    def excess_kurtosis(self) -> float | None:
        def steady() -> float:
            if not self.stationarity.stationary:
                raise Unknown("it may change with the step; ask for it at a step")
            return self._excess(0)

        return self._try("excess_kurtosis", steady)

    def excess_kurtosis_at(self, step: int) -> float | None:
        return self._try("excess_kurtosis_at", lambda: self._excess(int(step)))

    def _excess(self, step: int) -> float:
        at = np.array([step])

        def fourth(nodes: list[Node]) -> list[NDArray]:
            return self._squares(nodes, at, at)

        variance = float(self._covariance(at, at)[0])
        if not variance > 0.0:
            raise Unknown("the variance is 0 there")
        return float(self.mixture.average(fourth)[0]) / variance**2 - 3.0

    def autocovariance_of_squares(self, lags, from_step: int = 0):
        later = _steps(lags) + from_step
        first = np.full(later.shape, from_step)

        return self._try("autocovariance_of_squares", lambda: self._of_squares(later, first))

    def covariance_of_squares(self, t, s):
        pairs = [(_steps(a).ravel(), _steps(b).ravel()) for a, b in zip(np.ravel(t), np.ravel(s), strict=True)]
        return self._try(
            "covariance_of_squares",
            lambda: np.concatenate([self._of_squares(a, b) for a, b in pairs]).reshape(np.shape(t)),
        )

    def _of_squares(self, t: NDArray, s: NDArray) -> NDArray:
        both = self.mixture.average(lambda nodes: self._squares(nodes, t, s))
        return both - self._covariance(t, t) * self._covariance(s, s)

    def _squares(self, nodes: list[Node], t: NDArray, s: NDArray) -> list[NDArray]:
        """E (x(t) − E x(t))²(x(s) − E x(s))² given the parameters, at each node.

        Given the parameters the mean is off by d: of a Gaussian series all is known; of others where d is 0.
        """
        a = sum_of(nodes, [self._ask(n, "mean", t) for n in nodes])
        b = sum_of(nodes, [self._ask(n, "mean", s) for n in nodes])
        return [self._squares_given(n, a, b, t, s) for n in nodes]

    def _squares_given(self, node: Node, a: NDArray, b: NDArray, t: NDArray, s: NDArray) -> NDArray:
        d, e = self._ask(node, "mean", t) - a, self._ask(node, "mean", s) - b
        v, w, c = (self._ask(node, "covariance", *pair) for pair in ((t, t), (s, s), (t, s)))
        series = node.theory[self.name]
        if series.gaussian or not series.random:
            return (v + d * d) * (w + e * e) + 2 * c * c + 4 * c * d * e
        if any(np.max(np.abs(gap)) > 1e-12 * np.sqrt(np.max(spread)) for gap, spread in ((d, v), (e, w))):
            raise Unknown("third moments given the drawn parameters are not known")
        if np.array_equal(t, s):
            known = [self._ask(node, "excess_kurtosis_at", int(step)) for step in t]
            return v * v * (np.array(known) + 3.0)
        return self._ask(node, "autocovariance_of_squares", t - s, int(s[0])) + v * w

    def autocorrelation_of_squares(self, lags, from_step: int = 0):
        def correlation() -> NDArray:
            later = _steps(lags) + from_step
            first = np.full(later.shape, from_step)
            both, here, there = (self._of_squares(*pair) for pair in ((later, first), (first, first), (later, later)))
            if np.any(here * there <= 0.0):
                raise Unknown("the variance of the squares is 0 at a step that is asked for")
            return both / np.sqrt(here * there)

        return self._try("autocorrelation_of_squares", correlation)

    def partial_autocorrelation(self, lags):
        def partial() -> NDArray:
            if not self.stationarity.covariance_stationary:
                raise Unknown("its autocovariances depend on the step")
            steps = np.arange(int(np.max(_steps(lags), initial=0)) + 1)
            return _durbin_levinson(self._covariance(steps, np.zeros_like(steps)))[_steps(lags)]

        return self._try("partial_autocorrelation", partial)

    def variance_of_mean(self, counts):
        n = np.asarray(counts, np.int64)

        def answer(nodes: list[Node]) -> list[NDArray]:
            means = [self._running_mean(node, n) for node in nodes]
            middle = sum_of(nodes, means)
            within = [self._ask(node, "variance_of_mean", n) for node in nodes]
            return [v + (x - middle) ** 2 for v, x in zip(within, means, strict=True)]

        return self._try("variance_of_mean", lambda: self.mixture.average(answer))

    def fourth_moment_of_mean(self, count: int) -> float | None:
        n = np.array([count])

        def answer(nodes: list[Node]) -> list[NDArray]:
            if not all(node.theory[self.name].gaussian for node in nodes):
                raise Unknown("given its parameters it is not Gaussian")
            means = [self._running_mean(node, n) for node in nodes]
            middle = sum_of(nodes, means)
            within = [self._ask(node, "variance_of_mean", n) for node in nodes]
            apart = [(x - middle) ** 2 for x in means]
            return [3 * v * v + 6 * v * d + d * d for v, d in zip(within, apart, strict=True)]

        return self._try("fourth_moment_of_mean", lambda: float(self.mixture.average(answer)[0]))

    def _running_mean(self, node: Node, n: NDArray) -> NDArray:
        """The mean of the first n means given the parameters."""
        last = int(np.max(n, initial=1))
        if last > LONGEST_MEAN:
            raise Unknown(f"means of more than {LONGEST_MEAN:,} steps are not averaged")
        return np.cumsum(self._ask(node, "mean", np.arange(last)))[n - 1] / n

    def spectral_density(self, frequencies):
        return self._try("spectral_density", lambda: self._by_frequency("spectral_density", np.asarray(frequencies)))

    @cached_property
    def long_run_variance(self):
        return self._try("long_run_variance", lambda: float(self._by_frequency("long_run_variance")))

    def _by_frequency(self, what: str, *args: Any) -> NDArray:
        """The average of what the theories say of frequencies, where all their means are one."""
        at = np.array([0, max(self.expression.space.horizon - 1, 0)])
        means = [self._ask(node, "mean", at) for node in self._few]
        if any(np.max(np.abs(mean - means[0])) > 1e-12 * np.max(np.abs(means)) for mean in means):
            raise Unknown("its mean is drawn by path: no time is long enough to average it out")
        return self.mixture.average(lambda nodes: [np.asarray(self._told(node, what, *args)) for node in nodes])

    def _told(self, node: Node, what: str, *args: Any) -> Any:
        return self._ask(node, what, *args) if args else self._ask_plain(node, what)

    @cached_property
    def half_life(self) -> int | None:
        def search() -> int:
            if not self.stationarity.covariance_stationary:
                raise Unknown("its autocovariances depend on the step")
            return searched_half_life(lambda lags: self._covariance(lags, np.zeros_like(lags)))

        return self._try("half_life", search)

    def forecast_variance(self, horizons, given: str = "values") -> None:
        why = (
            "the past of a path tells of its drawn parameters, and how well depends on the path: the error has no one "
            "variance; with a value in place of each draw it is known"
        )
        return self._try("forecast_variance", lambda: _refused(why))

    def forecast(self, horizons, history=(), from_step: int = 0) -> Forecast | None:
        """Without a history: total mean and variance. What given values tell of the parameters is not computed."""

        def total() -> Forecast:
            if len(history):
                _refused(
                    "given values tell of the drawn parameters of their path, and the law of these given values is not "
                    "computed; ask without a history, or put a value in place of each draw"
                )
            steps = from_step - 1 + _counted("horizons", horizons)
            return Forecast(steps, self._mean(steps), np.maximum(self._covariance(steps, steps), 0.0))

        return self._try("forecast", total)

    @cached_property
    def highest_moment(self) -> float | None:
        def lowest() -> float:
            return min(self._ask_plain(node, "highest_moment") for node in self._few)

        return self._try("highest_moment", lowest)

    def _ask_plain(self, node: Node, what: str) -> Any:
        value = getattr(node.theory[self.name], what)
        if value is None:
            raise Unknown(node.theory[self.name].reason(what) or "it is not known given the parameters")
        return value

    def system(self) -> None:
        return self._try("system", self._no_system)

    def _no_system(self) -> None:
        raise Unknown("each path has a state space of its own: its parameters are drawn")

    @property
    def condition(self) -> float:
        return max(node.theory[self.name].condition for node in self._few)


def _refused(why: str) -> None:
    raise Unknown(why)
