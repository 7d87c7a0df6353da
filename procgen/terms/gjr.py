"""Threshold garch: a negative shock raises the variance more than a positive one of the same size."""

from __future__ import annotations

from typing import ClassVar

import numpy as np

from procgen.chance.kernel import kernel
from procgen.spec.declare import Parameter, Real
from procgen.terms.base import LAW, Ahead, number, signed, without_gap
from procgen.terms.conditional import (
    BEFORE,
    FORGOTTEN,
    INFINITE,
    OMEGA,
    SD,
    Conditional,
    burn_without_variance,
    left_from,
    row_of,
)
from procgen.terms.pieces import in_pieces
from procgen.terms.rows import plain
from procgen.terms.start import companion, decay_length


@kernel
def recursion(z, omega, alpha, gamma, beta, e, variances, h):
    """e[t] = √h[t]·z[t], h[t+1] = ω + (α + γ·I(e[t] < 0))·e²[t] + β·h[t]; returns the next variance."""
    for t in range(z.shape[0]):
        x = np.sqrt(h) * z[t]
        e[t] = x
        variances[t] = h
        h = omega + np.where(x < 0.0, alpha + gamma, alpha) * (x * x) + beta * h
    return h


@kernel
def variance(e, omega, alpha, gamma, beta, variances, h):
    """The conditional variances of known values; returns the next one."""
    for t in range(e.shape[0]):
        variances[t] = h
        h = omega + np.where(e[t] < 0.0, alpha + gamma, alpha) * (e[t] * e[t]) + beta * h
    return h


