"""One long path in pieces that are run beside each other, with the bits of one step after the other.

What a recursion has at a step waits for the step before. Where it forgets, states that are moved by the same shocks
come together, to the last bit, whatever they were: so each piece but the first begins some steps early, from a state
that is a guess, and is right by the time its own steps begin. Whether it was is seen from the piece before, which ends
there; a piece that was not is run again from there. So no guess, and no number of steps, changes a bit: they cost time.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import Any

import numpy as np

from procgen.chance.kernel import Kernel, is_compiling
from procgen.terms.base import Array
from procgen.terms.hands import at_hand, each

BESIDE = 16  # pieces that one thread runs at once
WORTH = 2  # times the steps that are run for nothing which a piece must have
LEAST = 256  # steps of a piece

Rows = tuple[Array, ...]  # what a recursion carries, each (paths,) or (pieces,)


def in_pieces(recursion: Kernel, early: Callable[[], float], *args: Any) -> Rows:
    """What `recursion(*args)` gives, which carries rows and returns them all.

    early : gives the steps after which a guess is likely to be right; inf where none will be
    """
    long = [part for part in args if np.ndim(part) == 2]
    count, steps = BESIDE * at_hand(), len(long[0])
    if not is_compiling() or any(tile.shape[1] != 1 for tile in long) or steps < count * LEAST:
        return _rows(recursion(*args))
    guessed = early()
    if steps < guessed + count * max(WORTH * guessed, LEAST):
        return _rows(recursion(*args))
    length = int(steps - guessed) // count
    return _Pieces(recursion, args, steps - count * length, length).run(count)


def _rows(returned: Any) -> Rows:
    return returned if isinstance(returned, tuple) else (returned,)


class _Pieces:
    """Pieces of one path, each of `length` steps, behind the first `guessed` steps."""

    def __init__(self, recursion: Kernel, args: tuple[Any, ...], guessed: int, length: int):
        self.recursion, self.args, self.guessed, self.length = recursion, args, guessed, length
        self.start = tuple([row for row, moves in zip(args, recursion.carries, strict=True) if moves])

    def run(self, count: int) -> Rows:
        """Values of all steps, into the tiles; the rows after the last one."""
        first = _rows(self.recursion(*self._with(0, self.guessed, self.start)))
        found = each(partial(self._beside, first), range(0, count, BESIDE))
        if None in found:
            return _rows(self.recursion(*self.args))
        began, ended = (tuple(map(np.concatenate, zip(*part, strict=True))) for part in zip(*found, strict=True))
        return self._mended(began, ended)

    def _with(self, begin: int, end: int | None, rows: Rows) -> list[Any]:
        """The arguments for the steps from `begin` to `end`, and from these rows on."""
        left, given = iter(rows), zip(self.args, self.recursion.carries, strict=True)
        return [next(left) if moves else part[begin:end] if np.ndim(part) == 2 else part for part, moves in given]

    def _beside(self, first: Rows, place: int) -> tuple[Rows, Rows] | None:
        """Run the pieces from this place on; rows where they begin and end. `first` is where the first one begins."""
        begin = place * self.length
        began = tuple([np.full(BESIDE, row[0]) for row in self.start])
        if not self.recursion.beside(self.length, self.guessed, False, *self._with(begin, None, began)):
            return None
        if place == 0:
            for row, known in zip(began, first, strict=True):
                row[0] = known[0]
        ended = tuple([row.copy() for row in began])
        self.recursion.beside(self.length, self.length, True, *self._with(begin + self.guessed, None, ended))
        return began, ended

    def _mended(self, began: Rows, ended: Rows) -> Rows:
        """Run the pieces again that did not begin with what the one before ended with; the rows after the last one."""
        wrong = _differ([row[1:] for row in began], [row[:-1] for row in ended])
        for piece in range(1, len(began[0])):
            if wrong[piece - 1]:
                begin = self.guessed + piece * self.length
                before = tuple([row[piece - 1 : piece].copy() for row in ended])
                after = _rows(self.recursion(*self._with(begin, begin + self.length, before)))
                for row, one in zip(ended, after, strict=True):
                    row[piece] = one[0]
                if piece < len(wrong):
                    here = slice(piece, piece + 1)
                    wrong[here] = _differ([row[piece + 1 : piece + 2] for row in began], [row[here] for row in ended])
        return tuple([row[-1:].copy() for row in ended])


def _differ(some: list[Array], others: list[Array]) -> Array:
    """In which places rows are not the same bits."""
    return np.any([a.view(np.uint64) != b.view(np.uint64) for a, b in zip(some, others, strict=True)], axis=0)
