"""How the shocks of a series are recovered: by undoing its one source, or as Kalman innovations of a Gaussian sum.

Also: what the recovered shocks of two series must have in common.
"""

from __future__ import annotations

import zlib
from collections import OrderedDict
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.chance.kernel import is_compiling
from procgen.checks.blocks import in_few
from procgen.checks.few import Few, few_of
from procgen.checks.kalman import Kalman
from procgen.checks.scores import Scores
from procgen.checks.short import soon_forgotten
from procgen.checks.tied import shock_of
from procgen.theory.doubles import Rounding

LARGEST_STATE = 300  # elements of the state up to which a Kalman filter is run
SMALL_STATE = 64  # up to here it is preferred to undoing: it also knows how the series starts
COARSE = 0.5  # rounding beyond this share of the shock's standard deviation hides the shock
SPREAD = 2e-3  # the same of double precision's own rounding, which shocks show but in part
UNSPREAD = 1e-6  # the same where they cannot be spread over its cells
SPAN = 50  # lags over which correlations between two series' shocks are followed
_CACHED = 1 << 18  # means of steps that are kept
FEW = ("among the law's values", "are none of the values of the stated law", "every shock is one of them")
_BEYOND = 10.0  # no rounding moves a shock by more than this many times its own standard deviation


class Cannot(str):
    """Why the shocks of a series cannot be recovered, in words."""


@dataclass
class Route:
    """The way to one series' shocks.

    Attributes
    ----------
    scores : Scores
        Of the law of the shocks that come out.
    words : str
        How they are recovered.
    source : object
        The primary source behind an undone series; None for innovations.

    `scores` is None where the law of what comes out is not known: prediction errors of shocks that are not normal.
    """

    series: str
    scores: Scores | None
    words: str
    theory: Any
    graph: Any
    grain: float
    kalman: Kalman | None = None
    source: Any = None
    watched: tuple[str, ...] = ()  # events with a known chance that are counted on the way
    ranked: float | None = None  # the grain, which ranks take in exactly, where ranks given the past stand for shocks
    strayed: float = 0.0  # how far rounding has brought whole numbers behind the series from what they are, at most
    hidden: bool = False  # whether these ranks follow states that are not seen
    few: Few | None = None  # how shocks of a law of few values are told apart; what comes out are then ranks
    forgotten: float | None = None  # share of an unknown first variance that may be left in the shocks
    salt: str = ""  # told apart by it: what spreads the values of one seed is not what spreads those of another
    stopped: str = ""  # why a tile could not be undone
    own: float = 0.0  # the grain over the sd of shocks, where it is double precision's own: no value lies within a cell
    _means: OrderedDict[tuple[int, int], NDArray] = field(default_factory=OrderedDict, repr=False)

    def start(self, first_path: int, paths: int) -> Any:
        """A carrier for `paths` paths from `first_path` on, before step 0."""
        if self.kalman is not None:
            return self.kalman.start(paths)
        from procgen.checks.special import ranked
        from procgen.checks.undo import undone

        if self.ranked is not None:
            return ranked(self.graph, self.series, self.theory, self.ranked, self.strayed)
        return undone(self.graph, self.series, self.theory, first_path, paths, self.forgotten)

    def tile(
        self, x: NDArray, carrier: Any, first_path: int, first_step: int, out: NDArray | None = None
    ) -> tuple[NDArray, Any]:
        """Standardised shocks (steps, paths) of the next tile of values, and the carrier after it.

        `out`: memory that they may be put in.
        """
        if self.ranked is not None and carrier is not None:
            v = self._dither(x, first_path, first_step) + 0.5
            with np.errstate(all="ignore"):
                z = carrier.tile(x, v)
            return self._taken(z, x, carrier)
        if self.own and self.kalman is not None:  # what is spread is the distance from the mean
            x = x - self._mean(first_step, len(x))[:, None]
            x += self.grain * self._dither(x, first_path, first_step)
            return self.kalman.innovations(x, carrier, first_step, out=out)
        if self.grain and not self.own:
            x = x + self.grain * self._dither(x, first_path, first_step)
        if self.kalman is not None:
            return self.kalman.innovations(x, carrier, first_step, self._mean(first_step, len(x)), out)
        if carrier is not None:
            with np.errstate(all="ignore"):
                z = carrier.tile(x)
            if self.own and isinstance(z, np.ndarray):
                z = z + self.own * self._dither(x, first_path, first_step)
            if self.few is not None and isinstance(z, np.ndarray):
                z = self.few.ranks(z, self._dither(x, first_path, first_step, " ") + 0.5)
            return self._taken(z, x, carrier)
        return np.full(x.shape, np.nan), None

    def _dither(self, x: NDArray, first_path: int, first_step: int, end: str = "") -> NDArray:
        return dither(first_path, x.shape[1], first_step, x.shape[0], self.series + self.salt + end)

    def _taken(self, z: Any, x: NDArray, carrier: Any) -> tuple[NDArray, Any]:
        """What came out of a carrier; what could not be undone once is not taken up again."""
        if isinstance(z, np.ndarray):
            return z, carrier
        self.stopped = z.reason
        return np.full(x.shape, np.nan), None

    def allow(self, noise: float) -> None:
        """Rounding adds the variance `noise` to a shock: so far it may carry one beyond the ends of its law."""
        if self.scores is not None and self.few is None and noise < 1.0:
            self.scores.room = max(self.scores.room, min(_BEYOND * noise**0.5, COARSE))

    def needed(self, most: int) -> int | None:
        """Steps until the first shock comes out of values that the spec itself draws; None beyond `most`."""
        from procgen.terms.by_path import run as run_of

        run, carrier, step = run_of(self.graph, 0, 1), self.start(0, 1), 0
        ends = [node.term.longest for node in self.graph.order() if getattr(node, "term", None)]
        most = min([most, *(end for end in ends if end is not None)])  # no more can be drawn of some
        while step < most and carrier is not None:
            z, carrier = self.tile(run.tile(min(256, most - step))[self.series], carrier, 0, step)
            known = np.isfinite(z[:, 0])
            if known.any():
                return step + int(np.argmax(known)) + 1
            step += 256
        return None

    def _mean(self, first: int, steps: int) -> NDArray:
        key = (first, steps)
        if key not in self._means:
            if len(self._means) * steps >= _CACHED:
                self._means.popitem(last=False)
            self._means[key] = np.asarray(self.theory.mean(np.arange(first, first + steps)), float)
        return self._means[key]


