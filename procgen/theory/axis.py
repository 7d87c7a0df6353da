"""What a term writes its moments on: constructors of expressions over one set of sources."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from math import lcm
from typing import Any

import numpy as np

from procgen.theory import known, markov, vector
from procgen.theory.arma import PowerSeries, spectral_radius
from procgen.theory.bends import Bending
from procgen.theory.chains import States, Switching
from procgen.theory.distributed import Distributed, distributed_mean
from procgen.theory.expression import Expression, opaque
from procgen.theory.fractional import Filtered, FractionalNoise, GaussianNoise, StationaryGaussian
from procgen.theory.known import Known
from procgen.theory.left import LeftOpen
from procgen.theory.linear import At, Base, Linear
from procgen.theory.parallel import ParallelGarch
from procgen.theory.processes import Chain, Held, Process, Seen, law_at, mean_at
from procgen.theory.sources import GARCH, IID, PROCESS, Source, Space, roots
from procgen.theory.stated import Stating
from procgen.theory.unknown import Unknown
from procgen.theory.verdict import CYCLES, LEAVES, UNIT_ROOT, judge
from procgen.theory.volatile import Volatile


@dataclass
class Axis(Volatile, Stating, Bending):
    """The steps of a spec and its sources.

    Parameters
    ----------
    horizon : number of steps of the spec; shapes of known functions are recognised over it
    correlation : correlations of primary normals, keyed by frozensets of two source keys
    """

    horizon: int = 4096
    correlation: Mapping[frozenset[str], float] = field(default_factory=dict)
    period: float | None = None  # of the term at work, if it has one
    space: Space = field(init=False)
    _bases: dict[tuple, Base] = field(default_factory=dict)
    _processes: list[Source] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.space = Space(self.correlation, self.horizon)

    def at_work(self, name: str, period: float | None = None, bounded: bool = False) -> None:
        """Say which term writes its moments next, and whether its values have bounds."""
        self.space.name, self.period, self.space.bounded = name, period, bounded

    def known(self, f: Callable[[np.ndarray], np.ndarray], constant: bool = False) -> Expression:
        """A deterministic series: f of int64 steps (negative ones too) gives float64 values of the same shape."""
        if constant:
            return Expression(self.space, known.constant(float(f(np.zeros(1, np.int64))[0])))
        key = ("known", self.name, id(f), len(self._bases))
        return Expression(self.space, known.observed(key, f, self.horizon, self.name, self.period))

    def level(self, value: float) -> Expression:
        """The same known value at every step."""
        return Expression(self.space, known.constant(float(value)))

    def source(self, key: str, law: Any, sd: float) -> Expression:
        """Independent shocks of a law at the address `key`: `sd` times its unit, which is its sd where it has one."""
        variance = float("inf") if law.needs_spread else float(sd) ** 2
        noise = self._noise(self.space.add(Source(key, IID, variance, law, unit=float(sd))))
        return noise if law.points is None else replace(noise, lumpy=True)

    def filtered(
        self,
        noise: Expression,
        phi: Sequence[float],
        theta: Sequence[float] = (),
        before_x: Sequence[float] | None = None,
        before_shocks: Sequence[float] | None = None,
    ) -> Expression:
        """x(t) = sum phi_i x(t-i) + a(t) + sum theta_j a(t-j) of a noise a, stationary unless a past is given.

        The past is oldest first; values and shocks before step 0 that are not given count as not defined.
        """
        noise = _white(noise)
        phi, theta = _trimmed(phi), _trimmed(theta)
        started = before_x is not None
        total: dict[At, float] = {}
        for key, c in noise.linear.items():
            if not isinstance(key, At) or noise.terms:
                return self._given_up(noise, "a filter of a noise that is itself a running sum or a product")
            if started and (key.delay or key.base.phi):
                return self._given_up(noise, "a filter that starts from a given past, of a noise with a memory")
            if key.base.started and not started:
                return self._given_up(noise, "a stationary filter of a noise that starts from a given past")
            base = self._base(key.base.source, _times(key.base.phi, phi), started)
            for j, weight in enumerate((1.0, *theta)):
                at = At(base, key.delay + j)
                total[at] = total.get(at, 0.0) + c * weight
        try:
            mean = self._filtered_mean(noise.mean_path, phi, theta, before_x, before_shocks)
        except Unknown as unknown:
            return self._given_up(noise, unknown.reason)
        if started:
            self.space.origins.update({at.base: self.name for at in total})
        return Expression(self.space, mean, Linear(total), outputs=noise.outputs)

    def distributed(self, x: Expression, phi: Sequence[float], memory: int) -> Expression:
        """y(t) = sum phi_i y(t-i) + x(t) of any series x and a stationary filter, which forgets in `memory` steps."""
        kinds = {source.kind for source in x.sources}
        plain = not x.terms and all(isinstance(key, At) and not key.base.started for key in x.linear)
        if plain and kinds <= {IID, GARCH}:
            filtered = self.filtered(Expression(self.space, known.constant(0.0), x.linear), phi)
        else:
            filtered = self.process(Distributed(self.name, x, phi, memory))
        path = distributed_mean(self.name, x, phi, memory)
        return replace(filtered, mean_path=path, outputs={}, lumpy=x.lumpy)

    def walk(self, noise: Expression, drift: float, start: float) -> Expression:
        """x(0) = start, x(t) = x(t-1) + drift + a(t), followed backwards below step 0."""
        noise = _white(noise)
        drifting = Expression(self.space, known.constant(float(drift))) + noise
        walk = drifting.integrate(float(start))
        return Expression(self.space, walk.mean_path, walk.linear, walk.terms, noise.outputs)

    def fractional(self, noise: Expression, d: float, phi: Sequence[float], theta: Sequence[float]) -> Expression:
        """phi(B) x = theta(B) (1 - B)^-d of a Gaussian white noise, stationary."""
        (source,) = noise.sources
        memory = FractionalNoise(d, source.variance)
        return self.process(StationaryGaussian(self.name, (noise,), Filtered(memory, phi, theta)))

    def fractional_gaussian(self, noise: Expression, hurst: float, sd: float) -> Expression:
        """Increments of fractional Brownian motion with standard deviation `sd`, made from a white noise."""
        return self.process(StationaryGaussian(self.name, (noise,), GaussianNoise(hurst, sd * sd)))

    def vector(self, noises: Sequence[Expression], *system: Any, **past: Any) -> list[Expression]:
        """The components of a vector ARMA system of unit normals: see `vector.components`."""
        return vector.components(self, noises, *system, **past)

    def chain(self, key: str, law: Any, p: float, r: float) -> Expression:
        """0 or 1 by a stationary chain, driven by the stream `key`: 1 with probability p, autocorrelations r^lag."""
        driver = self.source(key, law, 1.0)
        flag = self.process(Chain(key, (driver,), p, r), known.constant(p))
        return replace(flag, branches=lambda: [(None, self.level(0.0)), (flag, self.level(1.0))])

    def states(
        self,
        key: str,
        law: Any,
        transitions: Any,
        shares: Any,
        start: int | None,
        names: tuple[str, ...],
        owners: tuple[int, ...],
    ) -> Expression:
        """The number of the state of a Markov chain driven by the stream `key`; `state k` of it is 1 in state k.

        The chain moves between stages; `owners` are the states these belong to. Stationary with the given shares of
        the stages, or from the stage `start` at step 0.
        """
        chain = States(transitions, shares, start)
        return markov.number_of_state(self.process, self.source(key, law, 1.0), key, chain, names, owners)

    def switching(self, key: str, law: Any, spreads: Sequence[float], *chain: Any) -> Expression:
        """Shocks with a spread for each state of a chain of their own, given as for `states`; filters take them too."""
        z, state = self.source(key, law, 1.0), self.states(f"{key}.regime", law, *chain)
        squares = self.known(lambda t: np.full(np.shape(t), float(spreads[0]) ** 2), constant=True)
        total = z * float(spreads[0])
        for k, spread in enumerate(spreads[1:], start=1):
            in_state = state.hidden(f"state {k}")
            total = total + self.product([in_state, z * (spread - spreads[0])])
            squares = squares + in_state * (spread**2 - spreads[0] ** 2)
        behind = frozenset(root for x in (z, state) for source in x.sources for root in roots(source))
        process = Switching(law, np.take(spreads, chain[4]), States(*chain[:3]))
        (shocks,) = z.sources
        white = self.space.add(
            Source(f"{key} switching", GARCH, process.variance, law, owner=shocks, detail=process, depends=behind)
        )
        return self.offering(total, regime=state, variance=squares, white=self._noise(white))

    def switching_garch(
        self, key: str, law: Any, omega: Any, alpha: Any, beta: Any, transitions: Any, shares: Any, start: Any,
        names: tuple[str, ...], owners: tuple[int, ...],
    ) -> Expression:  # fmt: skip
        """Shocks with a garch variance for each state of a chain of their own, given as for `states`."""
        z = self.source(key, law, 1.0)
        state = self.states(f"{key}.regime", law, transitions, shares, start, names, owners)
        behind = frozenset(root for x in (z, state) for source in x.sources for root in roots(source))
        process = ParallelGarch(law, omega, alpha, beta, States(transitions, shares, start), owners)
        (shocks,) = z.sources
        white = self._noise(
            self.space.add(
                Source(f"{key} switching", GARCH, process.variance, law, owner=shocks, detail=process, depends=behind)
            )
        )
        path = known.constant(process.variance)
        variance = opaque(self.space, (white,), f"the variance of {key}, which follows a hidden chain", path)
        return self.offering(white, regime=state, variance=variance)

    def offering(self, x: Expression, **outputs: Expression) -> Expression:
        """x, with hidden outputs."""
        return markov.offering(x, outputs)

    def held(self, x: Expression, step_of: Callable[[np.ndarray], np.ndarray], period: int) -> Expression:
        """x at the step `step_of(t)`, which must be an int64 function of int64 steps and repeat after `period`."""
        note = f"held for {period} steps in {self.name}"
        cycle = frozenset([float(period)])
        says = () if period == 1 else ((CYCLES, note),)
        if x.lost:
            held = self.process(Held(self.name, x, step_of, says), lost=x.lost)
            return replace(held, law=lambda step: law_at(x, int(step_of(np.array([step], np.int64))[0])))
        # A mean that is known as such may lack a past: it is read where the holding reads it, and only there.
        at = mean_at if x.terms else _mean_path_at
        path = known.whole(("held", self.name), lambda t: at(x, step_of(np.asarray(t, np.int64))), cycle, note)
        if x.mean_path.value is not None and not x.terms:
            path = x.mean_path
        elif x.mean_path.value is None:
            path = known.observed(("held", self.name), path.at, self.horizon, self.name, settles=x.mean_path.settles)
        return self.process(Held(self.name, x, step_of, says), path) if x.sources else Expression(self.space, path)

    def every(self, x: Expression, k: int, first: int) -> Expression:
        """x, whose steps are k to one, at the step k t + first."""

        def step_of(t: np.ndarray) -> np.ndarray:
            return k * np.asarray(t, np.int64) + first

        periods = x.mean_path.periods if not x.terms else None
        cycle = None if periods is None else frozenset(_coarser(p, k) for p in periods)
        note = known.said(x.mean_path.notes) or f"the mean moves in {self.name}"
        path = known.whole(("every", self.name, k), lambda t: mean_at(x, step_of(t)), cycle, note)
        if not x.terms and all(s.centred for s in x.sources):
            path = known.whole(("every", self.name, k), lambda t: x.mean_path.at(step_of(t)), cycle, note)
            if x.mean_path.value is not None or cycle == {1.0}:
                path = known.constant(float(x.mean_path.at(np.array([first]))[0]))
            elif cycle is None:
                path = known.observed(("every", self.name), path.at, self.horizon // k, self.name)
        elif judge(x).stationary and x.mean_path.value is not None:
            path = known.constant(float(mean_at(x, np.array([first]))[0]))
        return self.process(Seen(self.name, x, step_of), path) if x.sources else Expression(self.space, path)

    def process(self, process: Process, mean: Known | None = None, lost: str = "") -> Expression:
        """A process with a memory of its own around its mean (0 when absent), or why that is `lost`."""
        depends = frozenset(root for x in process.ingredients for source in x.sources for root in roots(source))
        key = f"process {len(self._processes)} of {process.name}"
        source = Source(key, PROCESS, np.nan, detail=process, depends=depends, reason=lost, centred=not lost)
        self._processes.append(source)
        form = Linear({At(self._base(source, (), False), 0): 1.0})
        return Expression(self.space, mean or known.constant(0.0), form, lumpy=process.lumpy or process.discrete)

    def left_open(self, key: str, law: Any, transition: Any, loading: Any, row: Any) -> Expression:
        """c A^t L z of normals z drawn once a path from the stream `key`, given A, L and c."""
        normals = self.source(key, law, 1.0)
        return self.process(LeftOpen(self.name, (normals,), transition, loading, row, self.horizon))

    def opaque(
        self,
        ingredients: Sequence[Expression],
        reason: str,
        mean: Callable[[np.ndarray], np.ndarray] | None = None,
    ) -> Expression:
        """A series made of others in a way that has no closed moments, with the reason, and its mean if known."""
        path = None if mean is None else known.observed(("mean", self.name, id(mean)), mean, self.horizon, self.name)
        return opaque(self.space, ingredients, reason, path)

    def _noise(self, source: Source, started: bool = False) -> Expression:
        return Expression(self.space, known.constant(0.0), Linear({At(self._base(source, (), started), 0): 1.0}))

    def _base(self, source: Source, phi: tuple[float, ...], started: bool) -> Base:
        key = (source.key, phi, started)
        return self._bases.setdefault(key, Base(source, phi, started))

    def _given_up(self, noise: Expression, reason: str) -> Expression:
        return opaque(self.space, (noise,), f"{self.name}: {reason}")

    def _filtered_mean(self, mean: Known, phi, theta, before_x, before_shocks) -> Known:
        if before_x is None:
            if mean.value is None:
                raise Unknown("a filter of a noise whose mean moves")
            return known.constant(mean.value * (1.0 + sum(theta)) / (1.0 - sum(phi)) if mean.value else 0.0)
        if mean.level or mean.slope or any(piece.key[0] != "past" for piece in mean.pieces):
            raise Unknown("a filter that starts from a given past, of a noise with a mean")
        return _forecast(self.name, phi, theta, tuple(before_x), tuple(before_shocks or ()))


def _coarser(period: float, k: int) -> float:
    """A period of a pattern that is read every k steps, in readings."""
    return lcm(int(period), k) / k if float(period).is_integer() else period / k


def _mean_path_at(x: Expression, steps: np.ndarray) -> np.ndarray:
    return x.mean_path.at(steps)


def _white(noise: Expression) -> Expression:
    """A noise that is no linear form, as the one white source that stands for it in filters."""
    return replace(noise.hidden("white"), outputs=noise.outputs) if "white" in noise.outputs else noise


def _trimmed(coefficients: Sequence[float]) -> tuple[float, ...]:
    values = [float(c) for c in coefficients]
    while values and values[-1] == 0.0:
        values.pop()
    return tuple(values)


def _times(one: tuple[float, ...], other: tuple[float, ...]) -> tuple[float, ...]:
    if not one or not other:
        return one or other
    whole = np.convolve([1.0, *(-c for c in one)], [1.0, *(-c for c in other)])
    return tuple((-whole[1:]).tolist())


def _forecast(name: str, phi, theta, before_x, before_shocks) -> Known:
    """The path that the recursion takes from a given past when no more shocks come."""
    p, q = len(phi), len(theta)
    if len(before_x) < p or len(before_shocks) < q:
        raise Unknown("a given past that is shorter than the recursion needs")
    # Shocks and values before step 0 reach it as a numerator of order max(p, q) - 1, over phi(B).
    reaching = np.zeros(max(p, q, 1))
    for weights, past in ((phi, before_x), (theta, before_shocks)):
        for i, weight in enumerate(weights, start=1):
            for t in range(i):
                reaching[t] += weight * past[t - i]
    ahead, past = PowerSeries(reaching, phi), np.array([np.nan, *before_x])

    def at(steps: np.ndarray) -> np.ndarray:
        steps = np.asarray(steps, np.int64)
        before = past[np.clip(steps + len(past), 0, len(past) - 1)]
        return np.where(steps < 0, before, ahead.at(np.maximum(steps, 0)))

    if not np.any(reaching) and not np.any(before_x):
        return known.constant(0.0)
    settles = spectral_radius(phi) < 1.0 - UNIT_ROOT
    note = f"{name} {LEAVES}" if settles else f"path of {name} from its given past"
    return known.whole(("forecast", name, phi, theta, before_x, before_shocks), at, note=note, settles=settles)