class GjrGarch(Conditional):
    kind = "gjr_garch"
    smooth = "filter"
    forgotten = FORGOTTEN  # where it is to be undone sooner, a larger share
    purpose = "white shocks whose variance follows the square before, more so after a negative shock"
    source = "Glosten, Jagannathan & Runkle (1993); moments: He & Teräsvirta (1999)"
    example = "gjr_garch: {sd: 1.1, alpha: 0.03, gamma: 0.08, beta: 0.87}"
    by_rows = ("omega", "sd", "alpha", "gamma", "beta")
    begins_by_rows = True
    parameters: ClassVar[tuple[Parameter, ...]] = (
        OMEGA,
        SD,
        Parameter("alpha", "α", Real(at_least=0), "weight of e²[t−1]"),
        Parameter("gamma", "γ", Real(), "weight of e²[t−1] more where e[t−1] is negative; alpha + gamma is at least 0"),
        Parameter("beta", "β", Real(at_least=0), "weight of h[t−1]", default=0.0),
        LAW,
        INFINITE,
        BEFORE,
    )

    @classmethod
    def check(cls, values):
        alpha, gamma, beta, law = (values[name] for name in ("alpha", "gamma", "beta", "law"))
        if (values["omega"] is None) == (values["sd"] is None):
            yield "omega", "expected `omega` or `sd` (the unconditional one), exactly one of them"
        if alpha + gamma < 0:
            yield (
                "gamma",
                f"alpha + gamma must be at least 0, or a variance could be negative, got {number(alpha + gamma)}; "
                "raise one",
            )
            return
        if values["sd"] is not None and not law.balanced:
            yield (
                "sd",
                f"{law} is skewed: what share of its squares is below 0, and with it omega, has no exact value that is "
                "the same on every machine; give `omega`",
            )
        persistence = alpha + beta + gamma * downside(law)
        if persistence >= 1:
            if values["sd"] is not None:
                yield "sd", f"{_NAMED} is {number(persistence)}: there is no unconditional sd; give `omega`"
            if values["before"] is None:
                yield from _without_variance(values, persistence)

    def level(self):
        """ω: as given, or from the unconditional standard deviation of a law that is not skewed."""
        return self.omega if self.omega is not None else self.sd * self.sd * (1.0 - self._even())

    def resting(self):
        """A variance to begin from, which is forgotten: the unconditional one of a law that is not skewed."""
        return self.level() / plain(np.maximum(1.0 - self._even(), 2.0**-20))

    def _even(self):
        return self.alpha + self.beta + self.gamma / 2.0

    def scale(self):
        """Standard deviation, in the series' unit."""
        return plain(np.sqrt(self.resting()))

    def persistence(self):
        return self.alpha + self.beta + self.gamma * downside(self.law)

    def fades(self):
        return bool(np.all(self.persistence() < 1.0))

    def burn(self):
        """Steps until the variance has forgotten where it began, to 1e-12."""
        persistence = self.persistence()
        if persistence < 1.0:
            return decay_length(companion((persistence,), (), 1, 0)[0])
        return burn_without_variance(self.law, self._factor)

    def _factor(self, z):
        return self.beta + (self.alpha + (self.gamma if z < 0 else 0.0)) * z * z

    def first(self):
        """The variance at step 0 that follows from the given past."""
        h, e = self.before["variance"][-1], self.before["shocks"][-1]
        return self.level() + (self.alpha + (self.gamma if e < 0 else 0.0)) * (e * e) + self.beta * h

    def rest(self):
        return {"h": np.zeros((1, 1)) + self.resting()}

    def left(self):
        return {"h": np.zeros((1, 1)) + self.first()}

    def _coefficients(self):
        return self.level(), self.alpha, self.gamma, self.beta

    def recurse(self, inputs, state, at):
        z = inputs[0]
        e, h = np.empty_like(z), np.empty_like(z)
        (following,) = in_pieces(recursion, self.early, z, *self._coefficients(), e, h, row_of(state["h"], z))
        return {"": e, "variance": h}, {"h": following[None, :]}

    def invert(self, values, known, state, at):
        values, gap = without_gap(values, self.scale())
        if state is None:
            state = {**(self.rest() if self.before is None else self.left()), "skip": np.array([0])}
        h = np.empty_like(values)
        following = variance(values, *self._coefficients(), h, row_of(state["h"], values))
        z = values / np.sqrt(h)
        skip = int(state["skip"][0])
        if gap or (at[0] == 0 and self.before is None):  # an unknown start of the variance must be forgotten first
            skip = gap + 1 + (decay_length(companion((self.beta,), (), 1, 0)[0], self.forgotten) if self.beta else 0)
        z[:skip] = np.nan
        return z, {"h": following[None, :], "skip": np.array([max(0, skip - len(values))])}

    def ahead(self, steps, state, *inputs):
        h = state["h"][0]
        out = np.empty((len(steps), len(h)))
        for t in range(len(steps)):
            out[t] = h
            h = self.level() + (self.alpha + self.beta + self.gamma * downside(self.law)) * h
        return Ahead(np.zeros_like(out), out)

    def moments(self, axis, *inputs):
        given = {} if self.before is None else {"first_variance": self.first(), "before": self.before["shocks"]}
        return axis.gjr_garch(self.address, self.law, *self._coefficients(), **given)

    def equation(self, *inputs):
        parts = [number(self.level()), signed(self.alpha, "e²[t−1]"), signed(self.gamma, "e²[t−1] I(e[t−1] < 0)")]
        parts += [signed(self.beta, "h[t−1]")] if self.beta else []
        return f"e[t] = √h[t] z[t],  h[t] = {' '.join(parts)},  z independent {self.law}{left_from(self.before)}"


_NAMED = "alpha + beta + gamma E z² I(z < 0)"


def downside(law):
    """E z² over z < 0: a half, unless the law is skewed."""
    return 0.5 if law.balanced else law.expect(lambda z: z * z if z < 0 else 0.0)


def _without_variance(values, persistence):
    """What to say where there is no variance: not stationary at all, or stationary without one."""
    alpha, gamma, beta = values["alpha"], values["gamma"], values["beta"]
    exponent = values["law"].expect(lambda z: np.log(beta + (alpha + (gamma if z < 0 else 0.0)) * z * z))
    if exponent >= 0:
        yield (
            "alpha",
            f"expected E log(β + (α + γ I(z < 0)) z²) below 0 for a stationary gjr_garch, got {exponent:.4g}; lower "
            "alpha, gamma or beta, or give `before` to leave from a known variance",
        )
    elif not values["allow_infinite_variance"]:
        yield (
            "alpha",
            f"{_NAMED} must be below 1 for a finite variance, got {number(persistence)}; lower one, or say "
            "`allow_infinite_variance: true` to run it on purpose",
        )
