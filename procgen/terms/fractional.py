"""Long memory: fractional differences with an ARMA part, and fractional Gaussian noise.

The weights of a fractional sum, ψ_j = Γ(j + d)/(Γ(d) Γ(j + 1)), are a mixture of exponentials (the beta integral),

    ψ_{j+1} = (sin πd)/π ∫ e^{−λj} e^{−λ(1+d)} (1 − e^{−λ})^{−d} dλ,

which the trapezoidal rule in log λ gives to e^{−π²/h}. So the sum is one over a fixed set of modes, autoregressions of
order one of the same shocks, whatever the number of steps. Those too slow to move in 1e9 steps are one mode that loses
nothing. Their past is drawn from its joint Gaussian law in closed form. The covariances are those of the ideal process
within 1e-11 of its variance. By `method: exact` they are those to rounding, 1e-12 of them at most (`terms/exact.py`),
for no more than 10,000 steps.
"""

from __future__ import annotations

from functools import lru_cache
from typing import ClassVar

import numpy as np

from procgen.chance.gamma import log_gamma
from procgen.chance.kernel import is_compiling, kernel
from procgen.chance.laws import Normal
from procgen.chance.portable import exp, log, lost, sin_turns
from procgen.spec.declare import Choice, Parameter, Real, Reals
from procgen.spec.records import dataclass
from procgen.terms.arma import not_causal, recursion
from procgen.terms.base import SD, TOTAL_SD, Ahead, Draw, Term, number, signed
from procgen.terms.exact import LONGEST_EXACT, NARROW, Exact, Predictors, added
from procgen.terms.start import companion, decay_length, partial_autocorrelations

NORMAL = Normal()
SPACING = 0.36  # h, of modes in log λ
FASTEST, SLOWEST = 10, -128  # modes at λ = e^{kh}: from 37 to 1e-20
STILL = 250  # slower ones, down to where they weigh nothing beside the slowest that moves
LONGEST_BURN = 2**15
TOGETHER = (
    "for a correlation of ρ at every lag add √ρ times one under shared: to √(1 − ρ) times its own in each series"
)
SMOOTH = 12  # beyond this lag a second difference of a power is taken by its series


@kernel
def remember(a, weights, lost, modes, out):
    """out[t] = a[t] + Σ weights · modes; then each mode loses its share and takes in a[t]."""
    n = weights.shape[0]
    for t in range(a.shape[0]):
        e = a[t]
        x = e
        for i in range(n):
            s = modes[i]
            x = x + weights[i] * s
            modes[i] = (s - lost[i] * s) + e
        out[t] = x


def remembered(a, weights, lost, modes, out):
    """`remember`, where few paths are not compiled by one call for all modes: the same sums in the same order."""
    if a.shape[1] >= NARROW or is_compiling():
        remember(a, weights, lost, modes, out)
        return
    parts = np.empty((len(weights) + 1, a.shape[1]))
    for t in range(len(a)):
        parts[0] = a[t]
        np.multiply(weights[:, None], modes, out=parts[1:])
        out[t] = np.add.accumulate(parts, axis=0)[-1]
        modes[:] = (modes - lost[:, None] * modes) + a[t]


@dataclass(frozen=True)
class Modes:
    """The modes of (1 − B)^−d: their weights, the share each loses a step, and the factor of their past (lower)."""

    weights: np.ndarray
    lost: np.ndarray
    factor: np.ndarray

    def past(self, z):
        """The modes just before step 0, (modes, paths), from as many standard normals, for shocks of sd 1."""
        total = self.factor[:, :1] * z[0]
        for weights, row in zip(self.factor[:, 1:].T, z[1:], strict=True):
            total = total + weights[:, None] * row
        return total


@lru_cache(maxsize=16)
def modes_of(d: float) -> Modes:
    """The modes for a memory parameter −0.5 < d < 0.5; the last one stands for all that are too slow to move."""
    rate, slow, rows = _grid()
    n = len(rate)
    total, level, left = 0.0, np.zeros(n), _level_variance(float(slow[0]), d)
    for share, row in zip(_weights(slow, d).tolist(), rows[n:], strict=True):
        total, level = total + share, level + share * row
    for part in level.tolist():
        left = left - part * part
    factor = np.zeros((n + 1, n + 1))
    factor[:n, :n] = rows[:n]
    if total:
        factor[n, :n], factor[n, n] = level / total, np.sqrt(max(left, 0.0)) / abs(total)
    return Modes(np.append(_weights(rate, d), total), np.append(lost(rate), 0.0), factor)


