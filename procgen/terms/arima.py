"""Integrated filters: ARIMA and its seasonal form, whose differences are stationary."""

from __future__ import annotations

from dataclasses import replace
from typing import ClassVar

import numpy as np

from procgen.chance.kernel import kernel
from procgen.spec.declare import Parameter, Real, Reals, Record, Span, Whole
from procgen.terms.arma import PAST_SHOCKS, Arma, not_causal
from procgen.terms.base import LAW, PAST_VALUES, SD, Ahead, Term, Unknown, number, rows, signed, stated, without_gap
from procgen.terms.rows import alike
from procgen.terms.start import partial_autocorrelations


@kernel
def accumulate(delta, back, w, x):
    """x[t] = w[t] + Σ δ x[t − back]; the first rows of `x` are its past, oldest first."""
    n = x.shape[0] - w.shape[0]
    for t in range(w.shape[0]):
        v = w[t]
        for i in range(delta.shape[0]):
            v = v + delta[i] * x[t + n - back[i]]
        x[t + n] = v


SHOCK_SD = replace(SD, per=None, no_per="the coefficients beside it belong to the length of a step")


class Integrated(Term):
    """x[t] = Σ δ x[t−i] + μ + w[t]: unit roots δ over a stationary filter w, from given values up to step 0.

    Subclasses set `core` (the filter), `delta`, `known` (as many values as delta has, the last one at step 0,
    oldest first) and `level` (μ). With `before`, its values lie before step 0 and step 0 is the first random one.
    Before step 0 the recursion is followed backwards, so that its differences are w on both sides.
    """

    takes_shock = True
    core: Arma
    delta: tuple[float, ...] = ()
    known: tuple[float, ...] = ()
    level: float = 0.0
    even: bool = True  # whether the recursion is the same at all steps

    def shock_sd(self):
        return self.sd

    def stationary(self):
        """The filter below as a member of a joint start; None where the term leaves from a given past."""
        self.core.shock_scale = self.shock_scale
        return None if self.before is not None else self.core.stationary()

    def past(self):
        return None if self.before is None else len(self.before["x"])

    def reach(self, head):
        return (0,) if self.before is not None else self.core.reach(head)

    def reach_by_path(self, head):
        return None if self.before is not None else self.core.reach_by_path(head)

    def begin(self, before):
        n, p, q = len(self.delta), len(self.core.phi), len(self.core.theta)
        if self.before is not None:
            x, a = rows(self.before["x"]), rows(self.before.get("shocks", ()))
            w = self._differenced(x)
            state = {"x": x[len(x) - n :], "w": w[len(w) - p :], "a": a[len(a) - q :]}
            return x[len(x) - before.head :], state
        self.core.shock_scale = self.shock_scale
        w, core = self.core.begin(before)
        state = {"x": _rows(self.known[:-1]), "w": core["x"], "a": core["a"]}
        if not n:
            return w + self.level, state
        if not before.head:
            return None, state
        now, _ = self.core.recurse((before.peek(0),), core, None)
        return self._backwards([now[0], *w[::-1]], before.head), state

    def _differenced(self, x):
        """w of the rows of x behind the first ones."""
        n = len(self.delta)
        w = x[n:] - self.level
        for i, c in enumerate(self.delta, start=1):
            if c:
                w = w - c * x[n - i : len(x) - i]
        return w

    def _backwards(self, w, head):
        """Values at steps −head … −1 from w at steps 0, −1, …"""
        n, x = len(self.delta), [np.full(w[0].shape, v) for v in self.known[::-1]]
        for k in range(head - n + 1):
            v = x[k] - (w[k] + self.level)
            for i, c in enumerate(self.delta[:-1], start=1):
                if c:
                    v = v - c * x[k + i]
            x.append(v / self.delta[-1])
        return np.array(x[head:0:-1])

    def shown_past(self, lags=0, shocks=0):
        """What an equation says of the values up to step 0, or before it, that the recursion goes on from."""
        n = len(self.delta)
        if self.before is None:
            return [stated("x", self.known, 0) if any(self.known) else "x = 0 up to step 0"] if n else []
        x, a = self.before["x"], self.before.get("shocks", ())
        return [text for text in (stated("x", x[len(x) - n - lags :]), stated("a", a[len(a) - shocks :])) if text]

    def recurse(self, inputs, state, at):
        w, core = self.core.recurse(inputs, {"x": state["w"], "a": state["a"]}, at)
        n, w, past = len(self.delta), w + self.level, state["x"]
        first = len(past) < n  # step 0 is the last of the known values
        if first:
            past, w = _rows(self.known), w[1:]
        x = np.empty((n + len(w), w.shape[1] if n == 0 else max(w.shape[1], past.shape[1])))
        x[:n] = past
        back = [i for i, c in enumerate(self.delta, start=1) if c]
        accumulate(np.array([self.delta[i - 1] for i in back]), np.array(back, dtype=np.int64), w, x)
        return x[n - first :], {"x": x[len(x) - n :].copy(), "w": core["x"], "a": core["a"]}

    def invert(self, values, known, state, at):
        n = len(self.delta)
        values, gap = without_gap(values, 0.0)
        if state is None:
            given = self.before["x"][-n:] if self.before is not None else (0.0, *self.known[:-1])
            # What lies n steps before step 0 is not known, and neither is w at step 0.
            skip = int(n > 0 and self.before is None)
            state = {"x": rows(given[:n]), "skip": np.array([skip])}
        skip = gap + n if gap else int(state["skip"][0])
        x = np.concatenate([np.broadcast_to(state["x"], (n, values.shape[1])), values])
        w = self._differenced(x)
        w[:skip] = np.nan
        inner = {name[5:]: part for name, part in state.items() if name.startswith("core ")}
        answer = self.core.invert(w, known, inner or None, at)
        if isinstance(answer, Unknown):
            return answer
        left = {"x": x[len(x) - n :].copy(), "skip": np.array([max(0, skip - len(values))])}
        return answer[0], left | {f"core {name}": part for name, part in answer[1].items()}

    def ahead(self, steps, state, noise):
        count = max([1, *(part.shape[1] for part in state.values())])
        mean, _ = self.recurse((np.zeros((len(steps), count)),), state, steps)
        still = {name: np.zeros((len(part), 1)) for name, part in state.items()}
        pulses = np.concatenate([np.zeros((len(steps), 1)), np.eye(len(steps))], axis=1)
        x, _ = self.recurse((pulses,), still, steps)  # the first column is what no shock gives
        response = x[:, 1:] - x[:, :1]
        return Ahead(mean, (response * response) @ noise.variance)

    def _given(self, axis, noise):
        """Theory of a term that leaves from a given past: its mean less the path that the drift alone makes."""
        phi = tuple(-c for c in _times(_ar(self.core.phi), _ar(self.delta))[1:])
        count = len(self.before["x"])
        x = np.array(self.before["x"]) - self.path(np.arange(-count, 0), drifting=True)
        x = axis.filtered(noise, phi, self.core.theta, tuple(x), tuple(self.before.get("shocks", ())))
        return x + axis.known(lambda steps: self.path(steps, drifting=True))


