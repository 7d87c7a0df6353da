"""Sums of recovered shocks over stretches of steps: slow memory, too weak to be seen at any one lag.

The normal scores of shocks are independent, so that their sums over stretches of k steps, squared and divided by k,
add up to a chi-square, independent of what is left of the scores' own squares: the ratio of both has Fisher's law,
exactly, and does not answer to the size of the shocks. It is the variance ratio of Lo & MacKinlay (1988), over
stretches that do not overlap. They begin at multiples of their length.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from procgen.checks.blocks import BLOCK, across

LENGTHS = (16, 64, 256)  # the second is a block
_GROWTH = 4  # each length is four of the one before


class StretchLane:
    """What is carried from tile to tile for one range of paths: totals by path, and rows that wait for more."""

    def __init__(self, paths: int):
        self.totals = np.zeros((len(LENGTHS), paths))
        self.counts = np.zeros(len(LENGTHS))
        self.rows: NDArray | None = None  # scores since the last block; before the first tile, not known
        self.blocks = np.empty((0, paths))  # sums over blocks, since the last stretch of the third length


class StretchSums:
    """Numbers of stretches by length, and the sums of their squared sums; mergeable."""

    def __init__(self) -> None:
        self.sums = np.zeros((2, len(LENGTHS)))

    def absorb(self, g: NDArray, first_step: int, lane: StretchLane, short: NDArray | None = None) -> None:
        """Add scores (steps, paths) of steps that follow; a stretch with one that is not finite is left out.

        `short` are their sums over stretches of the first length, where they are known.
        """
        if lane.rows is None:
            self._begin(first_step, lane)
        if lane.rows is not None and len(lane.rows):
            g, short = np.concatenate([lane.rows, g]), None
        whole = len(g) - len(g) % BLOCK
        lane.rows = g[whole:].copy()
        self._add_blocks(_halved(g[:whole], 4) if short is None else short[: whole // LENGTHS[0]], lane)

    def takes(self, first_step: int, lane: StretchLane) -> NDArray | None:
        """Where `strips` may add the squares of the first two lengths, if blocks begin with the next step."""
        if lane.rows is None and first_step % BLOCK == 0:
            self._begin(first_step, lane)
        return lane.totals if lane.rows is not None and not len(lane.rows) else None

    def add(self, g: NDArray, blocks: NDArray, lane: StretchLane) -> None:
        """The rest of `absorb` of known scores, whose first two lengths are in the totals; their sums over blocks."""
        lane.rows = g[len(blocks) * BLOCK :].copy()
        lane.counts[:2] += blocks.size * np.array([BLOCK // LENGTHS[0], 1])
        self._add_longest(blocks, lane)

    def _begin(self, first_step: int, lane: StretchLane) -> None:
        paths = lane.totals.shape[1]
        lane.rows = np.full((first_step % BLOCK, paths), np.nan)
        lane.blocks = np.full((first_step // BLOCK % _GROWTH, paths), np.nan)

    def _add_blocks(self, short: NDArray, lane: StretchLane) -> None:
        blocks = _halved(short, 2)
        self._add_squares(0, short, lane)
        self._add_squares(1, blocks, lane)
        self._add_longest(blocks, lane)

    def _add_longest(self, blocks: NDArray, lane: StretchLane) -> None:
        held = np.concatenate([lane.blocks, blocks]) if len(lane.blocks) else blocks
        whole = len(held) - len(held) % _GROWTH
        lane.blocks = held[whole:]
        if whole:
            self._add_squares(2, _halved(held[:whole], 2), lane)

    def _add_squares(self, k: int, sums: NDArray, lane: StretchLane) -> None:
        squares = sums * sums
        known = np.isfinite(squares)
        count = np.count_nonzero(known)
        lane.counts[k] += count
        if count < squares.size:
            squares = np.where(known, squares, 0.0)
        if k == 0:
            squares = _halved(squares, 2)  # those of a block at once
        if len(squares) <= _GROWTH:
            for row in squares:
                lane.totals[k] += row
        else:
            lane.totals[k] = np.add.accumulate(np.concatenate([lane.totals[k][None], squares]), axis=0)[-1]

    def finish(self, lane: StretchLane) -> None:
        """Close a range of paths."""
        if lane.rows is not None and len(lane.rows):
            short = np.full((_GROWTH, lane.totals.shape[1]), np.nan)  # no block is whole, but some of these are
            whole = len(lane.rows) // LENGTHS[0]
            short[:whole] = _halved(lane.rows[: whole * LENGTHS[0]], 4)
            self._add_squares(0, short, lane)
        self.sums[0] += lane.counts
        self.sums[1] += across(lane.totals)

    def merge(self, other: StretchSums) -> None:
        self.sums += other.sums

    def ratios(self) -> Iterator[tuple[int, int, float]]:
        """Length, number of stretches, and the sum over them of (sum of scores)² / length."""
        for length, count, total in zip(LENGTHS, *self.sums, strict=True):
            yield length, int(count), float(total) / length


def _halved(x: NDArray, times: int) -> NDArray:
    """Sums of 2^times rows that follow each other, by halves: the same bits however many rows there are."""
    for _ in range(times):
        x = x[0::2] + x[1::2]
    return x
