"""A flag: 1 while something is on and 0 while it is not, by dates or by chance."""

from __future__ import annotations

import numpy as np

from procgen.chance.kernel import kernel
from procgen.chance.laws import LAWS
from procgen.spec.declare import Moment, Parameter, Real, Records, Span
from procgen.terms.base import Ahead, Draw, Term, after_last, number, steps_long
from procgen.terms.instate import InState
from procgen.terms.support import BINARY

UNIFORM = LAWS["uniform"]()
ROOT_12 = 3.4641016151377544


@kernel
def switch(z, out, on, enter, stay):
    """on[t] = 1 where z[t] is below `stay`, for what was on, or below `enter`; returns the last row."""
    for t in range(z.shape[0]):
        on = 1.0 * (z[t] < enter + (stay - enter) * on)
        out[t] = on
    return on


class Flag(Term):
    kind = "flag"
    family = "level and shape"
    purpose = "1 while something is on and 0 while it is off: by dates, or by chance for some steps in a row"
    source = "Feller (1968), ch. XV, for the chain of two states"
    example = "flag: {share: 0.2, stay: 5}"
    knows = "mean and covariance: share·(1 − share)·r^|lag|, r = 1 − P(on → off) − P(off → on)"
    piles = (0.0, 1.0)
    parameters = (
        Parameter("share", "p", Real(above=0, below=1), "share of the time it is on", default=None),
        Parameter(
            "stay",
            "ℓ",
            Span(),
            "mean time it stays on; when absent, every step is drawn by itself",
            default=None,
            unit="steps",
        ),
        Parameter(
            "spans",
            "",
            Records(
                Parameter("from", "τ₀", Moment(), "the first step or date at which it is on"),
                Parameter("until", "τ₁", Moment(), "the first one at which it is off again", default=None),
            ),
            "when it is on, in place of `share`",
            default=(),
        ),
    )

    @classmethod
    def check(cls, values):
        if bool(values["spans"]) == (values["share"] is not None):
            yield "share", "expected `share` or `spans`, exactly one of them; give one"
        elif values["stay"] is not None and values["spans"]:
            yield "stay", "a flag on by dates stays as they say; remove stay"
        elif values["stay"] is not None:
            least = max(1.0, values["share"] / (1.0 - values["share"]))
            if values["stay"] < least:
                yield (
                    "stay",
                    f"expected a stay of at least {steps_long(least)} for a share of {number(values['share'])}, got "
                    f"{number(values['stay'])}: {too_short(least, 'it would be off for less than one')}; raise stay"
                    + (", or lower share" if least > 1.0 else ""),
                )
        for span in values["spans"]:
            if span["until"] is not None and span["until"] <= span["from"]:
                yield "spans", "expected spans that end after they begin; exchange `from` and `until`"

    @property
    def chances(self) -> tuple[float, float]:
        """P(off → on) and P(on → on)."""
        if self.stay is None:
            return self.share, self.share
        leave = 1.0 / self.stay
        return self.share * leave / (1.0 - self.share), 1.0 - leave

    def on(self, steps):
        """Whether it is on at each step, by dates."""
        found = np.zeros(steps.shape, bool)
        for span in self.spans:
            later = True if span["until"] is None else steps < span["until"]
            found = found | ((steps >= span["from"]) & later)
        return np.where(found, 1.0, 0.0)

    def unfelt(self, steps):
        for span in self.spans:
            if late := after_last(span["from"], steps):
                yield f"is on {late}: no value shows it"
            elif span["until"] is not None and span["until"] <= 0.0:
                yield f"is off again at step {number(span['until'])}, by step 0: no value shows it"

    def draws(self):
        return () if self.spans else (Draw("chain", UNIFORM),)

    def reach(self, head):
        return () if self.spans else (head,)

    def begin(self, before):
        if self.spans:
            return self.on(np.arange(-before.head, 0))[:, None], {}
        if not before.head:
            return None, {}
        # A chain of two states looks the same backwards, so the past is drawn from step 0 on down.
        first = np.where(before.peek(0)[0] < _below(self.share), 1.0, 0.0)
        z = before.inputs[0][len(before.inputs[0]) - before.head :][::-1].copy()
        out = np.empty_like(z)
        enter, stay = self.chances
        switch(z, out, first, _below(enter), _below(stay))
        return out[::-1].copy(), {}

    def recurse(self, inputs, state, at):
        if self.spans:
            return self.on(at)[:, None], state
        z, (enter, stay) = inputs[0], self.chances
        out = np.empty_like(z)
        on, first = state["on"][0] if "on" in state else None, 0
        if on is None:  # step 0 is drawn from the stationary law
            on, first = np.where(z[0] < _below(self.share), 1.0, 0.0), 1
            out[0] = on
        return out, {"on": switch(z[first:], out[first:], on, _below(enter), _below(stay))[None, :]}

    def unranked(self):
        return "what is on by dates has no chance in it" if self.spans else ""

    def rank(self, values, cell, known, state, at):
        enter, stay = self.chances
        first = np.full((1, values.shape[1]), np.nan) if state is None else state["on"]
        before = np.concatenate([first, values[:-1]])
        off = 1.0 - np.where(np.isnan(before), self.share, enter + (stay - enter) * np.nan_to_num(before))
        lower, upper = (np.where(edge >= 1.0, 1.0, np.where(edge >= 0.0, off, 0.0)) for edge in cell)
        return (lower, upper), {"on": values[-1:]}

    @property
    def watched(self):
        return ("on",) if self.stay is None else ("on after on", "on after off")

    def events(self, values, cell, known, state, at):
        return runs(np.where(np.isnan(values), np.nan, values > 0.0), state, *self.chances, self.stay is not None)

    def chained(self, inputs):
        if self.spans:
            return None
        enter, stay = self.chances
        moves = np.array([[1.0 - enter, enter], [1.0 - stay, stay]])
        return inputs[0], (np.array([1.0 - self.share, self.share]), moves, (0, 1))

    def in_state(self, parts, state):
        return None if state is None else InState(float(state))

    def ahead(self, steps, state, *inputs):
        if self.spans:
            mean = self.on(steps)[:, None]
            return Ahead(mean, np.zeros_like(mean))
        enter, stay = self.chances
        rest = np.ones((1, 1)) if "on" in state else np.zeros((1, 1))
        means = []
        for _ in steps:
            rest = rest * (stay - enter)
            means.append(self.share + rest * (state.get("on", rest) - self.share))
        mean = np.concatenate(means)
        return Ahead(mean, mean * (1.0 - mean))

    def support(self, *inputs):
        return BINARY

    def moments(self, axis, *inputs):
        if self.spans:
            return axis.known(self.on)
        enter, stay = self.chances
        return axis.chain(self.address, UNIFORM, self.share, stay - enter)

    def equation(self, *inputs):
        if self.spans:
            ends = [(number(s["from"]), "" if s["until"] is None else f" < {number(s['until'])}") for s in self.spans]
            return f"x[t] = 1 for {' or '.join(f'{begin} ≤ t{end}' for begin, end in ends)}, else 0"
        enter, stay = self.chances
        return f"P(x[t] = 1) = {number(stay)} after a 1, {number(enter)} after a 0"


def too_short(least, between):
    """Why no mean can be below `least` steps; `between` says what is wrong where what lies between is too short."""
    return "none lasts less than a step" if least == 1.0 else between


def runs(on, state, enter, stay, apart):
    """Whether it is on, with its chance: if wanted apart for steps after it was on, and after it was not.

    Where `on`, 0 or 1, is NaN, neither is told of the step after.
    """
    first = np.full((1, on.shape[1]), np.nan) if state is None else state["on"]
    before, on = np.concatenate([first, 1.0 * on[:-1]]), on == 1.0
    if not apart:
        return ((on, np.full(on.shape, enter)),)
    return (on, np.where(before == 1.0, stay, np.nan)), (on, np.where(before == 0.0, enter, np.nan))


def _below(p: float) -> float:
    """The standardised uniform below which a share p lies."""
    return ROOT_12 * (p - 0.5)