class Arima(Integrated):
    kind = "arima"
    smooth = "filter"
    family = "linear"
    purpose = "a filter of shocks, integrated: its differences are an arma, with a seasonal part if there is one"
    source = "Box & Jenkins (1970), ch. 4 and 9; regression signs"
    example = "arima: {d: 1, theta: -0.4, seasonal: {period: 4, d: 1, theta: -0.3}, sd: 0.037}"
    knows = "mean and covariance at any steps, its differences stationary from step 1 on; Gaussian for normal shocks"
    by_rows = ("phi", "theta", "drift", "start", "sd")
    begins_by_rows = True
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("phi", "φ", Reals(), "coefficients of w[t−1], w[t−2], …, w the differenced series", default=()),
        Parameter("d", "d", Whole(at_least=0, at_most=4), "how often the differences 1 − B are taken"),
        Parameter("theta", "θ", Reals(), "coefficients of a[t−1], a[t−2], …", default=()),
        Parameter(
            "seasonal",
            "",
            Record(
                Parameter("period", "s", Span(), "length of a season, a whole number of steps", unit="steps"),
                Parameter("phi", "Φ", Reals(), "coefficients at lags s, 2s, …", default=()),
                Parameter("d", "D", Whole(at_least=0, at_most=3), "how often 1 − Bˢ is taken", default=0),
                Parameter("theta", "Θ", Reals(), "coefficients of a[t−s], a[t−2s], …", default=()),
            ),
            "seasonal polynomials, multiplied with the others",
            default=None,
        ),
        Parameter("drift", "μ", Real(), "mean of the differenced series w", default=0.0, unit="series"),
        Parameter(
            "start",
            "x₀",
            Reals(),
            "the d + s·D values up to step 0, oldest first, the last at step 0; one stands for all, 0 when absent",
            default=None,
            unit="series",
        ),
        SHOCK_SD,
        LAW,
        Parameter(
            "before",
            "",
            Record(PAST_VALUES, PAST_SHOCKS),
            "what came before step 0; then step 0 is the first random step, and `start` is not used",
            default=None,
        ),
    )

    @classmethod
    def check(cls, values):
        season = values["seasonal"]
        if season is not None and not (season["period"].is_integer() and 2 <= season["period"] <= LONGEST):
            yield (
                "seasonal",
                f"expected a period of a whole number of steps from 2 to {LONGEST:,}, got {number(season['period'])}",
            )
            return
        parts = cls._parts(values)
        yield from _lengths(values, *(len(part) for part in parts))
        if values["before"] is None:
            for name, phi in (("phi", values["phi"]), ("seasonal", season["phi"] if season else ())):
                if partial_autocorrelations(phi) is None:
                    yield name, not_causal(phi, "write a unit root as `d`")

    @staticmethod
    def _parts(values):
        """Coefficients of the whole phi, theta and delta, each from lag 1 on."""
        season = values["seasonal"] or {"period": 1, "phi": (), "d": 0, "theta": ()}
        period = int(season["period"])
        phi = _times(_ar(values["phi"]), _spread(_ar(season["phi"]), period))
        theta = _times((1.0, *values["theta"]), _spread((1.0, *season["theta"]), period))
        delta = (1.0,)
        for _ in range(values["d"]):
            delta = _times(delta, (1.0, -1.0))
        for _ in range(season["d"]):
            delta = _times(delta, _spread((1.0, -1.0), period))
        return tuple(-c for c in phi[1:]), theta[1:], tuple(-c for c in delta[1:])

    def __init__(self, values):
        super().__init__(values)
        phi, theta, self.delta = self._parts(values)
        self.core = Arma({"phi": phi, "theta": theta, "sd": 1.0, "total_sd": None, "before": None})
        self.level = self.drift
        self.known = alike(filled(self.start, len(self.delta)))

    @property
    def period(self):
        return int(self.seasonal["period"]) if self.seasonal else 1

    @property
    def seasons(self):
        """D, how often the seasonal difference is taken."""
        return self.seasonal["d"] if self.seasonal else 0

    def path(self, steps, drifting=False):
        """The values that no shock gives, at any steps; from zeros, by the drift alone, when `drifting`.

        Every `period` steps they are a polynomial of degree d + D, here by Newton's forward differences.
        """
        n, s, degree = len(self.delta), self.period, self.d + self.seasons
        x = [0.0] * n if drifting else list(self.known)
        while len(x) < s * (degree + 1):
            last, total = len(x), self.level
            for i, c in enumerate(self.delta, start=1):
                total = total + c * x[last - i]
            x.append(total)
        table = np.array(x[: s * (degree + 1)]).reshape(degree + 1, s)
        turn, place = np.divmod(np.asarray(steps, np.int64) + (n - 1 if n else 0), s)
        values, chosen = np.zeros(turn.shape), np.ones(turn.shape)
        for i in range(degree + 1):
            values = values + chosen * table[0][place]
            chosen = chosen * (turn - i) / (i + 1.0)
            table = table[1:] - table[:-1] if len(table) > 1 else table
        return values

    def moments(self, axis, noise):
        if self.before is not None:
            return self._given(axis, noise)
        x = self.core.moments(axis, noise)
        for _ in range(self.seasons):
            x = x.integrate(every=self.period)
        for _ in range(self.d):
            x = x.integrate()
        return x + axis.known(self.path)

    def equation(self, *inputs):
        season = self.seasonal or {"phi": (), "theta": (), "d": 0}
        left = _factor(self.phi, 1, -1.0) + _factor(season["phi"], self.period, -1.0)
        right = _factor(self.theta, 1, 1.0) + _factor(season["theta"], self.period, 1.0)
        w = _power("(1 − B)", self.d) + _power(f"(1 − B^{self.period})", season["d"]) + " x[t]"
        if self.level:
            w = f"({w.strip()} {signed(-self.level, '')})" if left else f"{w.strip()} {signed(-self.level, '')}"
        recursion = f"{left} {w.strip()} = {right} a[t]".replace("=  a", "= a").strip()
        return ",  ".join([recursion, *self.shown_past(len(self.core.phi), len(self.core.theta))])


