"""Burn-ins of many paths side by side, each of its own length: the longest begin first, and the others join them.

Every path has the bits that it has alone: a recursion that works with rows, one value a path, does.
"""

from __future__ import annotations

import copy
from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np

from procgen.terms.base import Array, Node, State, Term
from procgen.terms.conditional import BURN_TILE, Conditional
from procgen.terms.graph import Source


def can_burn_together(stack: Any, nodes: Sequence[Node]) -> bool:
    """Whether the nodes of several paths, which one stack stands for, begin by a burn-in that can run side by side."""
    first = nodes[0]
    lone = len(first.inputs) == 1 and isinstance(first.inputs[0], Source) and first.inputs[0].group is None
    return (
        stack.one is not None
        and isinstance(first.term, Conditional)
        and lone
        and all(node.term.before is None and node.head == first.head for node in nodes)
    )


def burnt_by_nodes(
    stack: Any, nodes: Sequence[Node], draw: Callable[[int, int], Array]
) -> tuple[dict[str, Array] | None, State]:
    """`burnt` of the term that a stack of nodes runs as."""
    head = nodes[0].head
    lengths = np.repeat([node.term.reach(head)[0] for node in nodes], np.diff(stack.edges))
    return burnt(stack.one, lengths, stack.gathered([node.term.rest() for node in nodes]), head, draw)


def burnt(
    term: Any, lengths: Array, rest: State, head: int, draw: Callable[[int, int], Array]
) -> tuple[dict[str, Array] | None, State]:
    """Values at the `head` steps before step 0, by output, and the state of all paths after them.

    Parameters
    ----------
    term : whose numbers are rows, one value a path
    lengths : (paths,), the steps of each burn-in, at least `head`
    rest : the state that they begin from, each (n, paths)
    draw : draw(first_step, steps) gives the shocks of all paths
    """
    order = np.argsort(-lengths, kind="stable")
    rest = {name: rows[:, order] for name, rows in rest.items()}
    term, sorted_lengths = chosen(term, order, len(order)), lengths[order]
    state, joined, active, kept = {name: rows[:, :0] for name, rows in rest.items()}, 0, term, []
    for first in range(-int(sorted_lengths[0]), 0, BURN_TILE):
        end = min(first + BURN_TILE, 0)
        z = draw(first, end - first)[:, order]
        joining = np.unique(-sorted_lengths[(sorted_lengths <= -first) & (sorted_lengths > -end)]).tolist()
        for start, stop in zip(cuts := sorted({first, *joining}), [*cuts[1:], end], strict=True):
            count = int(np.searchsorted(-sorted_lengths, start, side="right"))
            if count > joined:
                state = {name: np.concatenate([rows, rest[name][:, joined:count]], 1) for name, rows in state.items()}
                joined, active = count, chosen(term, slice(count), len(order))
            values, state = active.recurse((z[start - first : stop - first, :count],), state, None)
            if stop > -head:  # by then all have joined
                kept.append({name: rows[max(-head - start, 0) :] for name, rows in values.items()})
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
