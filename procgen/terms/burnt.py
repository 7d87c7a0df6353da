"""Burn-ins of many paths side by side, each of its own length: the longest begin first, and the others join them.

Every path has the bits that it has alone: a recursion that works with rows, one value a path, does.
"""

from __future__ import annotations

import copy
from collections.abc import Callable, Iterator, Mapping, Sequence
from typing import Any

import numpy as np

from procgen.terms.base import Array, Node, State, Term

BURN_TILE = 128  # most steps of a burn-in drawn at once
BURN_VALUES = 1 << 17  # about as many values of many paths, few enough to stay in cache


def burn_tiles(count: int, paths: int) -> Iterator[tuple[int, int]]:
    """First step and end of the tiles of a burn-in of so many steps before step 0."""
    size = min(max(BURN_VALUES // max(paths, 1), 16), BURN_TILE)
    for first in range(-count, 0, size):
        yield first, min(first + size, 0)


def burnt_by_nodes(
    stack: Any, nodes: Sequence[Node], draw: Callable[[int, int], Array]
) -> tuple[dict[str, Array] | None, State]:
    """`burnt` of the term that a stack of nodes runs as; values at as many steps as any of them is asked for."""
    head = max(node.head for node in nodes)
    lengths = np.repeat([node.term.reach(node.head)[0] for node in nodes], np.diff(stack.edges))
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

    A tile is run for all paths at once; what comes of those that have not begun by then is thrown away, and those that
    begin within the tile are run from there (`_joined`).

    Parameters
    ----------
    term : whose numbers are rows, one value a path
    lengths : (paths,), the steps of each burn-in; the values before them say nothing
    rest : the state that they begin from, each (n, paths)
    shocks : the rows before step 0 of all paths, at least as many as the longest has steps
    """
    state, kept = rest, []
    for first, end in burn_tiles(int(lengths.max()), len(lengths)):
        z = shocks[len(shocks) + first : len(shocks) + end]
        values, after = term.recurse((z,), state, None)
        outputs = dict(values) if isinstance(values, dict) else {"": values}
        late = np.flatnonzero(lengths < -first)
        if len(late):
            after = {name: _put(rows, late, rest[name][:, late]) for name, rows in after.items()}
            within = late[lengths[late] > -end]
            found = _joined(term, z, within, -first - lengths[within], after)
            if found and end > -head:
                outputs = {name: _put(rows, within, found[name]) for name, rows in outputs.items()}
        state = after
        if end > -head:
            kept.append({name: rows[max(-head - first, 0) :] for name, rows in outputs.items()})
    if not head:
        return None, state
    return {name: np.concatenate([part[name] for part in kept]) for name in kept[0]}, state


def _joined(term: Any, z: Array, joining: Array, starts: Array, state: State) -> dict[str, Array]:
    """Run the paths `joining` from the rows `starts` of the tile `z` on, their state in place; their values there.

    The steps of a path are cut into powers of two: so paths that begin at any step of the tile take a handful of runs.
    """
    at, left, found = starts.copy(), len(z) - starts, {}
    size = 1 << len(z).bit_length()
    while len(joining) and (size := size >> 1):
        some = np.flatnonzero(left & size)
        if not len(some):
            continue
        paths, places = joining[some], at[some] + np.arange(size)[:, None]
        own = {name: rows[:, paths] for name, rows in state.items()}
        values, own = chosen(term, paths, z.shape[1]).recurse((z[places, paths],), own, None)
        for name, rows in own.items():
            state[name][:, paths] = rows
        for name, rows in (values if isinstance(values, dict) else {"": values}).items():
            if name not in found:
                found[name] = np.zeros((len(z), len(joining)))
            found[name][places, some] = rows
        at[some] += size
    return found


def _put(rows: Array, which: Array, part: Array) -> Array:
    """Rows with the columns of some paths in their place."""
    made = rows.copy()
    made[:, which] = part
    return made


def chosen(part: Any, which: Any, paths: int) -> Any:
    """A term, or something inside, with some of its paths: numbers that are rows are cut to them."""
    if part is None or isinstance(part, float | int | str):
        return part
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
