"""Markov-switching garch: a conditional variance for each state of a hidden chain, all moved by the same shocks."""

from __future__ import annotations

from typing import ClassVar

import numpy as np

from procgen.chance.kernel import kernel
from procgen.chance.portable import matmul
from procgen.spec.declare import Parameter, Real
from procgen.spec.named import Named
from procgen.terms import markov
from procgen.terms.base import LAW, Ahead, Draw, Term, number, signed, without_gap
from procgen.terms.conditional import BURN_TILE, FORGOTTEN
from procgen.terms.followed import Shown
from procgen.terms.start import companion, decay_length

MOST = 100  # states times stages
MERGED = 1e-8  # how near the chances of the states are, whatever the state was at first, when they count as known


@kernel
def recursion(z, s, omega, alpha, beta, h, e, v):
    """e[t] = √h_s[t]·z[t] in state s[t], and h_k[t+1] = ω_k + α_k e²[t] + β_k h_k[t] for every state; `h` moves on."""
    for t in range(z.shape[0]):
        now = 0.0 * z[t]
        for k in range(omega.shape[0]):
            now = now + h[k] * (s[t] == k)
        x = np.sqrt(now) * z[t]
        e[t] = x
        v[t] = now
        square = x * x
        for k in range(omega.shape[0]):
            h[k] = omega[k] + alpha[k] * square + beta[k] * h[k]


@kernel
def variance(square, omega, alpha, beta, h, out):
    """The variances of one state, of known squares; returns the next one."""
    for t in range(square.shape[0]):
        out[t] = h
        h = omega + alpha * square[t] + beta * h
    return h


