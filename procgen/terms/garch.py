"""Conditional heteroskedasticity: white shocks whose variance follows the squares before them."""

from __future__ import annotations

from typing import ClassVar

import numpy as np

from procgen.chance.kernel import kernel
from procgen.spec.declare import Parameter, Reals, Record
from procgen.terms.base import LAW, Ahead, number, rows, signed, stated, without_gap
from procgen.terms.conditional import FORGOTTEN, INFINITE, OMEGA, SD, Conditional, burn_without_variance, row_of
from procgen.terms.pieces import in_pieces
from procgen.terms.rows import alike, plain
from procgen.terms.start import companion, decay_length


@kernel
def recursion(z, omega, alpha, beta, e, square, h):
    """e[t] = √h[t]·z[t], h[t] = ω + Σα e²[t−i] + Σβ h[t−j]; `square` and `h` begin with their past."""
    p = alpha.shape[0]
    q = beta.shape[0]
    for t in range(z.shape[0]):
        v = omega + alpha[0] * square[t + p - 1]
        for i in range(1, p):
            v = v + alpha[i] * square[t + p - 1 - i]
        for j in range(q):
            v = v + beta[j] * h[t + q - 1 - j]
        h[t + q] = v
        x = np.sqrt(v) * z[t]
        e[t] = x
        square[t + p] = x * x


@kernel
def first_order(z, omega, alpha, beta, e, variances, square, h):
    """`recursion` of one α and one β, from rows; returns the last ones. What is only carried is not written."""
    for t in range(z.shape[0]):
        h = omega + alpha * square + beta * h
        x = np.sqrt(h) * z[t]
        e[t] = x
        variances[t] = h
        square = x * x
    return square, h


@kernel
def variance(omega, alpha, beta, square, h):
    """The conditional variances of known squares, written into `h` behind its past."""
    p = alpha.shape[0]
    q = beta.shape[0]
    for t in range(h.shape[0] - q):
        v = omega + alpha[0] * square[t + p - 1]
        for i in range(1, p):
            v = v + alpha[i] * square[t + p - 1 - i]
        for j in range(q):
            v = v + beta[j] * h[t + q - 1 - j]
        h[t + q] = v


ALPHA = Parameter("alpha", "α", Reals(at_least=0), "weights of e²[t−1], e²[t−2], …")
BETA = Parameter("beta", "β", Reals(at_least=0), "weights of h[t−1], h[t−2], …", default=())
BEFORE = Parameter(
    "before",
    "",
    Record(
        Parameter("variance", "h", Reals(above=0), "variances before step 0, oldest first", unit="series²"),
        Parameter(
            "shocks",
            "e",
            Reals(),
            "values before step 0, oldest first; without them their squares are h",
            default=(),
            unit="series",
        ),
    ),
    "what came before step 0, to leave from a known variance instead of the stationary law",
    default=None,
)


