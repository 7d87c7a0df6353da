"""Autoregressive and moving-average filters of a shock, in the regression sign convention."""

from __future__ import annotations

from functools import cached_property
from typing import ClassVar

import numpy as np

from procgen.chance.filters import fill_shocks, fill_values
from procgen.chance.kernel import kernel
from procgen.spec.declare import Parameter, Reals, Record
from procgen.terms.base import LAW, SD, TOTAL_SD, Ahead, Term, Unknown, number, rows, signed, stated, without_gap
from procgen.terms.burnt import burnt
from procgen.terms.rows import Unlike, alike, of_path, plain, row_in
from procgen.terms.start import (
    DENSE,
    JointStart,
    Member,
    companion,
    decay_length,
    decay_lengths,
    lasting,
    partial_autocorrelations,
)

FORGOTTEN = 1e-9
LONGEST = 5_000  # coefficients

PAST_SHOCKS = Parameter("shocks", "a", Reals(), "shocks before step 0, oldest first", default=(), unit="series")


@kernel
def recursion(phi, theta, x, a):
    """x[t] = a[t] + Σφ x[t−i] + Σθ a[t−j]; the first rows of `x` and `a` are the past, oldest first."""
    p = phi.shape[0]
    q = theta.shape[0]
    for t in range(x.shape[0] - p):
        v = a[t + q]
        for i in range(p):
            if phi[i] != 0.0:  # most of a seasonal polynomial is 0
                v = v + phi[i] * x[t + p - 1 - i]
        for j in range(q):
            if theta[j] != 0.0:
                v = v + theta[j] * a[t + q - 1 - j]
        x[t + p] = v


@kernel
def recursion_by_path(phi, theta, x, a):
    """`recursion` with coefficients (p, paths) and (q, paths)."""
    p = phi.shape[0]
    q = theta.shape[0]
    for t in range(x.shape[0] - p):
        v = a[t + q]
        for i in range(p):
            v = v + phi[i] * x[t + p - 1 - i]
        for j in range(q):
            v = v + theta[j] * a[t + q - 1 - j]
        x[t + p] = v


@kernel
def inversion(phi, theta, x, a):
    """The shocks of `recursion`, written into `a` behind its first rows."""
    p = phi.shape[0]
    q = theta.shape[0]
    for t in range(x.shape[0] - p):
        v = x[t + p]
        for i in range(p):
            if phi[i] != 0.0:
                v = v - phi[i] * x[t + p - 1 - i]
        for j in range(q):
            if theta[j] != 0.0:
                v = v - theta[j] * a[t + q - 1 - j]
        a[t + q] = v


recursion.of_many(fill_values)
inversion.of_many(fill_shocks)


