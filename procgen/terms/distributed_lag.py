"""A distributed lag: what its body adds fades step by step, as a level in a tank or habit in what is bought."""

from __future__ import annotations

from functools import cached_property

import numpy as np

from procgen.spec.declare import Parameter, Reals
from procgen.terms.arma import inversion, not_causal, recursion
from procgen.terms.base import Term, signed
from procgen.terms.combine import OF
from procgen.terms.start import companion, decay_length, partial_autocorrelations
from procgen.terms.support import EVERYTHING, Support

FORGOTTEN = 1e-17  # what is left at step 0 of where the filter began
LEFT = 1e-12  # and at the earliest step that is read
LONGEST = 500  # coefficients
FURTHEST = 100_000  # steps that it reads back
ROUNDING = 1e-9  # sums of many steps may pass a bound by their rounding


class DistributedLag(Term):
    kind = "distributed_lag"
    smooth = "filter"
    family = "combination"
    purpose = "its body through a filter: each value is a mix of the last ones and what the body adds"
    source = "Koyck (1954), the geometric lag; Box & Jenkins (1970), ch. 10"
    example = "distributed_lag: {of: [{ma: {theta: 0.4, sd: 1}}], phi: 0.7}"
    knows = "mean and covariance at any steps, as far as those of its body are known"
    composition = True
    blurs = True
    parameters = (
        OF,
        Parameter("phi", "φ", Reals(), "coefficients of y[t−1], y[t−2], …"),
    )

    @classmethod
    def check(cls, values):
        phi = values["phi"]
        if len(phi) > LONGEST:
            yield "phi", f"expected at most {LONGEST:,} coefficients, got {len(phi):,}; sample more coarsely"
        elif partial_autocorrelations(phi) is None:
            yield "phi", not_causal(phi, "put its body inside `integrate`", forced=False)
        elif (steps := _steps_felt(phi, FORGOTTEN)) > FURTHEST:
            yield (
                "phi",
                f"expected a filter that forgets within {FURTHEST:,} steps, got one that still feels what came "
                f"{'more than that' if steps == np.inf else f'{steps:,.0f} steps'} before; shrink phi, or sample "
                "more coarsely",
            )

    @cached_property
    def _memory(self):
        """Steps after which the filter has forgotten where it began, and after which little is left of it."""
        return int(_steps_felt(self.phi, FORGOTTEN)), int(_steps_felt(self.phi, LEFT))

    def reach(self, head):
        # The same for all small heads: what else reads the term before step 0 is to change none of its bits.
        forgotten, left = self._memory
        return (max(forgotten, left + head),)

    def begin(self, before):
        """From where the filter rests on the first of its body's values that are read."""
        (count,) = self.reach(before.head)
        x = before.inputs[0][len(before.inputs[0]) - count :]
        rest = x[:1] / (1.0 - _total(self.phi))
        y, state = self.recurse((x,), {"y": np.repeat(rest, len(self.phi), axis=0)}, None)
        return y[len(y) - before.head :] if before.head else None, state

    def recurse(self, inputs, state, at):
        p, x = len(self.phi), inputs[0]
        width = max(x.shape[1], state["y"].shape[1])
        y = np.empty((p + len(x), width))
        y[:p] = state["y"]
        recursion(np.array(self.phi), np.zeros(0), y, np.broadcast_to(x, (len(x), width)))
        return y[p:], {"y": y[len(y) - p :].copy()}

    def invert(self, values, known, state, at):
        past = state["y"] if state else np.full((len(self.phi), values.shape[1]), np.nan)
        y, x = np.concatenate([past, values]), np.empty_like(values)
        inversion(np.array(self.phi), np.zeros(0), y, x)
        if not state:
            x[: len(self.phi)] = np.nan  # a coefficient of 0 is none, but the past is unknown all the same
        return x, {"y": y[len(y) - len(self.phi) :].copy()}

    def support(self, body):
        if min(self.phi) < 0.0:
            return EVERYTHING
        gain = 1.0 / (1.0 - _total(self.phi))
        low, high = gain * body.low, gain * body.high
        return Support(low - ROUNDING * abs(low), high + ROUNDING * abs(high))

    def moments(self, axis, body):
        return axis.distributed(body, self.phi, self._memory[0])

    def equation(self, body):
        parts = " ".join(signed(c, f"y[t−{k}]") for k, c in enumerate(self.phi, start=1))
        return f"y[t] = {parts.removeprefix('+ ')} + {body}[t]"


def _steps_felt(phi, negligible):
    """Steps until no more than this is left of a past; infinite where that takes too long to be counted."""
    try:
        return decay_length(companion(phi, (), len(phi), 0)[0], negligible)
    except ValueError:
        return np.inf


def _total(phi):
    total = 0.0
    for c in phi:
        total = total + c
    return total
