"""Exponential garch: the log variance follows the size and the sign of the standardised shock before it."""

from __future__ import annotations

from typing import ClassVar

import numpy as np

from procgen.chance.kernel import kernel
from procgen.chance.portable import exp, log
from procgen.spec.declare import Parameter, Real
from procgen.terms.base import LAW, Ahead, Unknown, number, signed, without_gap
from procgen.terms.conditional import BEFORE, FORGOTTEN, INFINITE, Conditional, left_from, row_of
from procgen.terms.pieces import in_pieces
from procgen.terms.rows import plain
from procgen.terms.start import companion, decay_length

NEGLIGIBLE = 1e-12
FAR = 6.0  # standard deviations of a log variance, roughly: where an inversion begins from, on both sides


@kernel
def log_recursion(g, mean, beta, logs, x):
    """logs[t] = mean + x, x ← β·x + g[t]; returns the x of the next step."""
    for t in range(g.shape[0]):
        logs[t] = mean + x
        x = beta * x + g[t]
    return x


SCALE = Parameter(
    "scale",
    "s",
    Real(above=0),
    "standard deviation while the log variance is at its mean",
    default=None,
    unit="series",
)


class Egarch(Conditional):
    kind = "egarch"
    smooth = "filter"
    purpose = "white shocks whose log variance follows the size and sign of the shock before"
    source = "Nelson (1991)"
    example = "egarch: {scale: 1, alpha: 0.2, gamma: -0.1, beta: 0.9}"
    by_rows = ("scale", "omega", "alpha", "gamma", "beta")
    begins_by_rows = True
    parameters: ClassVar[tuple[Parameter, ...]] = (
        SCALE,
        Parameter("omega", "ω", Real(), "the constant in the log variance, instead of `scale`", default=None),
        Parameter("alpha", "α", Real(), "weight of the size, |z[t−1]| − E|z|"),
        Parameter("gamma", "γ", Real(), "weight of z[t−1] itself: below 0 a negative shock raises the variance more"),
        Parameter("beta", "β", Real(at_least=0, below=1), "weight of ln h[t−1]"),
        LAW,
        INFINITE,
        BEFORE,
    )

    @classmethod
    def check(cls, values):
        if (values["scale"] is None) == (values["omega"] is None):
            yield "scale", "expected `scale` or `omega`, exactly one of them"
        if values["before"] is not None or values["allow_infinite_variance"]:
            return
        lower, upper = values["law"].exponential_moments
        for slope, rate, name in (
            (values["alpha"] + values["gamma"], upper, "alpha + gamma"),
            (values["alpha"] - values["gamma"], lower, "alpha − gamma"),
        ):
            if slope > 0 and slope >= rate:
                rule = "at most 0" if rate == 0 else f"below {number(rate)}"
                yield (
                    "alpha",
                    f"{name} must be {rule} for a finite variance, since the tail of {values['law']} is as heavy as it "
                    f"is, got {number(slope)}; choose a law with lighter tails (ged with a shape above 1), or say "
                    "`allow_infinite_variance: true` to run it on purpose",
                )

    def mean_log(self):
        """E ln h."""
        if self.omega is not None:
            return self.omega / (1.0 - self.beta)
        return plain(log(self.values["scale"] * self.values["scale"]))

    def _sides(self, z):
        """α (|z| − E|z|) + γ z."""
        return self.alpha * (np.abs(z) - self.law.mean_size) + self.gamma * z

    def scale(self):
        """Standard deviation while the log variance is at its mean, in the series' unit."""
        return plain(np.sqrt(exp(self.mean_log())))

    def persistence(self):
        return self.beta if np.all(self.beta) else None  # one of 0 has nothing to forget

    def fades(self):
        return True

    def burn(self):
        """Steps until the log variance has forgotten where it began, to 1e-12."""
        return decay_length(companion((self.beta,), (), 1, 0)[0]) if self.beta else 0

    def first(self):
        """ln h at step 0, less its mean, that follows from the given past."""
        h, e = self.before["variance"][-1], self.before["shocks"][-1]
        z = e / np.sqrt(h)
        return plain(self.beta * (log(h) - self.mean_log()) + self._sides(z))

    def rest(self):
        return {"x": np.zeros((1, 1))}

    def left(self):
        return {"x": np.full((1, np.size(self.first())), self.first())}

    def recurse(self, inputs, state, at):
        z = inputs[0]
        logs = np.empty_like(z)
        start = self._sides(z), self.mean_log(), self.beta, logs, row_of(state["x"], z)
        (x,) = in_pieces(log_recursion, self.early, *start)
        h = exp(logs, out=logs)
        return {"": np.sqrt(h) * z, "variance": h}, {"x": x[None, :]}

    def invert(self, values, known, state, at):
        # The variance behind the first value is not known: two recursions that begin far apart are followed, and
        # shocks are given from where they have met on every path.
        values, gap = without_gap(values, 1.0)
        paths = values.shape[1]
        if state is None or gap:
            far = FAR * (abs(self.alpha) + abs(self.gamma)) / float(np.sqrt(1.0 - self.beta * self.beta))
            x, met = np.repeat([[-far], [far]], paths, axis=1), 0.0
        else:
            x, met = state["x"], float(state["met"][0])
        mean, out = self.mean_log(), np.full_like(values, np.nan)
        for t in range(len(values)):
            if t == gap and gap:
                x = np.repeat([[-far], [far]], paths, axis=1)
            if not met and t >= gap and np.max(np.abs(x[1] - x[0])) <= FORGOTTEN:
                met = 1.0
            if met:
                x = x[:1]
            z = values[t] / np.sqrt(exp(mean + x))
            if met:
                out[t] = z[0]
            x = self.beta * x + self._sides(z)
        return out, {"x": x, "met": np.array([met])}

    def ahead(self, steps, state, *inputs):
        lower, upper = self.law.exponential_moments
        if len(steps) > 1 and not (self.alpha + self.gamma < upper and self.alpha - self.gamma < lower):
            return Unknown(f"the variance of {self.address} has no finite mean beyond the next step")
        x, out = state["x"][0], np.empty((len(steps), state["x"].shape[1]))
        grown, left = 1.0, 1.0
        for t in range(len(steps)):
            if t and left > NEGLIGIBLE:
                grown *= self.law.expect(lambda z, q=left: np.exp(min(q * float(self._sides(z)), 700.0)))
                left *= self.beta
            out[t] = np.exp(self.mean_log() + left * x) * grown
        return Ahead(np.zeros_like(out), out)

    def moments(self, axis, *inputs):
        given = {}
        if self.before is not None:
            given = {"first_log": self.mean_log() + self.first(), "before": self.before["shocks"]}
        coefficients = self.mean_log(), self.beta, self.alpha, self.gamma, self.law.mean_size
        return axis.egarch(self.address, self.law, *coefficients, **given)

    def equation(self, *inputs):
        parts = [number(self.mean_log() * (1.0 - self.beta)), signed(self.beta, "ln h[t−1]")]
        parts += [signed(self.alpha, f"(|z[t−1]| − {number(self.law.mean_size)})"), signed(self.gamma, "z[t−1]")]
        return f"e[t] = √h[t] z[t],  ln h[t] = {' '.join(parts)},  z independent {self.law}{left_from(self.before)}"