class Arma(Term):
    kind = "arma"
    smooth = "filter"
    family = "linear"
    purpose = "a filter of shocks with autoregressive and moving-average coefficients"
    source = "Box & Jenkins (1970), ch. 3; regression signs"
    example = "arma: {phi: [0.7, -0.1], theta: 0.3, sd: 2}"
    knows = "mean, autocovariance at any lag; marginal law when Gaussian"
    takes_shock = True
    by_rows = ("phi", "theta", "sd", "total_sd")
    begins_by_rows = True
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("phi", "φ", Reals(), "coefficients of x[t−1], x[t−2], …"),
        Parameter("theta", "θ", Reals(), "coefficients of a[t−1], a[t−2], …"),
        SD,
        TOTAL_SD,
        LAW,
        Parameter(
            "before",
            "",
            Record(
                Parameter("x", "x", Reals(), "values before step 0, oldest first", default=(), unit="series"),
                PAST_SHOCKS,
            ),
            "what came before step 0, to leave from a known past instead of the stationary law",
            default=None,
        ),
    )

    @classmethod
    def check(cls, values):
        phi, theta, before = values.get("phi", ()), values.get("theta", ()), values["before"]
        for name, part in (("phi", phi), ("theta", theta)):
            if len(part) > LONGEST:
                yield name, f"expected at most {LONGEST:,} coefficients, got {len(part):,}; sample more coarsely"
                return
        if before is not None:
            if len(before["x"]) < len(phi):
                yield (
                    "before",
                    f"expected {len(phi)} past values in `x` (one a coefficient), got {len(before['x'])}",
                )
            if len(before["shocks"]) < len(theta):
                yield (
                    "before",
                    f"expected {len(theta)} past `shocks` (one a coefficient), got {len(before['shocks'])}",
                )
            if values.get("total_sd") is not None:
                yield "total_sd", "a term that leaves from `before` has no stationary spread; give `sd`"
        elif partial_autocorrelations(phi) is None:
            yield "phi", not_causal(phi, "put the term without that root inside `integrate`")

    def __init__(self, values):
        coefficients = {name: alike(values.get(name, ())) for name in ("phi", "theta")}
        super().__init__({**values, **coefficients})

    def _member(self, sd=1.0):
        return Member(self.phi, self.theta, sd)

    def shock_sd(self):
        if self.sd is not None:
            return self.sd
        return self.total_sd / plain(np.sqrt(JointStart([self._member()], np.ones((1, 1))).variance()))

    def stationary(self):
        """The filter as a member of a joint start; None where it leaves from a given past."""
        return None if self.before is not None else self._member(self.shock_scale)

    def past(self):
        return None if self.before is None else len(self.before["x"])

    def burn(self):
        """Steps after which an AR filter has forgotten its start; a moving average has none to forget."""
        return 0 if not self.phi or self.before is not None else self._memory

    @cached_property
    def _memory(self):
        return int(max(self._memories))

    @cached_property
    def _memories(self):
        """Of every path where coefficients are rows, and of all paths otherwise."""
        paths = row_in(self.phi)
        if paths and len(self.phi) > DENSE:
            raise Unlike("long autoregressions start from predictors of their own")
        if paths and len(self.phi) == 1:
            return decay_lengths(self.phi[0])
        each = [of_path(self.phi, path) for path in range(paths)] or [self.phi]
        return [decay_length(companion(phi, (), len(phi), 0)[0]) for phi in each]

    def reach(self, head):
        if self.before is not None:
            return (0,)
        return (max(self.burn(), head) + len(self.theta),)

    def reach_by_path(self, head):
        if self.before is not None or not row_in(self.phi):
            return None
        return (np.maximum(np.array(self._memories), head) + len(self.theta),)

    def begin(self, before):
        p, q = len(self.phi), len(self.theta)
        if self.before is not None:
            x = rows(self.before["x"])
            return x[len(x) - before.head :], self._given()
        if before.joint is not None:
            x, a = (np.asarray(part)[::-1] for part in before.joint)
            return x[len(x) - before.head :], {"x": x[len(x) - p :], "a": a[len(a) - q :]}
        return self._burn_in(before)

    def _given(self):
        """The state just before step 0 that `before` states."""
        x, a = rows(self.before["x"]), rows(self.before["shocks"])
        return {"x": x[len(x) - len(self.phi) :], "a": a[len(a) - len(self.theta) :]}

    def _burn_in(self, before):
        """From the exact covariance far enough back, then through the shocks to step 0."""
        p, q = len(self.phi), len(self.theta)
        if row_in(self.phi):
            return self._burnt_by_rows(before)
        (count,) = self.reach(before.head)
        a = before.inputs[0][len(before.inputs[0]) - count :]
        state = {"x": np.zeros((0, 1)), "a": a[:q]}
        if p:
            state["x"] = self._settled(a[:q], before.normals(p))
        x, state = self.recurse((a[q:],), state, None)
        return x[len(x) - before.head :], state

    def _settled(self, a, normals):
        """As many values as the filter has coefficients, oldest first, beside the shocks `a` of the same steps."""
        z = [row / self.shock_scale for row in a[::-1]] + list(normals)
        return JointStart([self._member(self.shock_scale)], np.ones((1, 1))).settle(z)[::-1]

    def _burnt_by_rows(self, before):
        """`_burn_in` of paths that each begin as far back as their own coefficients ask for."""
        a, q, paths = before.inputs[0], len(self.theta), np.arange(len(self._memories))
        lengths = np.maximum(np.array(self._memories), before.head)
        past = np.array([a[len(a) - lengths - q + k, paths] for k in range(q)]).reshape(q, len(paths))
        rest = {"x": self._settled(past, before.normals(len(self.phi))), "a": past}
        values, state = burnt(self, lengths, rest, before.head, a)
        return np.zeros((0, len(paths))) if values is None else values[""], state

    def early(self):
        if self.values.get("before") or row_in((self.phi, self.theta)) or len(self.phi) > DENSE:
            return np.inf
        return lasting(lambda: self._memory if self.phi else 0) + len(self.theta)

    def recurse(self, inputs, state, at):
        a = inputs[0]
        x = _buffer(state["x"], a)
        shocks = np.concatenate([_wide(state["a"], a), a]) if self.theta else a
        phi, theta = np.array(self.phi), np.array(self.theta)
        (recursion if phi.ndim == theta.ndim == 1 else recursion_by_path)(phi, theta, x, shocks)
        p, q = len(self.phi), len(self.theta)
        return x[p:], {"x": x[len(x) - p :].copy(), "a": shocks[len(shocks) - q :].copy()}

    def invert(self, values, known, state, at):
        p, q = len(self.phi), len(self.theta)
        values, gap = without_gap(values, 0.0)
        if state is None and self.before is not None:
            state = {**self._given(), "skip": np.array([0])}
        elif state is None:
            state = {"x": np.zeros((p, 1)), "a": np.zeros((q, 1)), "skip": np.array([0])}
        skip = int(state["skip"][0])
        if gap or (at[0] == 0 and self.before is None):  # an unknown past must be forgotten first
            try:
                skip = gap + p + (decay_length(companion([-c for c in self.theta], (), q, 0)[0], FORGOTTEN) if q else 0)
            except ValueError:
                return Unknown("the moving-average part is not invertible: its shocks cannot be told from the values")
        x = np.concatenate([_wide(state["x"], values), values])
        a = _buffer(state["a"], values)
        inversion(np.array(self.phi), np.array(self.theta), x, a)
        shocks = a[q:].copy()
        shocks[:skip] = np.nan
        left = np.array([max(0, skip - len(values))])
        return shocks, {"x": x[len(x) - p :].copy(), "a": a[len(a) - q :].copy(), "skip": left}

    def ahead(self, steps, state, noise):
        p, q = len(self.phi), len(self.theta)
        flat = np.zeros((len(steps), state["x"].shape[1] if p else state["a"].shape[1]))
        mean, _ = self.recurse((flat,), state, steps)
        pulse = np.zeros((len(steps), 1))
        pulse[:1] = 1.0
        psi, _ = self.recurse((pulse,), {"x": np.zeros((p, 1)), "a": np.zeros((q, 1))}, steps)
        squares = psi[:, 0] ** 2
        variance = np.stack([sum(squares[j] * noise.variance[h - j] for j in range(h + 1)) for h in range(len(steps))])
        return Ahead(mean, variance)

    def moments(self, axis, noise):
        given = self.before or {}
        return axis.filtered(
            noise,
            self.phi,
            self.theta,
            before_x=tuple(given["x"]) if given else None,
            before_shocks=tuple(given["shocks"]) if given else None,
        )

    def equation(self, *inputs):
        parts = [signed(c, f"x[t−{i}]") for i, c in enumerate(self.phi, start=1)]
        parts += ["+ a[t]"] + [signed(c, f"a[t−{j}]") for j, c in enumerate(self.theta, start=1)]
        given = self.before or {"x": (), "shocks": ()}
        past = [stated("x", given["x"][-len(self.phi) :] if self.phi else ())]
        past += [stated("a", given["shocks"][-len(self.theta) :] if self.theta else ())]
        return ",  ".join(["x[t] = " + " ".join(parts).removeprefix("+ "), *filter(None, past)])


