"""Regimes: several bodies side by side, of which a Markov chain says which one is seen."""

from __future__ import annotations

from typing import ClassVar

import numpy as np

from procgen.chance.kernel import is_compiling, kernel
from procgen.spec.declare import Body, Parameter
from procgen.spec.named import Named
from procgen.terms import markov
from procgen.terms.base import Ahead, Draw, Term, Unknown
from procgen.terms.combine import Hidden
from procgen.terms.flag import Flag
from procgen.terms.followed import Shown, stages
from procgen.terms.instate import InState
from procgen.terms.support import EVERYTHING, either, finite


@kernel
def shown_in(states, number, rows, others, out):
    """The rows in the state of this number, and the others elsewhere, in one pass."""
    for t in range(out.shape[0]):
        out[t] = np.where(states[t] == number, rows[t], others[t])


class Regimes(Term):
    kind = "regimes"
    smooth = "bend"
    family = "regimes"
    purpose = "several bodies that run side by side, of which a Markov chain shows one at a time"
    source = "Hamilton (1989); moments: Timmermann (2000)"
    example = (
        "regimes: {branches: {calm: [{ar: {phi: 0.8, sd: 1}}], storm: [{constant: 3}, {white_noise: {sd: 4}}]}, "
        "durations: {calm: 40, storm: 8}}"
    )
    knows = "mean and covariance at any steps from those of the branches; kurtosis where theirs is known"
    outputs = ("regime",)
    no_past = markov.NO_PAST
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("branches", "", Named(Body()), "the bodies by name; each runs all the time, whether seen or not"),
        markov.DURATIONS,
        markov.TRANSITIONS,
        markov.START,
        Parameter(
            "follow",
            "",
            Body(),
            "what says the number of the branch, in place of a chain of its own: a `chain`, a `flag`, or the "
            "regime of another series",
            default=None,
        ),
    )

    @classmethod
    def check(cls, values):
        names = tuple(values["branches"])
        if values["follow"] is None:
            yield from markov.check(values, names, "branches")
            return
        if not 2 <= len(names) <= markov.MOST_STATES:
            yield "branches", f"expected 2 to {markov.MOST_STATES} branches, got {len(names)}"
        for name in ("durations", "transitions"):
            if values[name] is not None:
                yield name, f"what is followed has its own; remove {name}, or remove follow"
        if values["start"] != markov.STATIONARY:
            yield "start", "what is followed has its own start; remove start, or remove follow"

    def __init__(self, values):
        super().__init__(values)
        own = values["durations"] is not None or values["transitions"] is not None
        self.chain = markov.States(values, values["branches"]) if own else None

    def draws(self):
        return () if self.chain is None else (Draw("chain", markov.UNIFORM),)

    def misfit(self, inputs):
        if self.chain is not None:
            return None
        found = states_of(inputs[-1])
        if found is None:
            return (
                "expected `follow` to be a chain, a flag, or the regime of another series, as in follow: {use: weather}"
            )
        if len(found) != len(self.branches):
            return f"expected a branch for each state ({', '.join(found)}), got {', '.join(self.branches)}"
        return None

    def past(self):
        return None if self.chain is None or self.chain.start is None else 0

    def reach(self, head):
        return (head,) * self.arity

    def begin(self, before):
        if not before.head:
            return None, {}
        *branches, last = (rows[len(rows) - before.head :] for rows in before.inputs)
        if self.chain is not None:
            last = self.chain.before(last, self.chain.first(before.peek(len(branches))[0]))
        return self._shown(branches, last), {}

    def recurse(self, inputs, state, at):
        *branches, last = inputs
        if self.chain is not None:
            last, state = self.chain.go(last, state)
        return self._shown(branches, last), state

    def _shown(self, branches, states):
        shown = branches[0]
        for number, rows in enumerate(branches[1:], start=1):
            if is_compiling():
                found = np.empty(np.broadcast_shapes(states.shape, shown.shape, rows.shape))
                shown_in(states, float(number), rows, shown, found)
                shown = found
            else:
                shown = np.where(states == number, rows, shown)
        return {"": shown, "regime": states}

    def shown(self, output):
        return Shown(self.chain) if output == "regime" and self.chain is not None else None

    def chained(self, inputs):
        return None if self.chain is None else (inputs[-1], stages(self.chain))

    def in_state(self, parts, state):
        if state is None:
            state = int(parts[-1].level) if np.ndim(parts[-1].level) == 0 else None
        return None if state is None else parts[state]

    def output_in_state(self, output, state):
        return InState(float(state)) if output == "regime" else None

    def ahead(self, steps, state, *inputs):
        if self.chain is None:
            return Unknown("regimes that follow another series have no closed forecast")
        chances = self.chain.chances(len(steps), state)
        mean = markov.added([c * x.mean for c, x in zip(chances, inputs, strict=False)])
        spread = [c * (x.variance + (x.mean - mean) ** 2) for c, x in zip(chances, inputs, strict=False)]
        return Ahead(mean, markov.added(spread))

    def support(self, *inputs):
        return either(inputs[: len(self.branches)])

    def support_of(self, output):
        return finite(range(len(self.branches))) if output == "regime" else EVERYTHING

    def moments(self, axis, *inputs):
        branches, state = inputs[: len(self.branches)], inputs[-1]
        if self.chain is not None:
            state = axis.states(self.address, markov.UNIFORM, *self.chain.theory)
        flags = [
            state.hidden(f"state {k}") if f"state {k}" in state.outputs else state  # a flag is its own
            for k in range(1, len(branches))
        ]
        return axis.offering(axis.chosen(list(zip([None, *flags], branches, strict=True))), regime=state)

    def equation(self, *inputs):
        shown = ", ".join(f"{x}[t] in {name}" for x, name in zip(inputs, self.branches, strict=False))
        says = self.chain.says() if self.chain is not None else f"as {inputs[-1]}[t] says"
        return f"y[t] = {shown};  {says}"


def chain_of(node):
    """Transitions, shares and owners of the stages behind a node that `states_of` knows; None unless stationary."""
    if isinstance(node.term, markov.Chain):
        chain = node.term.chain
    elif isinstance(node.term, Flag):
        if node.term.spans:
            return None
        enter, stay = node.term.chances
        moves = np.array([[1.0 - enter, enter], [1.0 - stay, stay]])
        return moves, np.array([1.0 - node.term.share, node.term.share]), (0, 1)
    elif isinstance(node.term, Hidden) and isinstance(node.inputs[0].term, Regimes):
        owner = node.inputs[0]
        if owner.term.chain is None:
            return chain_of(owner.inputs[-1])
        chain = owner.term.chain
    else:
        return None
    return (chain.p, chain.shares, chain.owners) if chain.start is None else None


def states_of(node):
    """The names of the states that a node gives the number of; None when it is no chain."""
    if isinstance(node.term, markov.Chain):
        return node.term.chain.names
    if isinstance(node.term, Flag):
        return ("off", "on")
    if isinstance(node.term, Hidden) and isinstance(node.inputs[0].term, Regimes):
        owner = node.inputs[0]
        return owner.term.chain.names if owner.term.chain is not None else states_of(owner.inputs[-1])
    return None