def dither(first_path: int, paths: int, first_step: int, steps: int, series: str = "") -> NDArray:
    """Numbers in (-1/2, 1/2), a fixed function of series, path and step: they spread values over their cells.

    Series must not share them: what is spread alike would look correlated.
    """
    salt = np.uint64(zlib.crc32(series.encode()) * 0x8CB92BA72F3D8DD7 % 2**64)
    if is_compiling():
        out = np.empty((steps, paths))
        in_few("dithered", first_path, first_step, salt, paths, out.reshape(-1))
        return out
    step = np.arange(first_step, first_step + steps, dtype=np.uint64)[:, None]
    path = np.arange(first_path, first_path + paths, dtype=np.uint64)[None, :]
    x = step * np.uint64(0x9E3779B97F4A7C15) + path * np.uint64(0xD1B54A32D192ED03) + salt
    for shift, factor in ((30, 0xBF58476D1CE4E5B9), (27, 0x94D049BB133111EB)):
        x ^= x >> np.uint64(shift)
        x *= np.uint64(factor)
    x ^= x >> np.uint64(31)
    return (x >> np.uint64(11)).astype(float) * 2.0**-53 - (0.5 - 2.0**-54)


def route(
    name: str, theory: Any, graph: Any, grain: float, same_draws: bool = True, size: tuple[int, int] = (0, 0)
) -> Route | Cannot:
    """The best way to the shocks of a series, or why there is none.

    `same_draws`: whether path p of the data has the drawn parameters of path p of the spec. `size`: numbers of paths
    and steps, where few steps are to be made the most of.
    """
    from procgen.chance.laws import LAWS
    from procgen.checks.special import ranked, strayed
    from procgen.terms.base import Unknown
    from procgen.terms.hidden_states import HiddenStates
    from procgen.terms.ranks import Ranking
    from procgen.terms.recover import recovery

    if not same_draws and getattr(theory, "mixture", None) is not None:
        return Cannot("the parameters of its paths are drawn, and not known of data that this spec has not drawn")

    system = theory.system() if theory.gaussian else None
    states = len(system.initial) if system is not None and system.noise_path is None else LARGEST_STATE + 1
    if states == 0 or (system is not None and not np.any(system.noise)):
        return Cannot("nothing is left to chance")
    undone = recovery(graph, name, 1)
    if states <= (LARGEST_STATE if not undone else SMALL_STATE):
        return _by_filter(name, theory, graph, grain, system)
    if isinstance(undone, Unknown):
        off = strayed(graph, name, theory, grain, size[1])
        ranks = ranked(graph, name, theory, grain, off)
        if isinstance(ranks, Ranking):
            words = f"ranks of {name} given its past"
            term = ranks.node.term
            way = Route(name, Scores(LAWS["uniform"]()), words, theory, graph, 0.0, ranked=grain, watched=term.watched)
            return replace(way, strayed=off, hidden=isinstance(term, HiddenStates))
        return _by_projection(name, theory, graph, grain, undone.reason if ranks is None else ranks.reason)
    words = f"recovered by undoing {name} down to {undone.source.name}"
    blurred = any(node.term.blurs for node in undone.nodes)
    few, left = few_of(undone.source.law, recovery(graph, name, 2), grain, blurred)
    if few is not None:
        scores, words = Scores(LAWS["uniform"](), FEW), f"ranks of the shocks, {words}"
        return Route(name, scores, words, theory, graph, left, source=undone.source, few=few)
    forgotten = None if getattr(theory, "mixture", None) is not None else soon_forgotten(undone.nodes, *size)
    return Route(
        name, Scores(undone.source.law), words, theory, graph, grain, source=undone.source, forgotten=forgotten
    )


