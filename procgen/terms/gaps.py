"""Missing values: at random, or in gaps."""

from __future__ import annotations

import numpy as np

from procgen.spec.declare import Parameter, Real, Span
from procgen.terms.base import Ahead, Draw, Term, number, steps_long
from procgen.terms.combine import OF
from procgen.terms.flag import UNIFORM, Flag, runs, too_short
from procgen.terms.support import BINARY, EVERYTHING


class Missing(Term):
    kind = "missing"
    family = "combination"
    purpose = "its body with values left out, whatever they are: each by itself, or some steps in a row"
    source = "Rubin (1976) for what is missing completely at random; Gilbert (1960) for gaps by a chain of two states"
    example = "missing: {of: [{ar: {phi: 0.8, sd: 1}}], share: 0.1, gap: 5}"
    knows = "of the values that are present, whatever is known of its body"
    composition = True
    gaps = True
    outputs = ("missing",)
    parameters = (
        OF,
        Parameter("share", "p", Real(above=0, below=1), "share of the values that are missing"),
        Parameter(
            "gap",
            "ℓ",
            Span(),
            "mean length of a gap; when absent, every value is left out by itself",
            default=None,
            unit="steps",
        ),
    )

    def __init__(self, values):
        super().__init__(values)
        self.chain = Flag({"share": self.values["share"], "stay": self.values["gap"], "spans": ()})

    @classmethod
    def check(cls, values):
        share = values["share"]
        if values["gap"] is not None and values["gap"] < max(1.0, share / (1.0 - share)):
            least = max(1.0, share / (1.0 - share))
            yield (
                "gap",
                f"expected gaps of at least {steps_long(least)} for a share of {number(share)}, got "
                f"{number(values['gap'])}: {too_short(least, 'they would be less than one apart')}; raise gap"
                + (", or lower share" if least > 1.0 else ""),
            )

    def draws(self):
        return (Draw("gap", UNIFORM),)

    def reach(self, head):
        return (head, head)

    def _out(self, body, missing):
        # What is not finite in the body would pass for missing: it is made infinite, which a render refuses.
        kept = np.where(np.isfinite(body), body, np.inf)
        return {"": np.where(missing > 0.0, np.nan, kept), "missing": missing}

    def begin(self, before):
        drawn, state = self.chain.begin(before_of(before))
        if not before.head:
            return None, state
        return self._out(before.inputs[0][len(before.inputs[0]) - before.head :], drawn), state

    def recurse(self, inputs, state, at):
        missing, state = self.chain.recurse(inputs[1:], state, at)
        return self._out(inputs[0], missing), state

    def shown(self, output):
        return self.chain if output == "missing" else None

    def ahead(self, steps, state, body, *chain):
        return Ahead(body.mean, body.variance)

    @property
    def watched(self):
        return ("missing after missing", "missing" if self.gap is None else "missing after present")

    def events(self, values, cell, known, state, at):
        gone = np.isnan(values)
        on, off = runs(gone, state, *self.chain.chances, apart=True)
        return on, *(runs(gone, state, *self.chain.chances, apart=False) if self.gap is None else (off,))

    def support(self, body, *inputs):
        return body

    def support_of(self, output):
        return BINARY if output == "missing" else EVERYTHING

    def moments(self, axis, body):
        enter, stay = self.chain.chances
        return axis.offering(body, missing=axis.chain(self.address, UNIFORM, self.share, stay - enter))

    def equation(self, body, *chain):
        if self.gap is None:
            return f"y[t] = {body}[t], missing with probability {number(self.share)} at each step by itself"
        enter, stay = self.chain.chances
        return (
            f"y[t] = {body}[t], missing with probability {number(stay)} after a missing value, {number(enter)} after "
            "one that is there"
        )


def before_of(before):
    """What the chain is handed of the past: its own stream, and not the body."""
    from dataclasses import replace

    return replace(before, inputs=before.inputs[1:], peek=lambda i: before.peek(i + 1))
