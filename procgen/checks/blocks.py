"""Sums in an order that only the addresses of the values decide: the same bits however the data are cut.

Along a path, steps are added one by one in blocks of 64 that begin at multiples of 64; across paths, neighbours are
added first, so that the sum over 32 paths is that over the first 16 plus that over the last 16. Hence the shape of a
tile does not show. What is not finite is left out.
"""

from __future__ import annotations

import math
import threading
from collections.abc import Sequence
from functools import cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.chance.kernel import is_compiling, machine

BLOCK = 64  # steps
GROUP = 16  # paths: a lane group of the ensemble, the finest cut between two parts
WIDE = 32  # paths from which on compiled passes are worth their calls (measured: at 16 neither form is quicker)
_FEW = 256  # values beyond bounds for which room is made
_local = threading.local()


@cache
def keep_memory() -> None:
    """Let memory that a tile gives back be had again by the next one, which costs the system less than new memory.

    glibc keeps as much as twice the largest array that was freed (mallopt(3), M_MMAP_THRESHOLD: up to 32 MB); others
    do as they do.
    """
    np.empty(31 << 17)  # 31 MB, of which nothing is touched


def scratch(steps: int, paths: int, number: int = 0) -> NDArray:
    """An array to compute in, the same memory at each call of a thread: fresh memory costs more than the sums."""
    kept: dict[int, NDArray] = _local.__dict__.setdefault("kept", {})
    size = steps * paths
    if number not in kept or kept[number].size < size:
        kept[number] = np.empty(size)
    return kept[number][:size].reshape(steps, paths)


def room(sizes: tuple[int, ...]) -> tuple[NDArray, ...]:
    """Arrays of these sizes to compute in, the same memory at each call of a thread."""
    kept: dict[tuple[int, ...], tuple[NDArray, ...]] = _local.__dict__.setdefault("rooms", {})
    if sizes not in kept:
        kept[sizes] = tuple([np.empty(size) for size in sizes])
    return kept[sizes]


def borrowed(size: int) -> NDArray:
    """Memory that lives longer than a call: that of the last one of this size that was given back, if there is one."""
    free: dict[int, list[NDArray]] = _local.__dict__.setdefault("free", {})
    return free[size].pop() if free.get(size) else np.empty(size)


def give_back(memory: NDArray) -> None:
    """Let `borrowed` lend this memory again: nothing looks at it any more."""
    _local.__dict__.setdefault("free", {}).setdefault(memory.size, []).append(memory)


def compiled(paths: int) -> bool:
    """Whether tiles of so many paths go through compiled passes."""
    return is_compiling() and paths >= WIDE


def in_one_pass(name: str, *args: Any, module: str = "fused") -> None:
    """Call a function of `fused`, or of another such module, by its name: machine code that fills arrays."""
    machine(module, name, __package__)(*args)


def in_few(name: str, *args: Any) -> None:
    """Call a function of `fused_few`, which goes along the paths one by one."""
    in_one_pass(name, *args, module="fused_few")


def places_beyond(x: NDArray, rows: NDArray, low: NDArray, high: NDArray) -> tuple[NDArray, NDArray, NDArray]:
    """Of the values of some rows of x that are below low or above high (rows,): place among the rows, column, value."""
    if is_compiling() and x.flags.c_contiguous:
        at, columns, found = np.empty(_FEW, np.int64), np.empty(_FEW, np.int64), np.empty(1, np.int64)
        values = np.empty(_FEW)
        in_one_pass("beyond", x, rows, low, high, at, columns, values, found, module="beyond")
        if (count := int(found[0])) <= _FEW:
            return at[:count], columns[:count], values[:count]
    some = x[rows]
    at, columns = np.nonzero((some < low[:, None]) | (some > high[:, None]))
    return at, columns, some[at, columns]


def all_known(z: NDArray) -> bool:
    """Whether all of an array is finite: its product with itself tells, but for an overflow, in half the time."""
    return (z.flags.c_contiguous and math.isfinite(np.dot(z.ravel(), z.ravel()))) or bool(np.isfinite(z).all())


def across(x: NDArray) -> NDArray:
    """Sum over the last axis, neighbours first."""
    while x.shape[-1] > 1:
        if x.shape[-1] % 2:
            x = np.concatenate([x, np.zeros((*x.shape[:-1], 1), x.dtype)], axis=-1)
        x = x[..., 0::2] + x[..., 1::2]
    return x[..., 0]


def down(x: NDArray) -> NDArray:
    """Sum over the first axis, neighbours first: `across` for what lies row by row."""
    while len(x) > 1:
        if len(x) % 2:
            x = np.concatenate([x, np.zeros_like(x[:1])])
        x = x[0::2] + x[1::2]
    return x[0]


def add_products(total: NDArray, a: NDArray, b: NDArray | None = None, offset: int = 0) -> int:
    """Add a·b (or a), summed over the steps of each path, to `total` (paths,); how many were known.

    `a` and `b` (steps, paths) begin `offset` steps after a multiple of 64.
    """
    factors = (a,) if b is None else (a, b)
    new = _summed(total, factors, offset)
    count = a.size
    if not np.isfinite(new).all():
        known = np.isfinite(a) if b is None else np.isfinite(a) & np.isfinite(b)
        new = _summed(total, [np.where(known, x, 0.0) for x in factors], offset)
        count = int(np.count_nonzero(known))
    total[...] = new
    return count


