"""Values of a block, from runs: tiles (steps, paths) are turned into rows (paths, steps)."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping
from functools import partial

import numpy as np

from procgen.chance import kernel
from procgen.ensemble.columns import Column
from procgen.ensemble.errors import EnsembleError
from procgen.ensemble.plan import CACHED, TILE, Block, lanes, tiles
from procgen.ensemble.source import Run, Source
from procgen.terms.hands import at_hand, done, each

Tick = Callable[[int], None]  # called with the rows just drawn; may raise to stop the work
State = dict[str, np.ndarray]

WIDE_REPAYS = 8_000_000  # values of terms that gain, some 50 ns each; until then they are drawn plain
APART = 8  # times the steps that are run for nothing which each run of steps of one path must have
APART_LEAST = 1 << 16
REUSED = 24 << 20  # bytes of a block of memory
COMPILING_REPAYS = 1_000_000  # narrow steps; each costs 1 to 7 µs in the interpreter, and compiling a second or two
LOADING_REPAYS = 100_000  # the same where there is machine code, which is loaded in 0.06 s
SHARE_REPAYS = 24_000_000, 4_000_000  # values of a process, 10 to 25 ns each: to compile, which pays next time; to load


class Drawer:
    """Draws the blocks of one chain; keeps the run of each range of paths for the steps that follow."""

    def __init__(self, source: Source, tick: Tick = lambda rows: None, narrow_steps: int = 0, share: int = 0):
        """`share` is the number of values that this process may expect to draw, here and elsewhere."""
        self.source, self.tick = source, tick
        self.compile = repays(source, narrow_steps, share)
        self._left = WIDE_REPAYS if getattr(source, "gains", False) and kernel.available() else None
        self._runs: dict[tuple[int, int], Run] = {}
        self._states: dict[tuple[int, int], tuple[int, State]] = {}
        _reuse_memory()

    def fill(self, batch: Block, out: Mapping[str, np.ndarray]) -> None:
        """Draw `batch` into arrays (paths, steps), one a column.

        Raises EnsembleError when a value is not finite, naming series, path and step.
        """
        with kernel.compiling(self.compile or kernel.is_compiling()):
            for block in lanes(batch, self.source.depth):
                rows = slice(block.first_path - batch.first_path, block.end_path - batch.first_path)
                self._rows(block, {name: values[rows] for name, values in out.items()})
        if self._left is not None:
            self._left -= batch.rows
            self.compile = self.compile or self._left < 0

    def _rows(self, block: Block, out: Mapping[str, np.ndarray]) -> None:
        run = self._run(block)
        alone = kernel.is_compiling() and block.paths == 1 and at_hand() > 1
        early = getattr(run, "early", lambda: math.inf)() if alone else math.inf
        if block.steps < at_hand() * max(APART * early, APART_LEAST):
            self._steps(run, block, out)
        else:
            self._runs[block.first_path, block.paths] = self._apart(run, int(early), block, out)

    def _apart(self, run: Run, early: int, block: Block, out: Mapping[str, np.ndarray]) -> Run:
        """Draw a block of one path in as many runs of steps as there are threads; the run that ends where it ends.

        Each but the first is begun `early` steps before its own, from a state that is a guess. What it was at the first
        of its own steps is held against what the run before ended with, bit by bit; where it differs, that one goes on.
        """
        parts, guess = [*_steps(block, -(-block.steps // at_hand()))], run.state()

        def draw(part: Block) -> tuple[Run, State] | None:
            if part.first_step == block.first_step:
                self._steps(run, part, out, block)
                return run, {}
            own = self.source.run(part.first_path, part.paths)
            own.restore(part.first_step - early, guess)
            try:
                if early:
                    with np.errstate(all="ignore"):
                        own.tile(early)
                began = {name: rows.copy() for name, rows in own.state().items()}
                self._steps(own, part, out, block)
            except EnsembleError:  # of what was guessed, it may be; what is drawn again says so if not
                return None
            return own, began

        found = each(draw, parts)
        for part, drawn in zip(parts[1:], found[1:], strict=True):
            if drawn is not None and _are_same(drawn[1], run.state()):
                run = drawn[0]
            else:
                self._steps(run, part, out, block, again=True)
        return run

    def _steps(
        self, run: Run, part: Block, out: Mapping[str, np.ndarray], block: Block | None = None, again: bool = False
    ) -> None:
        """The next steps of a run, `part` of a block, into arrays that have the block's steps."""
        step, begin = part.first_step, (block or part).first_step
        compiling, columns = kernel.is_compiling(), self.source.columns
        for steps in tiles(part.steps, part.paths, len(columns), CACHED if compiling else TILE):
            with np.errstate(all="ignore"):  # what is not finite is refused below, with its place
                tile = run.tile(steps)
            turning = [partial(turn, tile[column.name], out[column.name], step - begin) for column in columns]
            for column, (infinite, unknown) in zip(columns, each(done, turning), strict=True):
                if infinite or (unknown and not column.gaps):
                    raise _not_finite(column, tile[column.name], part.first_path, step)
            step += steps
            self.tick(0 if again else part.paths * steps)

    def _run(self, block: Block) -> Run:
        key = (block.first_path, block.paths)
        if key not in self._runs:
            self._runs[key] = self.source.run(*key)
            if key in self._states:
                self._runs[key].restore(*self._states.pop(key))
            elif block.first_step:
                raise EnsembleError(f"no state to go on from before {block}; draw its chain from step 0")
        return self._runs[key]

    def forget(self, batch: Block) -> None:
        """Drop the runs of a batch; to be called when they have reached the last step."""
        for key in [key for key in self._runs if batch.first_path <= key[0] < batch.end_path]:
            del self._runs[key]

    def state(self) -> State:
        """The carried state of every run, as named arrays."""
        return {
            f"{first}:{paths}:{name}": values
            for (first, paths), run in self._runs.items()
            for name, values in run.state().items()
        } | {f"{first}:{paths}:": np.empty(0) for first, paths in self._runs}

    def restore(self, step: int, state: Mapping[str, np.ndarray]) -> None:
        """Take up a state that `state` gave after `step` steps."""
        for key, values in state.items():
            first, paths, name = key.split(":", 2)
            states = self._states.setdefault((int(first), int(paths)), (step, {}))[1]
            if name:
                states[name] = values