class Ar(Arma):
    kind = "ar"
    smooth = "filter"
    purpose = "an autoregression: each value is a mix of the last ones and a new shock"
    example = "ar: {phi: 0.8, sd: 2}"
    parameters = tuple(p for p in Arma.parameters if p.name != "theta")


class Ma(Arma):
    kind = "ma"
    smooth = "filter"
    purpose = "a moving average of the last shocks"
    example = "ma: {theta: [0.4, 0.2], sd: 2}"
    parameters = tuple(p for p in Arma.parameters if p.name != "phi")


def _wide(rows, like):
    return np.broadcast_to(rows, (len(rows), like.shape[1]))


def _buffer(past, like):
    """An array for `like` many rows behind the rows of the past."""
    out = np.empty((len(past) + len(like), max(like.shape[1], past.shape[1] if len(past) else 1)))
    out[: len(past)] = past
    return out


def not_causal(phi, instead, forced=True):
    """What to say of an autoregression without a causal stationary solution; `forced`: whether it may be run so."""
    on_purpose = ", or give the term its own `before: {x: …}` (one at the series does not do) to run it on purpose"
    return (
        f"expected all roots of 1 − φ₁z − … outside the unit circle, got one at {_root(phi)}; shrink phi, "
        f"or {instead}{on_purpose if forced else ''}"
    )


def _root(phi):
    """The root of 1 − φ₁z − φ₂z² − … that is nearest to the origin, in words."""
    roots = np.roots([-c for c in phi[::-1]] + [1.0])
    worst = min(roots, key=abs)
    where = number(round(worst.real, 4))
    if abs(worst.imag) > 1e-9:
        where += f" {signed(round(worst.imag, 4), 'i')}"
    return f"{where} (modulus {abs(worst):.4g})"
