"""The stochastic cycle: a turning pair of coordinates, damped and disturbed.

Its two disturbances are streams of the roles `cycle` and `cycle_star`. It starts in its stationary law, or from where
`before` says that it stood.
"""

from __future__ import annotations

from typing import ClassVar

import numpy as np

from procgen.chance.kernel import kernel
from procgen.chance.portable import cos_turns, sin_turns
from procgen.spec.declare import Parameter, Real, Record, Span
from procgen.terms.base import number, rows, signed, stated
from procgen.terms.rows import plain
from procgen.terms.structural import Disturbed, with_outputs


@kernel
def turning(c, s, x, y, cycle, star, k, m):
    """(ψ, ψ*) turned by one step and damped, plus disturbances; returns the last of both."""
    for t in range(k.shape[0]):
        u = c * x + s * y + k[t]
        y = c * y - s * x + m[t]
        x = u
        cycle[t] = x
        star[t] = y
    return x, y


class StochasticCycle(Disturbed):
    kind = "stochastic_cycle"
    smooth = "filter"
    family = "linear"
    purpose = "a damped cycle whose phase and height drift; its other coordinate is the hidden output `star`"
    source = "Harvey (1989), sec. 2.3.3"
    example = "stochastic_cycle: {rho: 0.95, period: 20, total_sd: 3}"
    knows = "variance σ²/(1 − ρ²), autocorrelation ρᵏ cos(2πk/P); Gaussian law; strictly stationary"
    outputs = ("star",)
    by_rows = ("rho", "period", "sd", "total_sd")
    begins_by_rows = True
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("rho", "ρ", Real(above=0, below=1), "damping a step; near 1 the cycle is long remembered"),
        Parameter("period", "P", Span(), "length of one turn, above 2 steps", unit="steps"),
        Parameter("sd", "σ_κ", Real(above=0), "standard deviation of both disturbances", default=None, unit="series"),
        Parameter(
            "total_sd", "σ_ψ", Real(above=0), "standard deviation of the cycle itself, instead of `sd`", None, "series"
        ),
        Parameter(
            "before",
            "",
            Record(
                Parameter("cycle", "ψ", Real(), "the cycle at step −1", unit="series"),
                Parameter("star", "ψ*", Real(), "its other coordinate there", unit="series"),
            ),
            "where it stands just before step 0, to leave from there instead of the stationary law",
            default=None,
        ),
    )

    @classmethod
    def check(cls, values):
        if not values["period"] > 2:
            yield "period", f"expected a period above 2 steps, got {number(values['period'])}; a shorter one is aliased"
        if values["before"] is not None and values["total_sd"] is not None:
            yield "total_sd", "a cycle that leaves from `before` has no stationary spread; give `sd`"

    def disturbance(self):
        """Standard deviation of each disturbance."""
        return self.sd if self.sd is not None else self.total_sd * plain(np.sqrt((1.0 - self.rho) * (1.0 + self.rho)))

    def whole(self):
        """Standard deviation of the cycle itself."""
        if self.total_sd is not None:
            return self.total_sd
        return self.sd / plain(np.sqrt((1.0 - self.rho) * (1.0 + self.rho)))

    def disturbances(self):
        return {"cycle": self.disturbance(), "cycle_star": self.disturbance()}

    def turn(self):
        """ρ cos λ and ρ sin λ."""
        turns = np.float64(1.0) / self.period
        return self.rho * plain(cos_turns(turns)), self.rho * plain(sin_turns(turns))

    def reach(self, head):
        return (0, 0)  # the past is drawn backwards, which for this cycle is the same cycle turning the other way

    def past(self):
        return None if self.before is None else 1

    def begin(self, before):
        if self.before is not None:
            state = {name: rows([self.before[name]]) for name in ("cycle", "star")}
            return ({"": state["cycle"], "star": state["star"]} if before.head else None), state
        c, s = self.turn()
        z = before.normals(2 * max(before.head, 1))
        x, y = [self.whole() * z[0]], [self.whole() * z[1]]
        for k in range(1, before.head):
            x.append(c * x[-1] - s * y[-1] + self.disturbance() * z[2 * k])
            y.append(c * y[-1] + s * x[-2] + self.disturbance() * z[2 * k + 1])
        state = {"cycle": x[0][None, :], "star": y[0][None, :]}
        if not before.head:
            return None, state
        return {"": np.array(x[::-1]), "star": np.array(y[::-1])}, state

    def recurse(self, inputs, state, at):
        part = self.scaled(inputs)
        cycle, star = np.empty_like(part["cycle"]), np.empty_like(part["cycle"])
        x, y = (state[name][0] + np.zeros(cycle.shape[1]) for name in ("cycle", "star"))
        x, y = turning(*self.turn(), x, y, cycle, star, part["cycle"], part["cycle_star"])
        return {"": cycle, "star": star}, {"cycle": x[None, :], "star": y[None, :]}

    def moments(self, axis, *inputs):
        c, s = self.turn()
        phi = (2.0 * c, -self.rho * self.rho)
        part = self.sources(axis)
        if self.before is not None:
            return self._left(axis, part, phi)
        own = {role: axis.filtered(noise, phi, (-c,)) for role, noise in part.items()}
        late = {role: axis.filtered(noise, phi).lag(1) for role, noise in part.items()}
        star = own["cycle_star"] + late["cycle"] * -s
        return with_outputs(own["cycle"] + late["cycle_star"] * s, star=star)

    def _left(self, axis, part, phi):
        """Theory from a given past: each coordinate as it stood two steps before step 0, when no shock had come."""
        c, s = self.turn()
        here, there = self.before["cycle"], self.before["star"]
        scale = self.rho * self.rho
        past = {"cycle": ((c * here - s * there) / scale, here), "cycle_star": ((s * here + c * there) / scale, there)}
        zero = {"before_x": (0.0, 0.0), "before_shocks": (0.0,)}
        own = {
            role: axis.filtered(noise, phi, (-c,), before_x=past[role], before_shocks=(0.0,))
            for role, noise in part.items()
        }
        late = {  # what the other coordinate's shock of a step ago has come to
            role: axis.filtered(noise, phi, (s,), **zero) + axis.filtered(noise, phi, (), **zero) * -1.0
            for role, noise in part.items()
        }
        star = own["cycle_star"] + late["cycle"] * -1.0
        return with_outputs(own["cycle"] + late["cycle_star"], star=star)

    def equation(self, *inputs):
        c, s = self.turn()
        given = {} if self.before is None else {"ψ": self.before["cycle"], "ψ*": self.before["star"]}
        past = "".join(f",  {stated(name, (value,))}" for name, value in given.items())
        return (
            f"ψ[t] = {number(c)} ψ[t−1] {signed(s, 'ψ*[t−1]')} + κ[t],  "
            f"ψ*[t] = {number(-s)} ψ[t−1] {signed(c, 'ψ*[t−1]')} + κ*[t],  "
            f"sd κ = sd κ* = {number(self.disturbance())}{past}"
        )
