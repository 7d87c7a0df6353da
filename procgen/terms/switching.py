"""Switching volatility: white shocks whose spread is that of the state a Markov chain is in."""

from __future__ import annotations

from typing import ClassVar

import numpy as np

from procgen.spec.declare import Parameter, Real
from procgen.spec.named import Named
from procgen.terms import markov
from procgen.terms.base import LAW, Ahead, Draw, Term, number
from procgen.terms.followed import Shown, stages
from procgen.terms.instate import InState


class SwitchingNoise(Term):
    kind = "switching_noise"
    smooth = "filter"
    family = "volatility"
    purpose = "white shocks with a spread for each state of a Markov chain: calm and stormy times"
    source = "Turner, Startz & Nelson (1989); moments: Timmermann (2000)"
    example = "switching_noise: {sd: {calm: 1, storm: 4}, durations: {calm: 40, storm: 8}}"
    knows = "variance, kurtosis and autocorrelation of squares; uncorrelated, not independent"
    noise = True
    outputs = ("regime", "variance")
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("sd", "σ", Named(Real(above=0)), "standard deviation in each state", unit="series"),
        markov.DURATIONS,
        markov.TRANSITIONS,
        LAW,
    )

    @classmethod
    def check(cls, values):
        yield from markov.check({**values, "start": markov.STATIONARY}, tuple(values["sd"]), "sd")

    def __init__(self, values):
        super().__init__(values)
        self.chain = markov.States({**values, "start": markov.STATIONARY}, tuple(values["sd"]))
        self.spreads = tuple(values["sd"].values())

    def scale(self):
        """Unconditional standard deviation, in the series' unit."""
        shares = self.chain.whole(self.chain.shares)
        squares = [share * (spread * spread) for share, spread in zip(shares, self.spreads, strict=True)]
        return float(np.sqrt(markov.added(squares)))

    def as_member(self):
        """None: a past whose spread switches cannot be drawn with linear terms."""
        return None

    def draws(self):
        return (Draw("innovation", self.law), Draw("chain", markov.UNIFORM))

    def reach(self, head):
        return (head, head)

    def _spread(self, states):
        return markov.added([spread * (states == i) for i, spread in enumerate(self.spreads)])

    def _values(self, z, states):
        spread = self._spread(states)
        return {"": spread * z, "regime": states, "variance": spread * spread}

    def begin(self, before):
        if not before.head:
            return None, {}
        z, moves = (rows[len(rows) - before.head :] for rows in before.inputs)
        return self._values(z, self.chain.before(moves, self.chain.first(before.peek(1)[0]))), {}

    def recurse(self, inputs, state, at):
        states, state = self.chain.go(inputs[1], state)
        return self._values(inputs[0], states), state

    def shown(self, output):
        return Shown(self.chain) if output == "regime" else None

    def chained(self, inputs):
        return inputs[1], stages(self.chain)

    def in_state(self, parts, state):
        return parts[0].times(self.spreads[state])

    def output_in_state(self, output, state):
        return InState(float(state) if output == "regime" else self.spreads[state] * self.spreads[state])

    def ahead(self, steps, state, *inputs):
        chances = self.chain.chances(len(steps), state)
        variance = markov.added([c * (spread * spread) for c, spread in zip(chances, self.spreads, strict=True)])
        return Ahead(np.zeros_like(variance), variance)

    def moments(self, axis, *inputs):
        return axis.switching(self.address, self.law, self.spreads, *self.chain.theory)

    def equation(self, *inputs):
        spreads = ", ".join(f"{number(sd)} in {name}" for name, sd in zip(self.chain.names, self.spreads, strict=True))
        return f"e[t] = σ[t] z[t],  σ[t] = {spreads},  z independent {self.law};  {self.chain.says()}"