LONGEST = 1_000  # steps of a season


def _lengths(values, p, q, n):
    """Faults of `start` and `before` that are too short."""
    if values["start"] is not None and len(values["start"]) not in (1, n):
        yield (
            "start",
            f"expected {n} values up to step 0 (d + s·D of them) or one for all, got {len(values['start'])}",
        )
    before = values["before"]
    if before is not None and len(before["x"]) < p + n:
        yield "before", f"expected {p + n} past values in `x` (one a lag of the recursion), got {len(before['x'])}"
    if before is not None and len(before["shocks"]) < q:
        yield "before", f"expected {q} past `shocks` (one a lag of theta), got {len(before['shocks'])}"


def filled(start, count):
    """Starting values, where none stand for zeros and one for all."""
    start = start or (0.0,)
    return start if len(start) == count else start[:1] * count


def _rows(values):
    """Numbers as one deterministic column, or as one a path where they are rows."""
    return np.array(values, dtype=np.float64).reshape(len(values), -1) if values else rows(values)


def _ar(phi):
    return (1.0, *(-c for c in phi))


def _spread(polynomial, period):
    """The same polynomial in Bˢ."""
    out = [0.0] * (period * (len(polynomial) - 1) + 1)
    out[::period] = polynomial
    return tuple(out)


def _times(a, b):
    """The product of two polynomials, lowest power first, added in order."""
    out = [0.0] * (len(a) + len(b) - 1)
    for i, x in enumerate(a):
        for j, y in enumerate(b):
            if np.any(x) and np.any(y):
                out[i + j] = out[i + j] + x * y
    return tuple(out)


def _factor(coefficients, period, sign):
    if not coefficients:
        return ""
    powers = [f"B{'' if i * period == 1 else f'^{i * period}'}" for i in range(1, len(coefficients) + 1)]
    return f"(1 {' '.join(signed(sign * c, power) for c, power in zip(coefficients, powers, strict=True))})"


def _power(text, times):
    return "" if not times else text if times == 1 else f"{text}^{times}"
