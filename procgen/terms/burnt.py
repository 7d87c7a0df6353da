"""Burn-ins of many paths side by side, each of its own length: the longest begin first, and the others join them.

Every path has the bits that it has alone: a recursion that works with rows, one value a path, does.
"""

from __future__ import annotations

import copy
from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np

from procgen.terms.base import Array, Node, State, Term

BURN_TILE = 128  # steps of a burn-in drawn at once, few enough to stay in cache


def burnt_by_nodes(
    stack: Any, nodes: Sequence[Node], draw: Callable[[int, int], Array]
) -> tuple[dict[str, Array] | None, State]:
    """`burnt` of the term that a stack of nodes runs as."""
    head = nodes[0].head
    lengths = np.repeat([node.term.reach(head)[0] for node in nodes], np.diff(stack.edges))
    rest = stack.gathered([node.term.rest() for node in nodes])
    return burnt(stack.one, lengths, rest, head, _Drawn(int(lengths.max()), draw))


class _Drawn:
    """Rows before step 0 that are drawn slice by slice."""

    def __init__(self, count: int, draw: Callable[[int, int], Array]):
        self._count, self._draw = count, draw

    def __len__(self) -> int:
        return self._count

    def __getitem__(self, rows: slice) -> Array:
        return self._draw(rows.start - self._count, rows.stop - rows.start)


def burnt(
    term: Any, lengths: Array, rest: State, head: int, shocks: Any
) -> tuple[dict[str, Array] | None, State]:
    """Values at the `head` steps before step 0, by output, and the state of all paths after them.

    Parameters
    ----------
    term : whose numbers are rows, one value a path
    lengths : (paths,), the steps of each burn-in, at least `head`
    rest : the state that they begin from, each (n, paths)
    shocks : the rows before step 0 of all paths, at least as many as the longest has steps
    """
    order = np.argsort(-lengths, kind="stable")
    rest = {name: rows[:, order] for name, rows in rest.items()}
    term, sorted_lengths = chosen(term, order, len(order)), lengths[order]
    state, joined, active, kept = {name: rows[:, :0] for name, rows in rest.items()}, 0, term, []
    for first in range(-int(sorted_lengths[0]), 0, BURN_TILE):
        end = min(first + BURN_TILE, 0)
        z = shocks[len(shocks) + first : len(shocks) + end][:, order]
        joining = np.unique(-sorted_lengths[(sorted_lengths <= -first) & (sorted_lengths > -end)]).tolist()
        for start, stop in zip(cuts := sorted({first, *joining}), [*cuts[1:], end], strict=True):
            count = int(np.searchsorted(-sorted_lengths, start, side="right"))
            if count > joined:
                state = {name: np.concatenate([rows, rest[name][:, joined:count]], 1) for name, rows in state.items()}
                joined, active = count, chosen(term, slice(count), len(order))
            values, state = active.recurse((z[start - first : stop - first, :count],), state, None)
            if stop > -head:  # by then all have joined
                outputs = values if isinstance(values, dict) else {"": values}
                kept.append({name: rows[max(-head - start, 0) :] for name, rows in outputs.items()})
    if joined < len(order):  # some have nothing to forget
        state = {name: np.concatenate([rows, rest[name][:, joined:]], 1) for name, rows in state.items()}
    back = np.argsort(order, kind="stable")
    state = {name: rows[:, back] for name, rows in state.items()}
    if not head:
        return None, state
    return {name: np.concatenate([part[name] for part in kept])[:, back] for name in kept[0]}, state


def chosen(part: Any, which: Any, paths: int) -> Any:
    """A term, or something inside, with some of its paths: numbers that are rows are cut to them."""
    if isinstance(part, np.ndarray):
        return part[which] if part.shape == (paths,) else part
    if isinstance(part, tuple):
        return tuple([chosen(each, which, paths) for each in part])
    if isinstance(part, Mapping):
        return {name: chosen(each, which, paths) for name, each in part.items()}
    if isinstance(part, Term):
        made = copy.copy(part)
        made.__dict__.update({name: chosen(each, which, paths) for name, each in part.__dict__.items()})
        return made
    return part