@lru_cache(maxsize=1)
def _grid():
    """The rates of the modes, those too slow to move, and the coordinates of all: whatever d is."""
    rate = exp(np.arange(FASTEST, SLOWEST - 1, -1) * SPACING)
    slow = exp(np.arange(SLOWEST - 1, SLOWEST - 1 - STILL, -1) * SPACING)
    return rate, slow, _factor(np.concatenate([rate, slow]), rate)


def _weights(rate, d):
    return _scale(d) * rate * exp(-rate * (1.0 + d) - d * log(lost(rate)))


def _scale(d):
    return float(sin_turns(d / 2.0)) / np.pi * SPACING


def _factor(rates, first):
    """Coordinates of modes along the orthonormal ones of the `first` of them, (rates, first).

    Modes of the same shocks have the covariances 1/(1 − e^{−(λᵢ+λₖ)}), whose factor is a product of terms
    (e^{−λᵢ} − e^{−λₘ})/(1 − e^{−(λᵢ+λₘ)}), in which nothing cancels (Takenaka 1925; Malmquist 1926).
    """
    out, left = np.zeros((len(rates), len(first))), np.ones(len(rates))
    for k, own in enumerate(first.tolist()):
        both = lost(rates + own)
        out[k:, k] = (left * np.sqrt(float(lost(2.0 * own))) / both)[k:]
        apart = lost(np.abs(rates - own)) * exp(-np.minimum(rates, own))
        left = left * (np.where(rates < own, apart, -apart) / both)
    return out


def _level_variance(fastest, d):
    """The variance of all modes at λ ≤ `fastest`, tiny, as geometric sums of w w′/(λ + λ′), w ∝ λ^{1−d}."""
    n, pairs = np.arange(1.0, 400.0), 0.5
    for each in (2.0 * exp(-n * SPACING * (1.0 - d)) / (1.0 + exp(-n * SPACING))).tolist():
        pairs = pairs + each
    decay = (1.0 - 2.0 * d) * SPACING
    return _scale(d) * _scale(d) * float(exp((1.0 - 2.0 * d) * log(fastest))) * pairs / float(lost(decay))


def _burn(phi, theta):
    """Steps after which the filter has forgotten where it began."""
    return len(theta) + (decay_length(companion(phi, (), len(phi), 0)[0]) if phi else 0)


def _filter_covariances(phi, theta):
    """Autocovariances of the filter of unit white noise at lags 0, 1, … until they are forgotten."""
    count = 2 * _burn(phi, theta) + 1
    pulse, psi = np.zeros((len(theta) + count, 1)), np.zeros((len(phi) + count, 1))
    pulse[len(theta)] = 1.0
    recursion(np.array(phi), np.array(theta), psi, pulse)
    weights, gamma = psi[len(phi) :, 0], np.zeros(count)
    for j, weight in enumerate(weights.tolist()):
        gamma[: count - j] = gamma[: count - j] + weight * weights[j:]
    return gamma


def _memory(d, count):
    """Autocorrelations of the fractional sum at lags 0 … count − 1 (Hosking 1981)."""
    lags = np.arange(1.0, count)
    return np.append(1.0, np.multiply.accumulate((lags - 1.0 + d) / (lags - d)))


def _variance(d, phi, theta):
    """The variance of the filtered fractional sum of shocks of sd 1: autocovariances of both, multiplied."""
    gamma = _filter_covariances(phi, theta)
    products = gamma * _memory(d, len(gamma))
    whole = products[0] + 2.0 * added(products[1:])
    return whole * float(exp(log_gamma(1.0 - 2.0 * d) - 2.0 * log_gamma(1.0 - d)))


@lru_cache(maxsize=8)
def _predictors(d, phi, theta):
    """Of the filtered fractional sum: its autocovariances are the convolution of both (Doornik & Ooms 2003)."""
    filtered = _filter_covariances(phi, theta).tolist()
    count = len(filtered)
    memory = _memory(d, LONGEST_EXACT + count)
    both, total = np.concatenate([memory[count - 1 : 0 : -1], memory]), np.zeros(LONGEST_EXACT)
    for j in range(count - 1, 0, -1):  # the smallest first
        near, far = count - 1 - j, count - 1 + j
        total = total + filtered[j] * (both[near : near + LONGEST_EXACT] + both[far : far + LONGEST_EXACT])
    total = total + filtered[0] * memory[:LONGEST_EXACT]
    return Predictors(total / total[0])


