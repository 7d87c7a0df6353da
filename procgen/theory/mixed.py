"""Series and pairs of series whose parameters are drawn by path: every answer averaged over a `Mixture`."""

from __future__ import annotations

from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.spec.model import Spec
from procgen.theory.mixedlaw import MixedLaw, MixedNormals, Normal
from procgen.theory.series import CrossTheory, SeriesTheory, _steps
from procgen.theory.unknown import Unknown
from procgen.theory.varied import Mixture, Node, parameters_of, part, sum_of
from procgen.theory.verdict import Stationarity
from procgen.theory.whole import Theory, theory

NOT_ERGODIC = "not ergodic"


class MixedTheory(Theory):
    """The theory of a spec with parameters drawn by path; `series` that have none are as they are."""

    def __init__(self, typical: Theory, varied: Any):
        super().__init__(dict(typical.series), typical.names, typical.axis)
        self._varied = varied
        self._used = {name: parameters_of(part(varied.spec, (name,))) for name in typical.series}
        self._mixtures: dict[tuple[str, ...], Mixture] = {}
        for name, used in self._used.items():
            if used:
                self.series[name] = MixedSeries(name, typical.series[name], self._mixture(name))

    def _mixture(self, *names: str) -> Mixture:
        if names not in self._mixtures:
            self._mixtures[names] = Mixture(self._varied, names, _given)
        return self._mixtures[names]

    def cross(self, first: str, second: str) -> CrossTheory:
        if not self._used[first] and not self._used[second]:
            return super().cross(first, second)
        if not self._go_together(first, second):
            return Independent(self[first], self[second])
        return MixedCross(self[first], self[second], self._mixture(first, second))

    def _go_together(self, a: str, b: str) -> bool:
        return bool(self._used[a] & self._used[b]) or super()._go_together(a, b)


def mixed(graph: Any) -> Theory:
    """The theory of a spec with parameters drawn by path, from the graph that `build` made of it."""
    return MixedTheory(theory(graph.spec, graph), graph.varied)


def _given(spec: Spec) -> Theory:
    """The theory of a spec with its parameters in place."""
    from procgen.terms.graph import Graph

    return theory(spec, Graph(spec))


class MixedSeries(SeriesTheory):
    """Exact moments of a series with parameters drawn by path; each number within `TOLERANCE`."""

    def __init__(self, name: str, typical: SeriesTheory, mixture: Mixture):
        super().__init__(name, typical.expression)
        self.mixture = mixture

    @property
    def random(self) -> bool:
        return True

    def _ask(self, node: Node, what: str, *args: Any) -> Any:
        """What the theory at a node answers; Unknown with its reason where it does not know."""
        series = node.theory[self.name]
        value = getattr(series, what)(*args)
        if value is None:
            raise Unknown(series.reason(what) or f"{what} is not known given the parameters")
        return value

    def _mean(self, steps: Any) -> NDArray:
        steps = _steps(steps)
        return self.mixture.average(lambda nodes: [self._ask(n, "mean", steps) for n in nodes])

    def _covariance(self, t: Any, s: Any) -> NDArray:
        t, s = np.broadcast_arrays(_steps(t), _steps(s))

        def answer(nodes: list[Node]) -> list[NDArray]:
            both = [(self._ask(n, "mean", t), self._ask(n, "mean", s)) for n in nodes]
            a, b = (sum_of(nodes, [pair[i] for pair in both]) for i in (0, 1))
            within = [self._ask(n, "covariance", t, s) for n in nodes]
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
        reasons = [f"a parameter drawn by path: {names}", f"given it: {verdicts[0].verdict}"]
        reasons += [reason for verdict in verdicts for reason in verdict.reasons]
        return Stationarity(
            NOT_ERGODIC,
            tuple(dict.fromkeys(reasons)),
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
        return False

    @cached_property
    def discrete(self) -> bool:
        nodes = [node.theory[self.name] for node in self._few]
        return self.mixture.exact and all(one.discrete or not one.random for one in nodes)

    def marginal(self, step: int) -> Any | None:
        return self._try("marginal", lambda: self._marginal(int(step)))

    def _marginal(self, step: int) -> MixedLaw:
        at = np.array([step])
        spread = np.sqrt(np.maximum(self._covariance(at, at), 0.0))
        x = self._mean(at) + spread * np.linspace(-7.0, 7.0, 57)
        _, nodes = self.mixture.settled(lambda nodes: [law.cdf(x) for law in self._laws(nodes, step)])
        laws, weights = self._laws(nodes, step), [node.weight for node in nodes]
        if all(isinstance(law, Normal) for law in laws):
            return MixedNormals(weights, [law.mean for law in laws], [law.sd for law in laws])
        return MixedLaw(weights, laws)

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

    @property
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

        def answer() -> NDArray:
            both = self.mixture.average(lambda nodes: self._squares(nodes, later, first))
            return both - self._covariance(later, later) * self._covariance(first, first)

        return self._try("autocovariance_of_squares", answer)

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


class Independent(CrossTheory):
    """Two series that have neither chance nor drawn parameters in common."""

    def covariance(self, t, s):
        return np.zeros(np.broadcast_shapes(_steps(t).shape, _steps(s).shape))


class MixedCross(CrossTheory):
    """Exact covariances between two series that have parameters drawn by path."""

    def __init__(self, first: SeriesTheory, second: SeriesTheory, mixture: Mixture):
        super().__init__(first, second)
        self.mixture = mixture

    def covariance(self, t, s):
        t, s = np.broadcast_arrays(_steps(t), _steps(s))
        try:
            value = self.mixture.average(lambda nodes: self._given(nodes, t, s))
            self._reason = None
            return value
        except Unknown as unknown:
            self._reason = unknown.reason
            return None

    def _given(self, nodes: list[Node], t: NDArray, s: NDArray) -> list[NDArray]:
        means, within = [], []
        for node in nodes:
            x, y = node.theory[self.first.name].mean(t), node.theory[self.second.name].mean(s)
            cross = node.theory.cross(self.first.name, self.second.name)
            c = cross.covariance(t, s)
            if x is None or y is None or c is None:
                raise Unknown(cross.reason() or "a mean is not known given the parameters")
            means.append((x, y))
            within.append(c)
        a, b = (sum_of(nodes, [pair[i] for pair in means]) for i in (0, 1))
        return [c + (x - a) * (y - b) for c, (x, y) in zip(within, means, strict=True)]
