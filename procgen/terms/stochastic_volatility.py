"""Stochastic volatility: the log variance is a Gaussian autoregression with shocks of its own."""

from __future__ import annotations

from typing import ClassVar

import numpy as np

from procgen.chance.laws import Normal
from procgen.chance.portable import exp, log
from procgen.spec.declare import Parameter, Real
from procgen.terms.base import LAW, Ahead, Draw, Term, Unknown, number, signed
from procgen.terms.conditional import SD
from procgen.terms.egarch import SCALE, log_recursion
from procgen.terms.rows import Unlike, plain
from procgen.terms.start import companion, decay_length

NORMAL = Normal()


class StochasticVolatility(Term):
    kind = "stochastic_volatility"
    smooth = "filter"
    family = "volatility"
    purpose = "white shocks whose log variance is an autoregression with shocks of its own"
    source = "Taylor (1986); leverage in the timing of Harvey & Shephard (1996)"
    example = "stochastic_volatility: {sd: 1, phi: 0.95, eta: 0.25}"
    knows = "variance, kurtosis, autocorrelation of squares; law of the variance; uncorrelated, not independent"
    noise = True
    outputs = ("variance",)
    by_rows = ("scale", "sd", "phi", "eta")
    begins_by_rows = True
    parameters: ClassVar[tuple[Parameter, ...]] = (
        SCALE,
        Parameter("sd", SD.symbol, SD.domain, "unconditional standard deviation, instead of `scale`", None, SD.unit),
        Parameter("phi", "φ", Real(above=-1, below=1), "weight of the log variance before"),
        Parameter("eta", "η", Real(above=0), "standard deviation of the shocks of the log variance"),
        Parameter(
            "rho",
            "ρ",
            Real(above=-1, below=1),
            "correlation of z[t] with the shock of ln h[t+1] (leverage, where below 0); needs a normal law",
            default=0.0,
        ),
        LAW,
    )

    @classmethod
    def check(cls, values):
        if (values["scale"] is None) == (values["sd"] is None):
            yield "scale", "expected `scale` or `sd` (the unconditional one), exactly one of them"
        if values["rho"] and not values["law"].gaussian:
            yield (
                "rho",
                f"expected a normal law beside rho, got {values['law']}: leverage is the correlation of two normals; "
                "leave out rho, or law",
            )

    def mean_log(self):
        """E ln h."""
        if self.values["scale"] is not None:
            return plain(log(self.values["scale"] * self.values["scale"]))
        return plain(log(self.sd * self.sd)) - self.spread() * self.spread() / 2.0

    def spread(self):
        """Standard deviation of ln h."""
        return self.eta / plain(np.sqrt(1.0 - self.phi * self.phi))

    def scale(self):
        """Unconditional standard deviation, in the series' unit."""
        return plain(np.sqrt(exp(self.mean_log() + self.spread() * self.spread() / 2.0)))

    def as_member(self):
        """None: its variance cannot be drawn with linear terms."""
        return None

    def draws(self):
        return (Draw("innovation", self.law), Draw("volatility", NORMAL))

    def reach(self, head):
        # Without leverage the past is drawn backwards from step 0; with it the shocks before step 0 matter.
        if self.rho and np.ndim(self.phi):
            raise Unlike("each path begins as far back as its own phi asks for")
        if self.rho and self.phi:
            head = max(head, decay_length(companion((self.phi,), (), 1, 0)[0]))
        elif self.rho:
            head = max(head, 1)
        return head, head

    def begin(self, before):
        if self.rho:
            (z, w), (count, _) = before.inputs, self.reach(before.head)
            x = self.spread() * before.normals(1)
            values, state = self.recurse((z[len(z) - count :], w[len(w) - count :]), {"x": x}, None)
            return {name: rows[count - before.head :] for name, rows in values.items()}, state
        normals = before.normals(before.head + 1)
        x = [self.spread() * normals[0]]  # a Gaussian autoregression looks the same backwards
        for normal in normals[1:]:
            x.append(self.phi * x[-1] + self.eta * normal)
        logs = np.array(x[:0:-1]).reshape(before.head, normals.shape[1])
        h = exp(self.mean_log() + logs)
        z = before.inputs[0][len(before.inputs[0]) - before.head :]
        return {"": np.sqrt(h) * z, "variance": h}, {"x": x[0][None, :]}

    def recurse(self, inputs, state, at):
        z, w = inputs
        g = self.eta * w
        if self.rho:
            g = self.eta * (self.rho * z + float(np.sqrt(1.0 - self.rho * self.rho)) * w)
        logs = np.empty_like(z)
        x = np.broadcast_to(state["x"][0], z.shape[1:]).copy()
        x = log_recursion(g, self.mean_log(), self.phi, logs, x)
        h = exp(logs, out=logs)
        return {"": np.sqrt(h) * z, "variance": h}, {"x": x[None, :]}

    def invert(self, values, known, state, at):
        return Unknown("its log variance has shocks of its own: two unknowns stand behind each value")

    def ahead(self, steps, state, *inputs):
        left = self.phi ** np.arange(len(steps), dtype=float)[:, None]
        spread = self.spread() ** 2 * (1.0 - left**2)
        variance = np.exp(self.mean_log() + left * state["x"][0] + spread / 2.0)
        return Ahead(np.zeros_like(variance), variance)

    def moments(self, axis, *inputs):
        return axis.stochastic_volatility(self.address, self.law, self.mean_log(), self.phi, self.eta, self.rho)

    def equation(self, *inputs):
        start = f"ln h[t] = {number(self.mean_log() * (1.0 - self.phi))} {signed(self.phi, 'ln h[t−1]')}"
        shock = f"{number(self.eta)} w[t−1]"
        if self.rho:
            rest = number(float(np.sqrt(1.0 - self.rho * self.rho)))
            shock = f"{number(self.eta)} ({number(self.rho)} z[t−1] + {rest} w[t−1])"
        return f"e[t] = √h[t] z[t],  {start} + {shock},  z independent {self.law}, w normal"