class Arfima(Term):
    kind = "arfima"
    smooth = "filter"
    family = "linear"
    purpose = "a long memory: an ARMA filter of fractionally summed shocks, whose autocorrelations fall like k^(2d − 1)"
    source = "Granger & Joyeux (1980); Hosking (1981)"
    example = "arfima: {d: 0.3, phi: 0.4, sd: 1}"
    knows = "autocovariance at any lag; Gaussian law; strictly stationary"
    together = TOGETHER
    no_past = "a long memory has no past that could be drawn step by step; lag less"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("d", "d", Real(above=-0.5, below=0.5), "memory: above 0 long, below 0 a rough series without level"),
        Parameter("phi", "φ", Reals(), "coefficients of x[t−1], x[t−2], …", default=()),
        Parameter("theta", "θ", Reals(), "coefficients of the fractional sum one, two, … steps ago", default=()),
        SD,
        TOTAL_SD,
        Parameter(
            "method",
            "",
            Choice("mixture", "exact"),
            "how it is drawn: as a mixture of exponentials, for any number of steps, with autocovariances within 1e-11 "
            f"of the variance; or each value from all before it, with exact ones, for at most {LONGEST_EXACT:,} steps "
            "and at a cost that grows with their square (Durbin 1960; Levinson 1947)",
            default="mixture",
        ),
    )

    def __init__(self, values):
        super().__init__(values)
        if self._is_exact:
            self.longest, self.fewer = LONGEST_EXACT, "ask for fewer, or leave out `method: exact`"

    @classmethod
    def check(cls, values):
        phi = values["phi"]
        if partial_autocorrelations(phi) is None:
            yield "phi", not_causal(phi, "put the term without that root inside `integrate`").partition(", or give")[0]
        elif _burn(phi, values["theta"]) > LONGEST_BURN:
            yield "phi", f"expected a filter that forgets within {LONGEST_BURN:,} steps; shrink phi"

    def draws(self):
        return (Draw("innovation", NORMAL),)

    def shock_sd(self):
        """Standard deviation of the shock, in the series' unit."""
        if self.sd is not None:
            return self.sd
        return self.total_sd / float(np.sqrt(_variance(self.d, self.phi, self.theta)))

    def past(self):
        return 0

    @property
    def _is_exact(self):
        return self.method == "exact"

    def exact(self):
        """What draws it by `method: exact`."""
        if self.total_sd is not None:
            sd = self.total_sd
        else:
            sd = self.sd * float(np.sqrt(_variance(self.d, self.phi, self.theta)))
        return Exact(_predictors(self.d, self.phi, self.theta), sd)

    def reach(self, head):
        return (0 if self._is_exact else _burn(self.phi, self.theta),)

    def begin(self, before):
        if self._is_exact:
            return None, self.exact().begin()
        modes = modes_of(self.d)
        state = {"modes": self.shock_sd() * modes.past(before.normals(len(modes.weights)))}
        state |= {"x": np.zeros((len(self.phi), 1)), "f": np.zeros((len(self.theta), 1))}
        (count,) = self.reach(0)
        if count:
            _, state = self.recurse((before.inputs[0][len(before.inputs[0]) - count :],), state, None)
        return None, state

    def recurse(self, inputs, state, at):
        if self._is_exact:
            return self.exact().draw(inputs[0], state)
        return self._filter(self.shock_sd() * inputs[0], state)

    @property
    def undoes(self):
        return self._is_exact

    def invert(self, values, known, state, at):
        return self.exact().undo(values, state)

    def _filter(self, a, state):
        modes, p, q = modes_of(self.d), len(self.phi), len(self.theta)
        kept = np.array(np.broadcast_to(state["modes"], (len(modes.weights), a.shape[1])))
        f, x = np.empty((q + len(a), a.shape[1])), np.empty((p + len(a), a.shape[1]))
        f[:q], x[:p] = state["f"], state["x"]
        remembered(a, modes.weights, modes.lost, kept, f[q:])
        recursion(np.array(self.phi), np.array(self.theta), x, f)
        return x[p:], {"modes": kept, "x": x[len(x) - p :].copy(), "f": f[len(f) - q :].copy()}

    def ahead(self, steps, state, noise):
        if self._is_exact:
            return self.exact().ahead(len(steps), state)
        mean, _ = self._filter(np.zeros((len(steps), state["modes"].shape[1])), state)
        pulse = np.zeros((len(steps), 1))
        pulse[:1] = self.shock_sd()
        psi, _ = self._filter(pulse, {name: np.zeros((len(part), 1)) for name, part in state.items()})
        return Ahead(mean, np.cumsum(psi * psi, axis=0))

    def moments(self, axis, *inputs):
        return axis.fractional(axis.source(self.address, NORMAL, self.shock_sd()), self.d, self.phi, self.theta)

    def equation(self, *inputs):
        left = "".join(f" {signed(-c, f'x[t−{i}]')}" for i, c in enumerate(self.phi, start=1))
        right = "".join(f" {signed(c, f'f[t−{j}]')}" for j, c in enumerate(self.theta, start=1))
        drawn = ",  drawn from its exact autocovariances" if self._is_exact else ""
        sum_of_shocks = f"(1 − B)^{number(self.d)} f[t] = a[t],  sd a = {number(self.shock_sd())}"
        return f"x[t]{left} = f[t]{right},  {sum_of_shocks}{drawn}"


