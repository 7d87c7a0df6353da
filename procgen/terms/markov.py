"""Markov chains of a few named states: how they are declared, how they move, and the term `chain`."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from functools import cached_property
from typing import Any, ClassVar, NamedTuple

import numpy as np

from procgen.chance.kernel import kernel
from procgen.chance.laws import LAWS
from procgen.spec.declare import (
    INVALID,
    Domain,
    Parameter,
    Reading,
    Reals,
    Schema,
    Span,
    Text,
    Whole,
    mapping_of,
    read_parameters,
)
from procgen.spec.named import Named, Names, Rows
from procgen.spec.tree import Tree
from procgen.terms.base import Ahead, Array, Draw, Issue, State, Term, number
from procgen.terms.followed import Seen
from procgen.terms.support import finite

UNIFORM = LAWS["uniform"]()
ROOT_12 = 3.4641016151377544
NEVER = 2.0  # beyond any standardised uniform
STATIONARY = "stationary"
MOST_STATES = 20
ROW_ERROR = 1e-9

class Stay(NamedTuple):
    """Time spent in a state at a go: its mean in steps, and how many memoryless stages it is made of."""

    mean: float
    stages: int = 1


class Stays(Domain):
    """A mean length of time, or one with a number of stages; read as a Stay."""

    structured = True
    parts = (
        Parameter("mean", "ℓ", Span(), "mean time spent in the state at a go", unit="steps"),
        Parameter(
            "stages", "k", Whole(at_least=1, at_most=MOST_STATES), "how many stages, alike and one after the other"
        ),
    )

    def describe(self) -> str:
        return "a length of time, or {mean: 12, stages: 4}: more stages vary less, as many as the mean not at all"

    def read(self, tree: Tree, reader: Reading) -> Any:
        if not tree.is_map:
            mean = Span().read(tree, reader)
            return INVALID if mean is INVALID else Stay(mean)
        values = read_parameters(tree, self.parts, reader)
        return INVALID if values is INVALID else Stay(values["mean"], values["stages"])

    def schema(self) -> Schema:
        return {"anyOf": [Span().schema(), mapping_of(self.parts)]}


DURATIONS = Parameter(
    "durations",
    "ℓ",
    Named(Stays()),
    "mean time spent in each state at a go; what comes after it is any other state alike",
    default=None,
    unit="steps",
)
TRANSITIONS = Parameter(
    "transitions",
    "P",
    Rows(Reals(at_least=0, at_most=1)),
    "in place of durations: row i has the chances to go from state i to each, in order",
    default=None,
)
NO_PAST = "a chain has none before a given state; let it start stationary, or lag less"
START = Parameter("start", "", Text(), "the state at step 0; stationary: drawn by the shares", default=STATIONARY)


@kernel
def move(z, thresholds, m, s, out):
    """out[t] = how many of the m thresholds of the state before are at most z[t]; returns the last row."""
    for t in range(z.shape[0]):
        after = 0.0 * s
        for j in range(m):
            at = 0.0 * s
            for i in range(m + 1):
                at = at + thresholds[i * m + j] * (s == i)
            after = after + 1.0 * (z[t] >= at)
        s = after
        out[t] = s
    return s


def check(values: Mapping[str, Any], names: Sequence[str], where: str) -> Iterable[Issue]:
    """What is wrong with durations, transitions and start for states of these names, which `where` declares."""
    if not 2 <= len(names) <= MOST_STATES:
        yield where, f"expected 2 to {MOST_STATES} states, got {len(names)}"
        return
    durations, rows = values["durations"], values["transitions"]
    if (durations is None) == (rows is None):
        yield "durations", "expected `durations` or `transitions`, exactly one of them; give one"
        return
    found = list(_durations(durations, names) if rows is None else _rows(rows, names))
    yield from found
    if values["start"] not in (STATIONARY, *names):
        yield "start", f"expected stationary, or one of {', '.join(names)}, got {values['start']}"
    elif not found and values["start"] == STATIONARY and occupancy(matrix(values, names)) is None:
        yield (
            "transitions",
            "expected one set of states that is entered sooner or later and never left, got more: the shares would "
            "depend on the start; let one lead to the other, or give `start`",
        )


def _durations(durations: Mapping[str, Stay], names: Sequence[str]) -> Iterable[Issue]:
    if set(durations) != set(names):
        yield "durations", f"expected one for each of {', '.join(names)}, got {', '.join(durations)}"
    for name, stay in durations.items():
        if stay.mean < 1.0:
            what = f"expected at least 1 step for {name}, got {number(stay.mean)}"
            yield "durations", f"{what}; a state lasts a step or more"
        elif stay.mean < stay.stages:
            what = f"expected a mean of at least {stay.stages} steps for {name}, got {number(stay.mean)}"
            yield "durations", f"{what}; each stage lasts a step or more"
    total = int(added(stay.stages for stay in durations.values()))
    if total > MOST_STATES:
        yield "durations", f"expected at most {MOST_STATES} stages in all, got {total}"


def _rows(rows: Sequence[Sequence[float]], names: Sequence[str]) -> Iterable[Issue]:
    if len(rows) != len(names) or any(len(row) != len(names) for row in rows):
        sizes = " and ".join(dict.fromkeys(str(len(row)) for row in rows))
        yield (
            "transitions",
            f"expected {len(names)} rows of {len(names)} numbers ({', '.join(names)}), got {len(rows)} of {sizes}",
        )
        return
    for name, row in zip(names, rows, strict=True):
        if abs(added(row) - 1.0) > ROW_ERROR:
            yield "transitions", f"expected the row of {name} to add up to 1, got {number(added(row))}"


def owners(values: Mapping[str, Any], names: Sequence[str]) -> tuple[int, ...]:
    """The state that each stage belongs to, in order; a state without stages is one of its own."""
    if values["transitions"] is not None:
        return tuple(range(len(names)))
    return tuple(i for i, name in enumerate(names) for _ in range(values["durations"][name].stages))


def matrix(values: Mapping[str, Any], names: Sequence[str]) -> Array:
    """Transition probabilities, (stages, stages); the last column is what is left of 1."""
    of = owners(values, names)
    p, first = np.zeros((len(of), len(of))), [of.index(i) for i in range(len(names))]
    for k, i in enumerate(of):
        if values["transitions"] is not None:
            p[k] = values["transitions"][i]
            continue
        stay = values["durations"][names[i]]
        leave = stay.stages / stay.mean
        if k + 1 < len(of) and of[k + 1] == i:
            p[k, k + 1] = leave
        else:
            p[k, [first[j] for j in range(len(names)) if j != i]] = leave / (len(names) - 1)
        p[k, k] = 1.0 - leave
    p[:, -1] = np.maximum(1.0 - _cumulated(p)[:, -1], 0.0)
    return p


def _cumulated(p: Array) -> Array:
    """Running sums of the rows but for the last column, from left to right."""
    sums = [p[:, 0]]
    for j in range(1, p.shape[1] - 1):
        sums.append(sums[-1] + p[:, j])
    return np.stack(sums, axis=1)


def thresholds(p: Array) -> Array:
    """Standardised uniforms from which on the next state is a later one, row by row, flat."""
    c = _cumulated(p).ravel()
    return np.where(c <= 0.0, -NEVER, np.where(c >= 1.0, NEVER, ROOT_12 * (c - 0.5)))


def occupancy(p: Array) -> Array | None:
    """Shares of the time in each state; None where they depend on the start.

    By elimination of states without subtractions, so that small shares are exact too (Grassmann, Taksar & Heyman
    1985).
    """
    reach = _reachable(p)
    closed = [i for i in range(len(p)) if all(reach[j, i] for j in range(len(p)) if reach[i, j])]
    if not all(reach[i, j] for i in closed for j in closed):
        return None
    a = p[np.ix_(closed, closed)].copy()
    for n in range(len(a) - 1, 0, -1):
        a[:n, n] = a[:n, n] / added(a[n, :n])
        for j in range(n):
            a[:n, j] = a[:n, j] + a[:n, n] * a[n, j]
    weights = [1.0]
    for n in range(1, len(a)):
        weights.append(added([weights[i] * a[i, n] for i in range(n)]))
    shares = np.zeros(len(p))
    shares[closed] = np.array(weights) / added(weights)
    return shares


def added(parts: Iterable[Any]) -> Any:
    """The sum of numbers or arrays, from left to right."""
    total = 0.0
    for part in parts:
        total = total + part
    return total


def _reachable(p: Array) -> Array:
    """Whether state j can be reached from i, itself included (Warshall 1962)."""
    reach = (p > 0.0) | np.eye(len(p), dtype=bool)
    for k in range(len(p)):
        reach = reach | (reach[:, k : k + 1] & reach[k : k + 1, :])
    return reach


def backwards(p: Array, shares: Array) -> Array:
    """Transition probabilities of the stationary chain seen backwards; states without a share stay where they are."""
    q = np.eye(len(p))
    for i in np.flatnonzero(shares > 0.0):
        q[i] = shares * p[:, i] / shares[i]
    return q


class States:
    """A chain as value code and theory need it: names, transition matrix, shares, and the state at step 0 if given.

    Where stays have stages the chain moves between these (Cox 1955): `owners` are the states they belong to.
    """

    def __init__(self, values: Mapping[str, Any], names: Sequence[str]):
        self.names, self.owners = tuple(names), owners(values, names)
        self.p = matrix(values, names)
        self.shares = occupancy(self.p)
        self.start = None if values["start"] == STATIONARY else self.owners.index(list(names).index(values["start"]))

    @cached_property
    def _steps(self) -> Array:
        return thresholds(self.p)

    @property
    def theory(self) -> tuple[Any, ...]:
        """What the axis asks of a chain: transitions, shares, start, names and owners."""
        return self.p, self.shares, self.start, self.names, self.owners

    def whole(self, stages: Any) -> list[Any]:
        """Numbers or rows, one a stage, added up by state."""
        return [added([x for x, i in zip(stages, self.owners, strict=True) if i == k]) for k in range(len(self.names))]

    def _seen(self, stages: Array) -> Array:
        if len(self.owners) == len(self.names):
            return stages
        return np.take(np.array(self.owners, np.float64), stages.astype(np.int64))

    def _rest(self) -> Array:
        assert self.shares is not None  # `check` refuses a stationary start without them
        return self.shares

    def first(self, z: Array) -> Array:
        """The stages at step 0, (paths,), from the standardised uniforms of that step."""
        if self.start is not None:
            return np.full(z.shape, float(self.start))
        out = np.empty((1, len(z)))
        row = np.tile(thresholds(self._rest()[None, :]), len(self.p))
        return move(z[None, :], row, len(self.p) - 1, np.zeros(len(z)), out)

    def before(self, z: Array, s: Array) -> Array:
        """The states at steps −n .. −1, from the uniforms at these steps and the stages at step 0."""
        out = np.empty_like(z)
        if len(z):
            move(z[::-1].copy(), thresholds(backwards(self.p, self._rest())), len(self.p) - 1, s, out)
        return self._seen(out[::-1].copy())

    def go(self, z: Array, state: State) -> tuple[Array, State]:
        """The states of the next steps, (steps, paths), and the last of them as a carried state."""
        out, done = np.empty_like(z), 0
        s = state["s"][0] if "s" in state else None
        if s is None and len(z):
            s, done = self.first(z[0]), 1
            out[0] = s
        if len(z) > done:
            s = move(z[done:], self._steps, len(self.p) - 1, s, out[done:])
        return self._seen(out), state if s is None else {"s": s[None, :]}

    def chances(self, steps: int, state: State) -> Array:
        """Chances of each state at the coming steps, (states, steps, paths)."""
        if "s" in state:
            now = np.stack([np.where(state["s"][0] == i, 1.0, 0.0) for i in range(len(self.p))])
        else:
            now = self._rest()[:, None] if self.start is None else np.eye(len(self.p))[:, self.start, None]
        rows = []
        for h in range(steps):
            if h or "s" in state:
                now = np.stack([added([row * p for row, p in zip(now, column, strict=True)]) for column in self.p.T])
            rows.append(np.stack(self.whole(now)))
        return np.stack(rows, axis=1)

    @property
    def stays(self) -> list[float]:
        """Mean steps spent in each state at a go."""
        with np.errstate(divide="ignore"):
            return self.whole(1.0 / (1.0 - np.diagonal(self.p)))

    def says(self) -> str:
        """Transitions, shares and mean durations in words."""
        parts = []
        if len(self.owners) == len(self.names):
            rows = "; ".join(" ".join(number(round(x, 12)) for x in row) for row in self.p)
            parts.append(f"P = [{rows}]")
        if self.shares is not None:
            shares = zip(self.names, self.whole(self.shares), strict=True)
            parts.append(f"shares {', '.join(f'{name} {number(share)}' for name, share in shares)}")
        stays = []
        for k, (name, mean) in enumerate(zip(self.names, self.stays, strict=True)):
            stages = self.owners.count(k)
            stays.append(f"{name} {number(mean)}" + (f" in {stages} stages" if stages > 1 else ""))
        return ",  ".join([*parts, f"mean stays {', '.join(stays)}"])


class Chain(Seen, Term):
    kind = "chain"
    family = "regimes"
    purpose = "the number (0, 1, …) of the state that a Markov chain is in; for `regimes` that follow one chain"
    source = "Feller (1968), ch. XV; Hamilton (1989)"
    example = "chain: {states: [calm, storm], durations: {calm: 40, storm: 8}}"
    knows = "mean, covariance at any lag, shares and mean stays"
    no_past = NO_PAST
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("states", "", Names(), "their names, numbered from 0"),
        DURATIONS,
        TRANSITIONS,
        START,
    )

    @classmethod
    def check(cls, values):
        yield from check(values, values["states"], "states")

    def __init__(self, values):
        super().__init__(values)
        self.chain = States(values, values["states"])

    def draws(self):
        return (Draw("chain", UNIFORM),)

    def past(self):
        return None if self.chain.start is None else 0

    def reach(self, head):
        return (head,)

    def begin(self, before):
        if not before.head:
            return None, {}
        z = before.inputs[0][len(before.inputs[0]) - before.head :]
        return self.chain.before(z, self.chain.first(before.peek(0)[0])), {}

    def recurse(self, inputs, state, at):
        return self.chain.go(inputs[0], state)

    def ahead(self, steps, state, *inputs):
        chances = self.chain.chances(len(steps), state)
        powers = [[float(i) for i in range(len(chances))], [float(i * i) for i in range(len(chances))]]
        mean, square = (added([weight * c for weight, c in zip(weights, chances, strict=True)]) for weights in powers)
        return Ahead(mean, np.maximum(square - mean * mean, 0.0))

    def support(self, *inputs):
        return finite(range(len(self.chain.names)))

    def moments(self, axis, *inputs):
        return axis.states(self.address, UNIFORM, *self.chain.theory)

    def equation(self, *inputs):
        names = ", ".join(f"{i} {name}" for i, name in enumerate(self.chain.names))
        return f"s[t] ∈ {{{names}}},  {self.chain.says()}"