def in_doubles(way: Route | Cannot, rounding: Rounding | None) -> Route | Cannot:
    """The way to shocks of values that double precision itself rounds, which shows in few of its ways."""
    if rounding is None or isinstance(way, Cannot):
        return way
    if way.kalman is None and rounding.share > (UNSPREAD if way.few is not None or way.ranked is not None else SPREAD):
        return Cannot(str(rounding))
    return replace(way, own=rounding.share if way.few is None else 0.0)


def _by_filter(name: str, theory: Any, graph: Any, grain: float, system: Any) -> Route | Cannot:
    from procgen.chance.laws import LAWS

    # Rounding adds grain²/12, and so does spreading the rounded values over their cells.
    kalman = _kalman(system, 0, grain * grain / 6)
    if theory.mean(np.array([0])) is None:
        return Cannot(theory.reason("mean") or "its mean is not known")
    kalman.prepare(256)
    if grain > COARSE * max(kalman.roots):
        return Cannot(f"values are rounded to {grain:g}, too coarse for shocks of sd {max(kalman.roots):.3g}")
    words = f"one-step prediction errors of {name} (Kalman filter)"
    return Route(name, Scores(LAWS["normal"]()), words, theory, graph, grain, kalman)


def _by_projection(name: str, theory: Any, graph: Any, grain: float, reason: str) -> Route | Cannot:
    """Prediction errors of a linear series whose shocks are not all normal."""
    system = theory.system()
    if system is None or system.noise_path is not None or not np.isfinite(system.noise).all():
        return Cannot(reason)
    if len(system.initial) > LARGEST_STATE:
        return Cannot(f"{reason}; its state has {len(system.initial)} elements")
    way = _by_filter(name, theory, graph, grain, system)
    return way if isinstance(way, Cannot) else replace(way, scores=None)


def _kalman(system: Any, row: int, rounding: float) -> Kalman:
    q = system.loading @ system.noise @ system.loading.T
    return Kalman(system.transition, q, system.observation[row], system.initial, rounding)


@dataclass
class Expected:
    """Correlations of the shocks of two series: `at[lag]` is that of the first at t with the second at t - lag.

    They hold from step `ready` on; `unknown` says why they are not known. `tie` is what ties shocks that are not
    jointly normal, `oriented` the same with signs turned so that they tend to go together.
    """

    at: dict[int, float] = field(default_factory=dict)
    ready: int = 0
    unknown: str = ""
    tie: Any = None

    @property
    def same_sides(self) -> bool:
        return self.at.get(0, 0.0) >= 0.0

    @property
    def oriented(self) -> Any:
        return self.tie if self.tie.rho >= 0.0 else self.tie.turned()