@lru_cache(maxsize=8)
def _predictors_of_noise(hurst):
    return Predictors(_fractional_gaussian(hurst, LONGEST_EXACT))


def _fractional_gaussian(hurst, longest):
    """Autocovariances (|k + 1|^2H − 2|k|^2H + |k − 1|^2H)/2 at lags 0 … longest; far out by their series."""
    power, k = 2.0 * hurst, np.arange(0.0, longest + 2.0)
    whole = np.append(0.0, exp(power * log(k[1:])))
    near = np.append(1.0, (whole[2:] - 2.0 * whole[1:-1] + whole[:-2]) * 0.5)
    k = np.maximum(k[:-1], SMOOTH)
    term, square, series = power * (power - 1.0) * 0.5, 1.0 / (k * k), np.zeros(len(k))
    shrinking = exp(power * log(k))
    for n in range(2, 16, 2):
        shrinking = shrinking * square
        series = series + term * shrinking
        term = term * (power - n) * (power - n - 1) / ((n + 1) * (n + 2))
    return np.where(np.arange(len(k)) > SMOOTH, series, near)


class FractionalGaussianNoise(Term):
    kind = "fractional_gaussian_noise"
    smooth = "filter"
    family = "linear"
    purpose = "the increments of fractional Brownian motion: a long memory that looks alike at every scale"
    source = "Mandelbrot & Van Ness (1968); drawn by the recursion of Durbin (1960) and Levinson (1947)"
    example = "fractional_gaussian_noise: {hurst: 0.7, sd: 1}"
    knows = "autocovariance at any lag; Gaussian law; strictly stationary"
    longest = LONGEST_EXACT
    together = TOGETHER
    no_past = "it is drawn from step 0 on, each value from all before; lag less"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("hurst", "H", Real(above=0, below=1), "its exponent: above 1/2 a long memory, below it a rough one"),
        Parameter("sd", "σ", Real(above=0), "standard deviation of the noise itself", unit="series"),
    )

    def draws(self):
        return (Draw("innovation", NORMAL),)

    def past(self):
        return 0

    def exact(self):
        return Exact(_predictors_of_noise(self.hurst), self.sd)

    def begin(self, before):
        return None, self.exact().begin()

    def recurse(self, inputs, state, at):
        return self.exact().draw(inputs[0], state)

    def invert(self, values, known, state, at):
        return self.exact().undo(values, state)

    def ahead(self, steps, state, noise):
        return self.exact().ahead(len(steps), state)

    def moments(self, axis, *inputs):
        return axis.fractional_gaussian(axis.source(self.address, NORMAL, 1.0), self.hurst, self.sd)

    def equation(self, *inputs):
        h = number(2.0 * self.hurst)
        return f"x[t] = B(t + 1) − B(t),  Var(B(t) − B(s)) = {number(self.sd)}²·|t − s|^{h}"