def _summed(total: NDArray, factors: Sequence[NDArray], offset: int) -> NDArray:
    steps, paths = factors[0].shape
    if is_compiling() and all(x.flags.c_contiguous for x in factors):
        new, both = total.copy(), len(factors) - 1
        if compiled(paths):
            in_one_pass("add_products", new, factors[0], factors[-1], both, offset, np.empty(paths))
        else:
            in_few("add_products", new, factors[0].reshape(-1), factors[-1].reshape(-1), both, offset)
        return new
    head = min(-offset % BLOCK, steps)
    middle = head + (steps - head) // BLOCK * BLOCK
    for start, end in ((0, head), (head, middle), (middle, steps)):
        if start < end:
            height = min(end - start, BLOCK)
            sums = _block_sums([x[start:end].reshape(-1, height, paths) for x in factors])
            if len(sums) > 4:
                total = np.add.accumulate(np.concatenate([total[None], sums]), axis=0)[-1]
            else:
                for one in sums:
                    total = total + one
    return total


def _block_sums(factors: Sequence[NDArray]) -> NDArray:
    """(blocks, paths): sums over the steps of each block, (blocks, steps, paths), one step after another.

    The library adds whole rows in turn, whatever their width. Less than a lane group is the same few paths however
    the ensemble is cut; its columns are long and go one by one.
    """
    paths = factors[0].shape[2]
    both = len(factors) > 1
    if paths >= GROUP - 1:  # or the pairs of neighbours in one
        return np.einsum("btp,btp->bp" if both else "btp->bp", *factors)
    if paths == 1:  # what lies side by side the library adds in another order
        one, two = factors[0][:, :, 0], factors[-1][:, :, 0]
        apart = scratch(one.size, 2, 9)[:, 0].reshape(one.shape)
        np.copyto(apart, one) if not both else np.multiply(one, two, out=apart)
        return np.einsum("bt->b", apart)[:, None]
    columns = [np.einsum("bt,bt->b" if both else "bt->b", *(x[:, :, k] for x in factors)) for k in range(paths)]
    return np.stack(columns, axis=1)


class Window:
    """The last rows of something that comes tile by tile, and the newest tile behind them, in one array."""

    def __init__(self, reach: int, paths: int):
        self.reach, self.held, self.paths = reach, 0, paths
        self._rows, self._end = np.empty((0, paths)), 0

    def next(self, count: int) -> NDArray:
        """Where the next `count` rows will be: who fills them in here spares `push` to copy them."""
        if self._end + count > len(self._rows):
            self._make_room(count)
        return self._rows[self._end : self._end + count]

    def newest(self, count: int) -> NDArray:
        """The last `count` rows, which have all been pushed since there was last room made."""
        return self._rows[self._end - count : self._end]

    def push(self, rows: NDArray) -> NDArray:
        """The held rows followed by the new ones; a view that lives until the next push."""
        view = self.room(len(rows))
        view[len(view) - len(rows) :] = rows  # no copy where they are there already
        return view

    def room(self, count: int) -> NDArray:
        """The held rows followed by `count` new ones, which the caller fills."""
        self.next(count)
        view = self._rows[self._end - self.held : self._end + count]
        self._end += count
        self.held = min(self.reach, self.held + count)
        return view

    def _make_room(self, count: int) -> None:
        size = self.reach + max(count, 2 * BLOCK, self.reach)
        old, rows = self._rows, self._rows if len(self._rows) >= size else _rows(size, self.paths)
        rows[: self.held] = old[self._end - self.held : self._end].copy()
        if rows is not old:
            self.close()
        self._rows, self._end = rows, self.held

    def close(self) -> None:
        """Give the memory back."""
        if self._rows.size:
            give_back(self._rows.reshape(-1))
            self._rows = self._rows[:0]


def _rows(size: int, paths: int) -> NDArray:
    return borrowed(size * paths).reshape(size, paths)


def add_lagged(total: NDArray, later: NDArray, earlier: NDArray, lag: int, steps: int, offset: int = 0) -> int:
    """`add_products` of later[t] · earlier[t − lag] for the last `steps` steps of two windows' views.

    Both views end at the same step. Steps whose partner is not there are left out.
    """
    count = min(steps, len(later), len(earlier) - lag)
    if count <= 0:
        return 0
    end = len(earlier) - lag
    return add_products(total, later[len(later) - count :], earlier[end - count : end], offset + steps - count)


def add_lags(totals: NDArray, a: NDArray, b: NDArray, lags: Sequence[int], steps: int, ready: int = 0) -> list[int]:
    """`add_lagged` for each row of `totals`: a goes with b so many steps earlier, at a lag below 0 b with a.

    Of the last `steps` steps and of what came before them, only those count that are not before step `ready` of these.
    """
    sides = [(a, b, lag) if lag >= 0 else (b, a, -lag) for lag in lags]
    new = [min(steps, steps - ready - lag) for _, _, lag in sides]
    if is_compiling() and a.flags.c_contiguous and b.flags.c_contiguous:
        known = [max(min(n, len(x), len(y) - lag), 0) for n, (x, y, lag) in zip(new, sides, strict=True)]
        sums, both = totals.copy(), (np.array(lags), np.array(known))
        if compiled(totals.shape[1]):
            in_one_pass("lagged", a, b, steps, *both, sums, np.empty(totals.shape[1]))
        else:
            in_few("lagged", a.reshape(-1), b.reshape(-1), steps, *both, sums)
        if np.isfinite(sums).all():
            totals[...] = sums
            return [totals.shape[1] * count for count in known]
    rows = zip(totals, sides, new, strict=True)
    return [add_lagged(total, *side, n, steps - n) for total, side, n in rows]