class Garch(Conditional):
    kind = "garch"
    smooth = "filter"
    forgotten = FORGOTTEN  # where it is to be undone sooner, a larger share
    purpose = "white shocks whose variance follows the squared shocks before them"
    source = "Bollerslev (1986); arch is its case without beta (Engle 1982); stationarity: Nelson (1990)"
    example = "garch: {sd: 6.3, alpha: 0.1, beta: 0.85}"
    by_rows = ("omega", "sd", "alpha", "beta")
    begins_by_rows = True
    parameters: ClassVar[tuple[Parameter, ...]] = (OMEGA, SD, ALPHA, BETA, LAW, INFINITE, BEFORE)

    @classmethod
    def check(cls, values):
        alpha, beta, before = values["alpha"], values.get("beta", ()), values["before"]
        persistence = sum(alpha) + sum(beta)
        if (values["omega"] is None) == (values["sd"] is None):
            yield "omega", "expected `omega` or `sd` (the unconditional one), exactly one of them"
        if persistence >= 1:
            if values["sd"] is not None:
                yield (
                    "sd",
                    f"alpha + beta is {number(persistence)}: there is no unconditional sd; give `omega`",
                )
            if before is None:
                yield from _without_variance(values, alpha, beta, persistence)
        if before is not None:
            if len(before["variance"]) < max(1, len(beta)):
                yield "before", f"expected {max(1, len(beta))} past variances, got {len(before['variance'])}"
            if before["shocks"] and len(before["shocks"]) < len(alpha):
                yield "before", f"expected {len(alpha)} past shocks, got {len(before['shocks'])}"
            if not before["shocks"] and len(before["variance"]) < len(alpha):
                yield (
                    "before",
                    f"expected `shocks`, or {len(alpha)} past variances to stand for their squares",
                )

    def __init__(self, values):
        super().__init__({**values, **{name: alike(values.get(name, ())) for name in ("alpha", "beta")}})

    def level(self):
        """ω: as given, or from the unconditional standard deviation."""
        if self.omega is not None:
            return self.omega
        return self.sd * self.sd * (1.0 - _sum(self.alpha) - _sum(self.beta))

    def resting(self):
        """The variance to begin from: the unconditional one; ω/(1 − Σβ) where there is none."""
        rest = 1.0 - _sum(self.alpha) - _sum(self.beta)
        least = np.maximum(1.0 - _sum(self.beta), 2.0**-20)
        return self.level() / plain(np.where(rest > 0.0, rest, least))

    def scale(self):
        """Unconditional standard deviation, in the series' unit."""
        return plain(np.sqrt(self.resting()))

    def past(self):
        return None if self.before is None else len(self.before["shocks"])

    def _weights(self):
        n = max(len(self.alpha), len(self.beta))
        padded = [(*side, *([0.0] * (n - len(side)))) for side in (self.alpha, self.beta)]
        return [a + b for a, b in zip(*padded, strict=True)]

    def persistence(self):
        weights = self._weights()
        return weights[0] if len(weights) == 1 else None

    def fades(self):
        return bool(np.all(_sum(self._weights()) < 1.0))

    def burn(self):
        """Steps until the variance has forgotten where it began, to 1e-12."""
        weights = self._weights()
        if _sum(weights) < 1.0:
            return decay_length(companion(weights, (), len(weights), 0)[0])
        beta = self.beta[0] if self.beta else 0.0
        return burn_without_variance(self.law, lambda z: beta + self.alpha[0] * z * z)

    def rest(self):
        """The state to begin from: variances and squares at the unconditional variance."""
        shape = {"square": len(self.alpha), "h": len(self.beta)}
        return {name: np.zeros((count, 1)) + self.resting() for name, count in shape.items()}

    def left(self):
        """The state just before step 0 that `before` states."""
        p, q = len(self.alpha), len(self.beta)
        h = rows(self.before["variance"])
        square = rows([e * e for e in self.before["shocks"]]) if self.before["shocks"] else h
        return {"square": square[len(square) - p :], "h": h[len(h) - q :]}

    def recurse(self, inputs, state, at):
        z = inputs[0]
        p, q, e = len(self.alpha), len(self.beta), np.empty_like(z)
        if p == q == 1:
            h, past = np.empty_like(z), [row_of(state[name], z) for name in ("square", "h")]
            coefficients = self.level(), self.alpha[0], self.beta[0]
            square, last = in_pieces(first_order, self.early, z, *coefficients, e, h, *past)
            return {"": e, "variance": h}, {"square": square[None, :], "h": last[None, :]}
        square, h = _buffer(state["square"], z), _buffer(state["h"], z)
        recursion(z, self.level(), np.array(self.alpha), np.array(self.beta), e, square, h)
        state = {"square": square[len(square) - p :].copy(), "h": h[len(h) - q :].copy()}
        return {"": e, "variance": h[q:]}, state

    def invert(self, values, known, state, at):
        p, q = len(self.alpha), len(self.beta)
        values, gap = without_gap(values, self.scale())
        if state is None and self.before is not None:
            state = {**self.left(), "skip": np.array([0])}
        elif state is None:
            state = {**self.rest(), "skip": np.array([0])}
        square, h = _buffer(state["square"], values), _buffer(state["h"], values)
        np.multiply(values, values, out=square[p:])
        variance(self.level(), np.array(self.alpha), np.array(self.beta), square, h)
        z = np.sqrt(h[q:])
        np.divide(values, z, out=z)
        skip = int(state["skip"][0])
        if gap or (at[0] == 0 and self.before is None):  # an unknown start of the variance must be forgotten first
            skip = gap + p + (decay_length(companion(self.beta, (), q, 0)[0], self.forgotten) if q else 0)
        z[:skip] = np.nan
        left = np.array([max(0, skip - len(values))])
        return z, {"square": square[len(square) - p :].copy(), "h": h[len(h) - q :].copy(), "skip": left}

    def ahead(self, steps, state, *inputs):
        p, q = len(self.alpha), len(self.beta)
        count = max(state["square"].shape[1], state["h"].shape[1] if q else 1)
        out = np.empty((len(steps), count))
        square, h = (list(np.broadcast_to(state[k], (len(state[k]), count))) for k in ("square", "h"))
        for t in range(len(steps)):
            out[t] = self.level()
            for i in range(p):
                out[t] = out[t] + self.alpha[i] * square[len(square) - 1 - i]
            for j in range(q):
                out[t] = out[t] + self.beta[j] * h[len(h) - 1 - j]
            square.append(out[t])
            h.append(out[t])
        return Ahead(np.zeros_like(out), out)

    def moments(self, axis, *inputs):
        given = self.before or {}
        return axis.garch(
            self.address,
            self.law,
            self.level(),
            self.alpha,
            self.beta,
            before_variance=tuple(given["variance"]) if given else None,
            before_shocks=tuple(given["shocks"]) if given else None,
        )

    def equation(self, *inputs):
        parts = [number(self.level())]
        parts += [signed(c, f"e²[t−{i}]") for i, c in enumerate(self.alpha, start=1)]
        parts += [signed(c, f"h[t−{j}]") for j, c in enumerate(self.beta, start=1)]
        return f"e[t] = √h[t] z[t],  h[t] = {' '.join(parts)},  z independent {self.law}{self._left_from()}"

    def _left_from(self):
        """What the recursion reads of the given past, for the end of the equation."""
        given = self.before or {"variance": (), "shocks": ()}
        p, q = len(self.alpha), len(self.beta)
        past = [stated("h", given["variance"][-q:] if q else ()), stated("e", given["shocks"][-p:])]
        if not given["shocks"]:
            past.append(stated("e²", given["variance"][-p:]))
        return "".join(f",  {part}" for part in past if part)


