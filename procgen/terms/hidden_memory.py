"""Ranks of values that a hidden chain shows of bodies which remember: autoregressions of order 1, seen now and then.

Each body runs on while it is not seen, so that its next value depends on when it was seen last: after g steps a normal
autoregression is φ^g times what it was then, give or take the variance v (1 − φ^(2g)). Hypotheses are the stage of the
chain (Hamilton 1989), which of two bodies was seen at the last step, and how many steps ago the other was; their
chances given the past weigh the laws of the value. One body remembers, beside any that do not; or two do, and are all.
What was seen so long ago that less than a share FORGOTTEN of it is left counts as never seen.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from procgen.spec.records import dataclass
from procgen.terms.arma import Arma
from procgen.terms.base import Array, Cell, Node, State, Unknown
from procgen.terms.combine import Sum
from procgen.terms.graph import Graph, Source
from procgen.terms.hidden_states import HiddenStates, Refused, _law_of, _lumpy, _read, in_state
from procgen.terms.recover import sources_below

FORGOTTEN = 1e-8
LONGEST = 400  # steps after which it is asked to be so


@dataclass
class Remembering:
    """A body that is a known level and a normal autoregression: its node, φ, stationary variance, and known parts."""

    phi: float
    variance: float
    levels: list[Node]

    def spreads(self, gaps: Array) -> tuple[Array, Array]:
        """What is left of a value after so many steps, and the standard deviation around it; inf is never seen."""
        left = np.where(np.isinf(gaps), 0.0, self.phi ** np.where(np.isinf(gaps), 0.0, gaps))
        return left[:, None], np.sqrt(self.variance * (1.0 - left * left))[:, None]


class HiddenMemory(HiddenStates):
    """What a node of regimes answers to `rank`: see the module."""

    def __init__(self, node: Node, known: list[Node], graph: Graph):
        (source, (first, moves, owners)), *branches = node.term.chained(node.inputs), *node.inputs[:-1]
        self._node, self._known, self._first, self._moves = node, known, first, moves
        self._owners, self.lumpy = np.array(owners), False
        self._branches = branches
        _apart(graph, branches, source)
        found = {k: body for k, branch in enumerate(branches) if (body := _remembering(graph, branch)) is not None}
        if not found or (len(found) > 1 and len(branches) > 2) or len(found) > 2:
            raise Refused(f"more bodies of {node.name} remember than can be followed")
        self._bodies = [*found.items()]  # one or two, by the number of their branch
        longest = max(body_gap(body.phi) for _, body in self._bodies)
        if longest > LONGEST:
            raise Refused(f"a body of {node.name} remembers for {longest} steps, and {LONGEST} are followed")
        self._gaps = np.array([*range(2, longest + 1), math.inf])
        self._plain([np.ones((1, 1)) for _ in known])

    def _plain(self, known: Any) -> dict[int, tuple[Any, Any, Any]]:
        """Level, spread and law in each state whose body does not remember; Refused where a law is not a density."""
        rows = {id(part): row for part, row in zip(self._known, known, strict=True)}
        laws = {}
        for k, branch in enumerate(self._branches):
            if k not in dict(self._bodies):
                shocks = [*(value := in_state(branch, rows, {})).shocks.values()]
                if len(shocks) != 1 or not np.all(shocks[0][0]) or _lumpy(shocks[0][2]):
                    raise Refused(f"{branch.name} is not one shock with a density")
                laws[k] = value.level, shocks[0][0], shocks[0][2]
        return laws

    def rank(self, values: Array, cell: Cell, known: Any, state: State | None, at: Array) -> Any:
        """P(X ≤ x) given the past, twice, and what is carried: chances of the hypotheses, and deviations seen."""
        rows = {id(part): row for part, row in zip(self._known, known, strict=True)}
        try:
            laws = {k: _law_of(*law, values, (values, values)) for k, law in self._plain(known).items()}
        except Refused as refused:
            return Unknown(str(refused))
        apart = [values - sum((rows[id(part)] for part in body.levels), np.zeros((1, 1))) for _, body in self._bodies]
        now, seen = (None, None) if state is None else (state["now"], state["seen"])
        ranks = np.empty(values.shape)
        for t in range(len(values)):
            plain = {k: (law[0][t], law[2][t]) for k, law in laws.items()}
            ranks[t], now, seen = self._step(now, seen, [rows[t] for rows in apart], plain)
        ranks = np.clip(ranks, 0.0, 1.0)
        return (ranks, ranks), {"now": now, "seen": seen}

    def _step(self, now: Any, seen: Any, x: list[Array], plain: dict[int, tuple[Array, Array]]) -> Any:
        """The rank of one step's value, and what is carried to the next.

        now: chances (stages, body seen last, steps since the other was, paths), of which body 0 is the first that
        remembers. seen: deviations of each body's level at the steps before (bodies, steps, paths), the last one first.
        """
        paths, count = x[0].shape[0], len(self._gaps)
        begins = now is None
        if begins:  # nothing was seen
            now = np.zeros((len(self._owners), 2, count, paths))
            for stage, (owner, share) in enumerate(zip(self._owners.tolist(), self._first.tolist(), strict=True)):
                now[stage, self._last(owner), -1] = share
            seen = np.zeros((len(self._bodies), count, paths))
        remembering = {k: i for i, (k, _) in enumerate(self._bodies)}
        found: dict[int, Any] = {}
        for k, i in remembering.items():
            found[k] = self._body(i, x[i], seen[i], begins)
        logs = [law[1] for law in plain.values()] + [part[1].max(axis=(0, 1)) for part in found.values()]
        best = np.maximum.reduce(logs)
        best = np.where(np.isneginf(best), 0.0, best)
        rank, joint = np.zeros(paths), np.empty(now.shape)
        for stage, owner in enumerate(self._owners.tolist()):
            below, log = found[owner] if owner in found else (row[None, None] for row in plain[owner])
            rank = rank + _total(now[stage] * below)
            joint[stage] = now[stage] * np.exp(log - best)
        whole = _total(joint)
        joint = np.where(whole > 0.0, joint / np.where(whole > 0.0, whole, 1.0), np.where(np.isnan(whole), np.nan, now))
        return rank, self._moved(joint), np.concatenate([np.stack(x)[:, None], seen[:, :-1]], axis=1)

    def _last(self, owner: int) -> int:
        """Which of two was seen where this branch was: the first body that remembers, or another."""
        return 0 if owner == self._bodies[0][0] else 1

    def _body(self, i: int, x: Array, seen: Array, begins: bool) -> tuple[Array, Array]:
        """Area below x, and logarithm of the density there, by (body seen last, steps since the other was, paths)."""
        from scipy.special import ndtr

        gaps = np.array([1.0, *self._gaps])
        left, spread = self._bodies[i][1].spreads(np.full(len(gaps), math.inf) if begins else gaps)
        z = (x - left * np.concatenate([seen, np.zeros((1, len(x)))])) / spread
        below, log = ndtr(z), -0.5 * z * z - np.log(spread * math.sqrt(2.0 * math.pi))
        order = slice(None) if i == 0 else slice(None, None, -1)  # this body was seen last, or the other was
        area, density = (np.stack([np.broadcast_to(part[:1], part[1:].shape), part[1:]]) for part in (below, log))
        return area[order], density[order]

    def _moved(self, joint: Array) -> Array:
        """Chances of the hypotheses at the next step: what is seen now has been a step ago, the rest longer."""
        seen = np.zeros(joint.shape)
        for stage, owner in enumerate(self._owners.tolist()):
            last = self._last(owner)
            kept, other = joint[stage, last], joint[stage, 1 - last]
            seen[stage, last, 1:] = kept[:-1]
            seen[stage, last, -1] = seen[stage, last, -1] + kept[-1]
            seen[stage, last, 0] = seen[stage, last, 0] + _total(other)
        moved = np.zeros(joint.shape)
        for stage, row in enumerate(self._moves):
            for to in np.flatnonzero(row):
                moved[to] += row[to] * seen[stage]
        return moved


def hidden_memory(graph: Graph, node: Any, grain: float) -> Node | None:
    """The regimes of a node with what is known of them given their past in the place of the term; else None."""
    if getattr(node.term, "kind", "") != "regimes" or node.pace > 1 or grain:
        return None
    if node.term.chained(node.inputs) is None:
        return None
    below = [part for part in graph.order([node]) if not isinstance(part, Source)]
    random = {id(part) for part in below if sources_below(graph, part)}
    known = [part for part in _read(below, random) if id(part) not in random]
    try:
        term: Any = HiddenMemory(node, known, graph)
    except Refused:
        return None
    return Node(node.key, node.name, term, tuple(known), place=node.place)


def body_gap(phi: float) -> int:
    """Steps after which a share FORGOTTEN of a value is left, at least 2."""
    return max(2, math.ceil(math.log(FORGOTTEN) / math.log(abs(phi)))) if phi else 2


def _apart(graph: Graph, branches: list[Any], chain: Source) -> None:
    """Refused where bodies, and what moves the chain, are not drawn apart."""
    sources = [source for branch in branches for source in sources_below(graph, branch)] + [chain]
    if len({id(source) for source in sources}) < len(sources) or any(source.group is not None for source in sources):
        raise Refused("bodies are not independent")
    nodes = [part for branch in branches for part in graph.order([branch]) if isinstance(part, Node)]
    if any(part.term.chained(part.inputs) is not None for part in nodes):
        raise Refused("a body has a chain of its own")


def _remembering(graph: Graph, branch: Any) -> Remembering | None:
    """The body as a known level and a normal autoregression of order 1 in its stationary law; None for all else."""
    parts = branch.inputs if isinstance(branch, Node) and isinstance(branch.term, Sum) else (branch,)
    random = [part for part in parts if isinstance(part, Source) or sources_below(graph, part)]
    if len(random) != 1 or not isinstance(random[0], Node) or not isinstance(random[0].term, Arma):
        return None
    term, (shock, *more) = random[0].term, random[0].inputs
    if len(term.phi) != 1 or len(term.theta) or term.before is not None or more or random[0].pace > 1:
        return None
    try:
        value = in_state(shock, {}, {})
    except Refused:
        return None
    laws, phi = [*value.shocks.values()], term.phi[0]
    if len(laws) != 1 or np.any(value.level) or not getattr(laws[0][2], "gaussian", False):
        return None
    if not (isinstance(phi, float) and isinstance(laws[0][0], float) and abs(phi) < 1.0):
        return None
    return Remembering(phi, laws[0][0] ** 2 / (1.0 - phi * phi), [part for part in parts if part is not random[0]])


def _total(rows: Array) -> Array:
    """The sum over all axes but that of paths, in one order for any number of paths."""
    flat = rows.reshape(-1, rows.shape[-1])
    return flat.sum(axis=0) if flat.shape[1] > 1 else np.add.accumulate(flat, axis=0)[-1]