class SwitchingGarch(Term):
    kind = "switching_garch"
    smooth = "filter"
    family = "volatility"
    purpose = "white shocks with a garch variance for each state of a Markov chain, of which the chain shows one"
    source = "Haas, Mittnik & Paolella (2004)"
    example = (
        "switching_garch: {omega: {calm: 0.1, storm: 1}, alpha: {calm: 0.05, storm: 0.3}, "
        "beta: {calm: 0.6, storm: 0.5}, durations: {calm: 40, storm: 8}}"
    )
    knows = "variance, kurtosis and autocorrelation of squares where they exist; uncorrelated, not independent"
    noise = True
    burns_in = True
    outputs = ("regime", "variance")
    no_past = markov.NO_PAST
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("omega", "ω", Named(Real(above=0)), "the constant in the variance of each state", unit="series²"),
        Parameter("alpha", "α", Named(Real(at_least=0)), "weight of e²[t−1] in the variance of each state"),
        Parameter("beta", "β", Named(Real(at_least=0)), "weight of h[t−1], the state's own variance before"),
        markov.DURATIONS,
        markov.TRANSITIONS,
        LAW,
    )

    @classmethod
    def check(cls, values):
        names = tuple(values["omega"])
        values = {**values, "start": markov.STATIONARY}
        unlike = [name for name in ("alpha", "beta") if set(values[name]) != set(names)]
        for name in unlike:
            yield name, f"expected one for each of {', '.join(names)}, got {', '.join(values[name])}"
        found = list(markov.check(values, names, "omega"))
        yield from found
        if found or unlike:
            return
        chain = markov.States(values, names)
        if len(names) * len(chain.owners) > MOST:
            yield "omega", f"expected at most {MOST} states times stages, got {len(names) * len(chain.owners)}"
            return
        moves = _moves(*(_numbers(values[name], names) for name in ("alpha", "beta")), chain)
        radius = float(np.abs(np.linalg.eigvals(moves)).max())
        if not radius < 1.0:
            yield (
                "alpha",
                f"expected variances whose means settle, got a spectral radius of {number(radius)}, not below 1 (Haas, "
                "Mittnik & Paolella 2004); lower alpha or beta in a state, or its stays",
            )

    def __init__(self, values):
        super().__init__(values)
        self.names = tuple(self.omega)
        self.chain = markov.States({**values, "start": markov.STATIONARY}, self.names)
        self.weights = tuple([_numbers(values[name], self.names) for name in ("omega", "alpha", "beta")])
        self.moves = _moves(*self.weights[1:], self.chain)

    def means(self):
        """E h of each state where the chain is in each stage, (stages, states)."""
        omega, p, shares = self.weights[0], self.chain.p, self.chain.shares
        pushed = matmul(p.T.copy(), shares[:, None] * omega[None, :]).reshape(-1, 1)
        power, total = self.moves, pushed
        while True:  # the sum of all powers, twice as many at a time
            added = matmul(power, total)
            total = total + added
            if np.max(np.abs(added)) <= 2.0**-60 * np.max(np.abs(total)):
                return total.reshape(len(p), len(omega))
            power = matmul(power, power)

    def scale(self):
        """Unconditional standard deviation, in the series' unit."""
        means = self.means()
        return float(np.sqrt(markov.added([means[j, k] for j, k in enumerate(self.chain.owners)])))

    def burn(self):
        """Steps until the variances have forgotten where they began, to 1e-12 of their mean."""
        return decay_length(self.moves)

    def as_member(self):
        """None: a past that follows the squares cannot be drawn with linear terms."""
        return None

    def draws(self):
        return (Draw("innovation", self.law), Draw("chain", markov.UNIFORM))

    def reach(self, head):
        return (max(self.burn(), head),) * 2

    def begin(self, before):
        count, _ = self.reach(before.head)
        z, moves = before.inputs
        states = self.chain.before(moves[len(moves) - count :], self.chain.first(before.peek(1)[0]))
        h = np.broadcast_to(_rested(*self.weights)[:, None], (len(self.names), states.shape[1]))
        kept = []
        for first in range(0, count, BURN_TILE):
            end = min(first + BURN_TILE, count)
            at = len(z) - count
            values, h = self._moved(z[at + first : at + end], states[first:end], h)
            if end > count - before.head:
                kept.append(values)
        if not before.head:
            return None, {"h": h}
        whole = {name: np.concatenate([part[name] for part in kept]) for name in kept[0]}
        return {name: part[len(part) - before.head :] for name, part in whole.items()}, {"h": h}

    def _moved(self, z, states, h):
        h, e, v = np.array(h), np.empty_like(z), np.empty_like(z)
        recursion(z, states, *self.weights, h, e, v)
        return {"": e, "regime": states, "variance": v}, h

    def recurse(self, inputs, state, at):
        states, chain = self.chain.go(inputs[1], {"s": state["s"]} if "s" in state else {})
        values, h = self._moved(inputs[0], states, state["h"])
        return values, {**chain, "h": h}

    def unranked(self):
        return ""

    def rank(self, values, cell, known, state, at):
        """The chances of the states given the past weigh their laws: a filter of the hidden state (Hamilton 1989).

        It runs from every state there may be at first, and its ranks count from where all these agree.
        """
        values, gap = without_gap(values, 0.0)
        stages, paths = len(self.chain.owners), values.shape[1]
        if state is None:
            seen = np.repeat(np.eye(stages)[:, :, None], paths, axis=2)
            start = np.repeat(_rested(*self.weights)[:, None], paths, axis=1)
            state = {"h": start, "seen": seen, "skip": gap + self._forgets()}
        first = min(state["skip"] + gap * (state["skip"] < gap), len(values))
        spreads, rows = [], []
        for k, weights in enumerate(np.stack(self.weights, axis=1).tolist()):
            out = np.empty_like(values)
            rows.append(variance(values * values, *weights, state["h"][k], out))
            spreads.append(np.sqrt(out))
        law = self.law.distribution()
        below, upto, density = (
            [f(x / spread) for spread in spreads]
            for f, x in ((law.cdf, cell[0]), (law.cdf, cell[1]), (law.pdf, values))
        )
        density = [d / spread for d, spread in zip(density, spreads, strict=True)]
        seen, lower, upper = state["seen"], np.full(values.shape, np.nan), np.full(values.shape, np.nan)
        of = list(self.chain.owners)
        for t in range(first, len(values)):
            agreed = np.ptp(seen, axis=0).max(axis=0) <= MERGED if len(seen) > 1 else np.ones(paths, bool)
            for out, laws in ((lower, below), (upper, upto)):
                mixed = sum(seen[0, j] * laws[k][t] for j, k in enumerate(of))
                out[t] = np.where(agreed, mixed, np.nan)
            if len(seen) > 1 and agreed.all():
                seen = seen[:1]
            seen = self.following(seen, np.stack([density[k][t] for k in of]))
        left = {"h": np.stack(rows), "seen": seen, "skip": max(state["skip"] - len(values), 0)}
        return (lower, upper), left

    def _forgets(self):
        """Steps until a variance of known squares has forgotten where it began."""
        most = max(self.beta.values())
        return 1 + (decay_length(companion((most,), (), 1, 0)[0], FORGOTTEN) if most else 0)

    def following(self, seen, likely):
        """The chances (starts, stages, paths) of the next step, after a value of these densities by stage."""
        joint = seen * likely
        total = joint.sum(axis=1)
        best = np.argmax(total, axis=0)  # what is impossible from one start tells nothing: the likeliest stands for it
        paths = np.arange(seen.shape[2])
        joint = np.where((total > 0.0)[:, None, :], joint, joint[best, :, paths].T[None])
        total = np.where(total > 0.0, total, total[best, paths][None])
        with np.errstate(invalid="ignore", divide="ignore"):
            chances = np.where((total > 0.0)[:, None, :], joint / total[:, None, :], seen)
        return np.einsum("ijp,jl->ilp", chances, self.chain.p)

    def shown(self, output):
        return Shown(self.chain) if output == "regime" else None

    def ahead(self, steps, state, *inputs):
        omega, alpha, beta = (row[:, None] for row in self.weights)
        count = len(self.chain.owners)
        if "s" in state:
            chances = np.stack([self.chain.p[:, j][state["s"][0].astype(np.int64)] for j in range(count)])
        else:
            chances = np.broadcast_to(self.chain.shares[:, None], (count, state["h"].shape[1]))
        means = chances[:, None, :] * state["h"][None]  # E h 1(s = j) of the coming step
        rows = []
        for _ in steps:
            rows.append(sum(means[j, k] for j, k in enumerate(self.chain.owners)))
            moved = [
                omega * chances[j] + beta * means[j] + alpha * means[j, k] for j, k in enumerate(self.chain.owners)
            ]
            means = np.einsum("jkp,jl->lkp", np.stack(moved), self.chain.p)
            chances = np.einsum("jp,jl->lp", chances, self.chain.p)
        return Ahead(np.zeros((len(rows), 1)), np.stack(rows))

    def moments(self, axis, *inputs):
        return axis.switching_garch(self.address, self.law, *self.weights, *self.chain.theory)

    def equation(self, *inputs):
        parts = []
        for k, name in enumerate(self.names):
            omega, alpha, beta = (float(row[k]) for row in self.weights)
            parts.append(f"h[t] = {number(omega)} {signed(alpha, 'e²[t−1]')} {signed(beta, 'h[t−1]')} in {name}")
        moves = f"{'; '.join(parts)}, each all the time"
        return f"e[t] = √h[t] z[t],  {moves},  z independent {self.law};  {self.chain.says()}"


def _numbers(named, names):
    """Numbers by state, in the order of the states."""
    return np.array([float(named[name]) for name in names])


def _rested(omega, alpha, beta):
    """Variances to begin from."""
    return omega / (1.0 - beta)


def _moves(alpha, beta, chain):
    """The matrix by which the means of the variances, by stage, move: p(j, l) (β + α e_j′) from stage j to l."""
    count, stages = len(alpha), len(chain.owners)
    out = np.zeros((stages * count, stages * count))
    for j, k in enumerate(chain.owners):
        step = np.zeros((count, count))
        for i in range(count):
            step[i, i] = beta[i]
        step[:, k] = step[:, k] + alpha
        for row in range(stages):
            out[row * count : (row + 1) * count, j * count : (j + 1) * count] = chain.p[j, row] * step
    return out
