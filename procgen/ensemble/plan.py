"""Which rectangles of paths × steps are drawn and written together.

A *part* is one file. A *chain* is the parts of one range of paths, in the order of their steps; one worker
draws it with the carried state. No value and no digest depends on any choice made here.
"""

from __future__ import annotations

from collections.abc import Iterator
from itertools import pairwise

from procgen.spec.records import dataclass

LANES = 16  # neighbouring paths that share a stream, hence the finest cut
CELL = 1024  # paths in one node of the digest
STEPS = 65_536  # steps in one leaf of the digest

PART_BYTES = 64 << 20
MOST_PARTS = 20_000  # of usual size; beyond, parts grow, so that a manifest and a scheduler can hold them
BUFFER_BYTES = 128 << 20
ALONE_BYTES = 32 << 20  # of one path, of which more at once saves nothing, and memory must be had first
GROUP_ROWS = 1 << 20
TILE = 1 << 18
CACHED = 1 << 16  # values of a tile that stays in the processor's cache; each tile costs 0.1 ms in the interpreter
BUSY_ROWS = 2_000_000  # below this many rows a second worker does not repay
PAST = 1 << 22  # values before step 0 that are drawn at once, for each term that has them
MANY = 4  # parts for each worker from which on it does not matter that the last one is smaller
NARROW = 128  # paths below which row-wise recursions are mostly overhead


@dataclass(frozen=True, order=True)
class Block:
    """A rectangle: `paths` paths from `first_path`, `steps` steps from `first_step`."""

    first_path: int
    paths: int
    first_step: int
    steps: int

    @property
    def rows(self) -> int:
        return self.paths * self.steps

    @property
    def end_path(self) -> int:
        return self.first_path + self.paths

    @property
    def end_step(self) -> int:
        return self.first_step + self.steps

    def common(self, other: Block) -> Block | None:
        """The rectangle that is in both, None when there is none."""
        path, end_path = max(self.first_path, other.first_path), min(self.end_path, other.end_path)
        step, end_step = max(self.first_step, other.first_step), min(self.end_step, other.end_step)
        return Block(path, end_path - path, step, end_step - step) if path < end_path and step < end_step else None

    def within(self, other: Block) -> tuple[slice, slice]:
        """Where this rectangle is in an array (paths, steps) of the other."""
        path, step = self.first_path - other.first_path, self.first_step - other.first_step
        return slice(path, path + self.paths), slice(step, step + self.steps)

    def file(self, whole: Block) -> str:
        """The part's file name; steps are named only where they are not all of `whole`."""
        name = f"paths-{self.first_path:09d}-{self.end_path - 1:09d}"
        if self.steps != whole.steps:
            name += f".steps-{self.first_step:09d}-{self.end_step - 1:09d}"
        return name + ".parquet"

    def __str__(self) -> str:
        return f"paths {self.first_path}–{self.end_path - 1}, steps {self.first_step}–{self.end_step - 1}"


Chain = tuple[Block, ...]