def expected(a: Route, b: Route, space: Any) -> Expected:
    """What theory says of the shocks of two series together."""
    left, right = _sources(a, space), _sources(b, space)
    if left is None or right is None:
        return Expected(unknown="a source of theirs is not known to theory")
    if not any(space.dependent(x, y) for x in left for y in right):
        return Expected()
    if a.ranked is not None or b.ranked is not None:
        return Expected(unknown="what the ranks of two dependent series have in common is not computed")
    if a.few is not None or b.few is not None:
        return Expected(unknown="what the ranks of dependent shocks of few values have in common is not computed")
    if space.tied(left, right):
        return _of_tied(a, b, space)
    if a.kalman is None and b.kalman is None:
        return Expected({0: space.normal_correlation(left[0], right[0])})
    if a.kalman is not None and b.kalman is not None:
        return _of_two_filters(a, b, space)
    if a.kalman is None:
        return _mirrored(_of_filter_and_source(b, left[0], space))
    return _of_filter_and_source(a, right[0], space)


def _of_tied(a: Route, b: Route, space: Any) -> Expected:
    """Two shocks of one step that are not jointly normal."""
    one, other = shock_of(a), shock_of(b)
    if one is None or other is None:
        why = "their shocks are not jointly normal: what their prediction errors have in common is not computed"
        return Expected(unknown=why)
    tie = space.tie(space.sources[one[0]], space.sources[other[0]])
    return Expected({0: one[1] * other[1] * tie.scores[0]}, max(one[2], other[2]), tie=tie)


def _sources(r: Route, space: Any) -> list[Any] | None:
    if r.kalman is None and r.ranked is None:
        return [space.sources[r.source.name]] if r.source.name in space.sources else None
    return list(r.theory.expression.sources)


def _mirrored(e: Expected) -> Expected:
    return Expected({-lag: c for lag, c in e.at.items()}, e.ready, e.unknown)


def _of_filter_and_source(a: Route, source: Any, space: Any) -> Expected:
    """Innovations of `a` at t against the normal score of `source` at t - lag."""
    system = a.theory.system()
    filter_ = _kalman(system, 0, a.grain * a.grain / 6)
    ready = filter_.prepare()
    sds = np.sqrt(np.diag(system.noise))
    shared = [space.normal_correlation(space.sources[name], source) for name in system.sources]
    push = system.loading @ (sds * np.array(shared))
    closed = filter_.a - np.outer(filter_.gains[-1], filter_.c)
    at = {}
    for lag in range(SPAN + 1):
        at[lag] = float(filter_.c @ push) / filter_.roots[-1]
        push = closed @ push
    return Expected(at, ready)


def _of_two_filters(a: Route, b: Route, space: Any) -> Expected:
    """Both prediction errors in one joint state space; their covariance is followed until it settles."""
    from procgen.theory.system import system_of
    from procgen.theory.unknown import Unknown

    try:
        joint = system_of(space, (a.theory.expression.linear, b.theory.expression.linear))
    except Unknown as unknown:
        return Expected(unknown=unknown.reason)
    if len(joint.initial) > LARGEST_STATE:
        return Expected(unknown=f"their joint state has {len(joint.initial)} elements")
    one, two = _kalman(joint, 0, a.grain * a.grain / 6), _kalman(joint, 1, b.grain * b.grain / 6)
    steps = max(one.prepare(), two.prepare())
    x, last = joint.initial, np.inf
    for step in range(4 * steps + 200):
        k, m = min(step, len(one.gains) - 1), min(step, len(two.gains) - 1)
        roots = one.roots[k] * two.roots[m]
        now = float(one.c @ x @ two.c) / roots if roots else 0.0
        if step >= steps and abs(now - last) < 1e-10:
            break
        last = now
        x = (one.a - np.outer(one.gains[k], one.c)) @ x @ (two.a - np.outer(two.gains[m], two.c)).T + one.q
    at = {}
    ahead, behind = x, x
    for lag in range(SPAN + 1):
        at[lag] = float(one.c @ ahead @ two.c) / roots
        at[-lag] = float(one.c @ behind @ two.c) / roots
        ahead = (one.a - np.outer(one.gains[-1], one.c)) @ ahead
        behind = behind @ (two.a - np.outer(two.gains[-1], two.c)).T
    return Expected(at, step)