def _steps(block: Block, steps: int) -> Iterator[Block]:
    """A block in runs of so many steps."""
    for first in range(block.first_step, block.end_step, steps):
        yield Block(block.first_path, block.paths, first, min(steps, block.end_step - first))


def _are_same(some: State, others: State) -> bool:
    """Whether two states are the same bits."""
    if some.keys() != others.keys():
        return False
    pairs = [(rows, others[name]) for name, rows in some.items()]
    return all(a.shape == b.shape and a.dtype == b.dtype and a.tobytes() == b.tobytes() for a, b in pairs)


def repays(source: Source, narrow_steps: int, share: int) -> bool:
    """Whether compiled kernels repay for so many narrow steps of all series, or values of one process."""
    narrow_steps *= len(source.columns)
    if (narrow_steps <= LOADING_REPAYS and share <= min(SHARE_REPAYS)) or not kernel.available():
        return False
    kept = kernel.are_kept()
    least = WIDE_REPAYS if getattr(source, "gains", False) else SHARE_REPAYS[kept]
    return share > least or narrow_steps > (LOADING_REPAYS if kept else COMPILING_REPAYS)


def turn(values: np.ndarray, out: np.ndarray, start: int) -> tuple[int, int]:
    """Values (steps, paths) into the columns from `start` on of out (paths, steps).

    How many are infinite, and how many are not a number, is returned.
    """
    if kernel.is_compiling() and values.flags.c_contiguous and out.flags.c_contiguous:
        odd = np.empty(2, np.int64)
        kernel.machine("compiled", "turned")(values, out, start, odd)
        return int(odd[0]), int(odd[1])
    out[:, start : start + len(values)] = values.T
    return int(np.count_nonzero(np.isinf(values))), int(np.count_nonzero(np.isnan(values)))


def _reuse_memory() -> None:
    """Have the memory of one tile used again for the next, where the C library is glibc; elsewhere it does nothing.

    glibc gives what is free at the end of its memory back to the system once it is twice the largest block freed so
    far (mallopt(3), M_MMAP_THRESHOLD). The arrays of a tile together are more, and to ask for their pages again each
    time took a fifth of all processor time.
    """
    np.empty(REUSED, np.uint8)  # never written to, so that it is no memory


def _not_finite(column: Column, values: np.ndarray, first_path: int, first_step: int) -> EnsembleError:
    step, path = np.argwhere(np.isinf(values) if column.gaps else ~np.isfinite(values))[0]
    where = f"series {column.name}: the value at path {first_path + path}, step {first_step + step}"
    if np.isnan(values[step, path]):
        return EnsembleError(
            f"{where} is not a number: a logit got what is not between its low and high, counts got a mean beyond what "
            "whole numbers a double holds, or two infinities met; hold the body of a logit within its levels (by clip, "
            "or levels further apart), make the mean of counts smaller, and hold what explodes to fewer steps"
        )
    return EnsembleError(
        f"{where} is {values[step, path]}, not a finite number: it is beyond 1.8e308; make smaller what exp, power or "
        "product get, make what explodes stationary, or ask for fewer steps"
    )


def empty(block: Block, columns: list[Column]) -> dict[str, np.ndarray]:
    """Arrays (paths, steps) float64 to draw a block into."""
    return {column.name: np.empty((block.paths, block.steps)) for column in columns}


def together(block: Block, columns: list[Column]) -> dict[str, np.ndarray]:
    """The same as `empty` in one piece of memory, which systems give in large pages where it is large."""
    memory = np.empty((len(columns), block.paths, block.steps))
    return {column.name: memory[k] for k, column in enumerate(columns)}