def chains(whole: Block, row_bytes: int, workers: int = 1, widest: int | None = None) -> tuple[Chain, ...]:
    """The parts of `whole`, chain by chain: 35–130 MB each, fewer rows when several workers share them.

    No part has more than `widest` paths, a multiple of CELL, where that is given. Where there are many parts of less
    than a cell, each is a half of a half … of a cell: sums go by halves.
    """
    width, steps = _part_shape(whole, row_bytes)
    width = width if widest is None else min(width, widest)
    halves = 1 << (width.bit_length() - 1)
    if NARROW <= width < CELL and steps == whole.steps and whole.paths >= MANY * workers * halves:
        count, grain = _count(whole, halves, halves), halves
    else:
        count = _count(whole, width, CELL if width % CELL == 0 else LANES)
        if workers > 1 and whole.rows > BUSY_ROWS:
            count = max(count, workers)
            if count < MANY * workers:
                count = -(-count // workers) * workers
        grain = _grain(whole.paths, count)
    ranges = _spread(whole.first_path, whole.paths, count, grain)
    return tuple(tuple(_steps(whole, first, paths, steps)) for first, paths in ranges)


def _grain(paths: int, count: int) -> int:
    """Where to cut into so many parts: at cells, or as coarse as leaves a part four times that; sums go by halves."""
    if paths >= CELL * count:
        return CELL
    grain = LANES
    while 8 * grain * count <= paths:
        grain *= 2
    return grain


def _part_shape(whole: Block, row_bytes: int) -> tuple[int, int]:
    """Paths and steps of a part: all steps when a tolerably wide range of paths then fits."""
    size = max(PART_BYTES, whole.rows * row_bytes // MOST_PARTS)
    narrow = min(whole.paths, NARROW)
    if whole.steps * narrow * row_bytes <= 2 * size:
        width = max(size // (whole.steps * row_bytes), narrow)
        return _floor(width, CELL if width >= CELL else LANES), whole.steps
    room = max(2 * PART_BYTES, size)
    width = _floor(min(narrow, max(room // (STEPS * row_bytes), 1)), LANES)
    blocks = max(room // (min(width, whole.paths) * STEPS * row_bytes), 1)
    return width, min(blocks * STEPS, whole.steps)


def _floor(value: int, grain: int) -> int:
    return max(value // grain, 1) * grain


def _count(block: Block, width: int, grain: int) -> int:
    """Ranges of at most `width` paths, cut at multiples of `grain`, that `block` needs."""
    return -(-(block.first_path % grain + block.paths) // width)


def _spread(first: int, paths: int, count: int, grain: int) -> list[tuple[int, int]]:
    """`count` nearly equal ranges (fewer when there are not so many grains), cut at multiples of grain."""
    start, end = first // grain, -(-(first + paths) // grain)
    count = min(count, end - start)
    cuts = [(start + (end - start) * k // count) * grain for k in range(1, count)]
    edges = [first, *cuts, first + paths]
    return [(a, b - a) for a, b in pairwise(edges)]


def _steps(whole: Block, first_path: int, paths: int, steps: int) -> Iterator[Block]:
    for first in range(whole.first_step, whole.end_step, steps):
        yield Block(first_path, paths, first, min(steps, whole.end_step - first))


def cut(block: Block, rows: int, steps: int | None = None) -> Iterator[Block]:
    """`block` in row order (path, then step), in pieces of about `rows`: whole paths, or a run of one path.

    Ranges of paths are cut at absolute multiples of a lane group where the pieces are wide enough, and as
    if the block had `steps` steps, so that all parts of a chain are cut at the same paths.
    """
    width = rows // (steps or block.steps)
    if width == 0:
        pieces = -(-block.steps // rows)
        size = -(-block.steps // pieces)
        for path in range(block.first_path, block.end_path):
            yield from _steps(block, path, 1, size)
        return
    grain = CELL if width >= CELL else LANES if width >= LANES else 1
    count = _count(block, _floor(width, grain), grain)
    for first, paths in _spread(block.first_path, block.paths, count, grain):
        yield Block(first, paths, block.first_step, block.steps)


def batches(part: Block, row_bytes: int, longest: int | None = None) -> Iterator[Block]:
    """Pieces of a part that are drawn into one buffer, bounded in memory.

    About a million rows, or as many as keep NARROW paths together when the part has many steps. `longest`
    is the number of steps of the longest part of the chain.
    """
    steps = longest or part.steps
    limit = max((ALONE_BYTES if part.paths == 1 else BUFFER_BYTES) // row_bytes, 1)
    yield from cut(part, min(max(GROUP_ROWS, min(part.paths, NARROW) * steps), limit), steps)


def lanes(batch: Block, depth: int = 0) -> Iterator[Block]:
    """Pieces of a batch that one run draws: wide enough that short paths do not pay for many runs.

    `depth` is the most steps before step 0 that the run must draw at once; the width keeps them in memory.
    """
    width = min(max(_floor(TILE // batch.steps, CELL), CELL), 8 * CELL)
    if depth:
        width = max(min(width, PAST // depth), 1)
    yield from cut(batch, width * batch.steps)


def narrow_steps(chain: Chain, row_bytes: int, depth: int = 0) -> int:
    """Steps that a chain takes in runs so narrow that a recursion is mostly the interpreter's time."""
    return sum(
        block.steps
        for part in chain
        for batch in batches(part, row_bytes, chain[0].steps)
        for block in lanes(batch, depth)
        if block.paths <= 2 * NARROW
    )


def tiles(steps: int, paths: int, columns: int = 1, most: int = TILE) -> list[int]:
    """Steps of each tile: about `most` values, less when very many columns are held at once."""
    values = max(min(most, (BUFFER_BYTES >> 3) // columns), 1)
    count = -(-steps // max(values // paths, 1))
    return [steps * (k + 1) // count - steps * k // count for k in range(count)]