class Arch(Garch):
    kind = "arch"
    smooth = "filter"
    purpose = "white shocks whose variance follows the last squared shocks alone"
    source = "Engle (1982)"
    example = "arch: {omega: 0.7, alpha: 0.3}"
    parameters = tuple(p for p in Garch.parameters if p.name != "beta")


def _without_variance(values, alpha, beta, persistence):
    """What to say of alpha + beta >= 1: not stationary at all, or stationary without a variance."""
    if len(alpha) > 1 or len(beta) > 1:
        yield (
            "alpha",
            f"alpha + beta must be below 1, got {number(persistence)}: without a variance, stationarity can be told "
            "only for one alpha and one beta; lower one, or give `before` to leave from a known variance",
        )
        return
    b = beta[0] if beta else 0.0
    exponent = values["law"].expect(lambda z: np.log(b + alpha[0] * z * z))
    if exponent >= 0:
        yield (
            "alpha",
            f"expected E log(β + αz²) below 0 for a stationary garch, got {exponent:.4g}; lower alpha or beta, or give "
            "`before` to leave from a known variance",
        )
    elif not values["allow_infinite_variance"]:
        yield (
            "alpha",
            f"alpha + beta must be below 1 for a finite variance, got {number(persistence)}; lower one, or say "
            "`allow_infinite_variance: true` to run it on purpose",
        )


def _sum(values):
    total = 0.0
    for value in values:
        total = total + value
    return total


def _buffer(past, like):
    out = np.empty((len(past) + len(like), like.shape[1]))
    out[: len(past)] = past
    return out
