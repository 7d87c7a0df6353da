"""Words and uniforms by a compiled Philox: only the lanes that are wanted, the same bits as NumPy's.

Imported only where kernels are compiled (numba, the extra `speed`). NumPy makes all 16 lanes of a group, group after
group; this makes the blocks of four paths that are needed, row after row as they lie in memory, and holds no lock.
Processors that multiply eight numbers at once (AVX-512) make eight blocks at a time, from products of halves of words.
`turned` is here as well: rows of steps become rows of paths.
"""

from __future__ import annotations

from functools import partial
from typing import Any

import numpy as np
from llvmlite import ir
from numba import types
from numba.extending import intrinsic

from procgen.chance.kernel import compiled_function

_M0, _M1 = np.uint64(0xD2E7470EE14C6C93), np.uint64(0xCA5A826395121157)
_W0, _W1 = np.uint64(0x9E3779B97F4A7C15), np.uint64(0xBB67AE8584CAA73B)
_ROUNDS = 10
_LOW, _HALF = np.uint64(0xFFFFFFFF), np.uint64(32)
_WIDE = 16  # blocks of a row that are made abreast
_UNIT = 2.0**-52
_SQUARE = 16  # values: two lines of a cache


@intrinsic
def _high(typing: Any, a: Any, b: Any) -> Any:
    """The upper 64 bits of a product of two 64-bit words."""

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        wide = ir.IntType(128)
        product = builder.mul(*(builder.zext(argument, wide) for argument in arguments))
        return builder.trunc(builder.lshr(product, ir.Constant(wide, 64)), ir.IntType(64))

    return types.uint64(types.uint64, types.uint64), generate


@partial(compiled_function, inline="always")
def _block(k0, k1, c0, c1, c2):
    """Philox4x64-10 (Salmon, Moraes, Dror & Shaw 2011) of the counter (c0, c1, c2, 0)."""
    c3 = np.uint64(0)
    for _ in range(_ROUNDS):
        h0, l0, h1, l1 = _high(_M0, c0), _M0 * c0, _high(_M1, c2), _M1 * c2
        c0, c1, c2, c3 = h1 ^ c1 ^ k0, l1, h0 ^ c3 ^ k1, l0
        k0 += _W0
        k1 += _W1
    return c0, c1, c2, c3


@partial(compiled_function, inline="always")
def _high_of_halves(a, b):
    """The same as `_high`, by operations that a processor has for many numbers at once."""
    low, high = b & _LOW, b >> _HALF
    across = (a & _LOW) * high + (((a & _LOW) * low) >> _HALF)
    rest = (a >> _HALF) * low + (across & _LOW)
    return (a >> _HALF) * high + (across >> _HALF) + (rest >> _HALF)


@partial(compiled_function, inline="always")
def _round(k0, k1, c0, c1, c2, c3):
    return _high_of_halves(_M1, c2) ^ c1 ^ k0, _M1 * c2, _high_of_halves(_M0, c0) ^ c3 ^ k1, _M0 * c0


@partial(compiled_function, inline="always")
def _block_of_halves(k0, k1, c0, c1, c2):
    """The same as `_block`, round after round without a loop: then many blocks are made abreast."""
    c3 = np.uint64(0)
    c0, c1, c2, c3 = _round(k0, k1, c0, c1, c2, c3)
    c0, c1, c2, c3 = _round(k0 + np.uint64(1) * _W0, k1 + np.uint64(1) * _W1, c0, c1, c2, c3)
    c0, c1, c2, c3 = _round(k0 + np.uint64(2) * _W0, k1 + np.uint64(2) * _W1, c0, c1, c2, c3)
    c0, c1, c2, c3 = _round(k0 + np.uint64(3) * _W0, k1 + np.uint64(3) * _W1, c0, c1, c2, c3)
    c0, c1, c2, c3 = _round(k0 + np.uint64(4) * _W0, k1 + np.uint64(4) * _W1, c0, c1, c2, c3)
    c0, c1, c2, c3 = _round(k0 + np.uint64(5) * _W0, k1 + np.uint64(5) * _W1, c0, c1, c2, c3)
    c0, c1, c2, c3 = _round(k0 + np.uint64(6) * _W0, k1 + np.uint64(6) * _W1, c0, c1, c2, c3)
    c0, c1, c2, c3 = _round(k0 + np.uint64(7) * _W0, k1 + np.uint64(7) * _W1, c0, c1, c2, c3)
    c0, c1, c2, c3 = _round(k0 + np.uint64(8) * _W0, k1 + np.uint64(8) * _W1, c0, c1, c2, c3)
    c0, c1, c2, c3 = _round(k0 + np.uint64(9) * _W0, k1 + np.uint64(9) * _W1, c0, c1, c2, c3)
    return c0, c1, c2, c3


@partial(compiled_function, inline="always")
def _uniform(word):
    kept = np.int64(word >> np.uint64(12))
    return (np.float64(kept) + 0.5) * _UNIT


@partial(compiled_function, inline="always")
def _position(step):
    """The section of a step, and its place there (see `streams`)."""
    return (np.uint64(1), np.uint64(-1 - step)) if step < 0 else (np.uint64(0), np.uint64(step))


@partial(compiled_function, inline="always")
def _ends(path, paths):
    """The first block of four paths that is wanted, the first and the end of whole ones, and the end of all."""
    first, end = path // 4, (path + paths + 3) // 4
    return first, min((path + 3) // 4, end), max((path + paths) // 4, first), end


def turned(values, out, first, odd):
    """Values (steps, paths) into the columns from `first` on of out (paths, steps), a square at a time.

    odd: int64, how many are infinite, and how many are not a number.
    """
    steps, paths = values.shape
    infinite, unknown = 0, 0
    if paths == 1:  # a loop over one path in a loop over steps is not done eight at a time
        for step in range(steps):
            x = values[step, 0]
            out[0, first + step] = x
            infinite += abs(x) == np.inf
            unknown += x != x
    for i in range(steps if paths > 1 else 0):
        for j in range(paths):
            infinite += abs(values[i, j]) == np.inf
            unknown += values[i, j] != values[i, j]
    odd[0], odd[1] = infinite, unknown
    for path in range(0, paths if paths > 1 else 0, _SQUARE):
        for step in range(0, steps, _SQUARE):
            if path + _SQUARE <= paths and step + _SQUARE <= steps:
                for i in range(path, path + _SQUARE):
                    for j in range(step, step + _SQUARE):
                        out[i, first + j] = values[j, i]
            else:
                for i in range(path, min(path + _SQUARE, paths)):
                    for j in range(step, min(step + _SQUARE, steps)):
                        out[i, first + j] = values[j, i]


def whole(values, out, most, stopped, at_hand):
    """Whole numbers as int64, into out, which may be the memory of the float64 values.

    stopped[0]: where it stopped, before as many values as are at hand, of which one is not whole or beyond `most`.
    """
    stopped[0], chunk = values.shape[0], at_hand.shape[0]
    for first in range(0, values.shape[0], chunk):
        given, found = values[first : first + chunk], out[first : first + chunk]
        wrong = 0
        for i in range(given.shape[0]):
            at_hand[i] = given[i]
        for i in range(given.shape[0]):
            wrong += not (np.rint(at_hand[i]) == at_hand[i] and abs(at_hand[i]) <= most)
        if wrong > 0:
            stopped[0] = first
            break
        for i in range(given.shape[0]):
            found[i] = np.int64(at_hand[i])


def words(k0, k1, step, path, out):
    """The words of the steps and paths from these on, into uint64 out (steps, paths)."""
    k0, k1 = np.uint64(k0), np.uint64(k1)
    paths = out.shape[1]
    for i in range(out.shape[0]):
        section, place = _position(step + i)
        for block in range(path // 4, (path + paths + 3) // 4):
            four = _block(k0, k1, np.uint64(4) * place + np.uint64(block & 3), np.uint64(block >> 2), section)
            for lane in range(4):
                at = 4 * block + lane - path
                if 0 <= at < paths:
                    out[i, at] = four[lane]


@partial(compiled_function, inline="always")
def _put(four, out, at, paths):
    """Uniforms of a block into a row, those that are inside."""
    for lane in range(4):
        if 0 <= at + lane < paths:
            out[at + lane] = _uniform(four[lane])


def uniforms(k0, k1, step, path, out, work):
    """The same as uniforms ((word >> 12) + 1/2) 2**-52, into float64 out; work: float64 (4, any number)."""
    k0, k1 = np.uint64(k0), np.uint64(k1)
    paths = out.shape[1]
    first, whole, cut, end = _ends(path, paths)
    for i in range(out.shape[0]):
        section, place = _position(step + i)
        row, line = np.uint64(4) * place, out[i]
        for block in range(whole, cut):
            a, b, c, d = _block(k0, k1, row + np.uint64(block & 3), np.uint64(block >> 2), section)
            at = 4 * block - path
            line[at] = _uniform(a)
            line[at + 1] = _uniform(b)
            line[at + 2] = _uniform(c)
            line[at + 3] = _uniform(d)
        for block in range(first, end):
            if block < whole or block >= cut:
                four = _block(k0, k1, row + np.uint64(block & 3), np.uint64(block >> 2), section)
                _put(four, line, 4 * block - path, paths)


def uniforms_abreast(k0, k1, step, path, out, work):
    """The same, many blocks at once: those of a row, or where these are few, one of each step."""
    k0, k1 = np.uint64(k0), np.uint64(k1)
    steps, paths = out.shape
    first, whole, cut, end = _ends(path, paths)
    wide = cut - whole >= _WIDE
    for i in range(steps if wide else 0):
        section, place = _position(step + i)
        row, inside = np.uint64(4) * place, out[i, 4 * whole - path :]
        for j in range(cut - whole):
            at = whole + j
            a, b, c, d = _block_of_halves(k0, k1, row + np.uint64(at & 3), np.uint64(at >> 2), section)
            inside[4 * j] = _uniform(a)
            inside[4 * j + 1] = _uniform(b)
            inside[4 * j + 2] = _uniform(c)
            inside[4 * j + 3] = _uniform(d)
    at_hand = work.shape[1]
    for block in range(first, end):
        if wide and whole <= block < cut:
            continue
        within, group, at = np.uint64(block & 3), np.uint64(block >> 2), 4 * block - path
        alone = at >= 0 and paths - at == 1  # the first word of four: what the others need is not done
        for i in range(steps if alone else 0):
            section, place = _position(step + i)
            out[i, at] = _uniform(_block_of_halves(k0, k1, np.uint64(4) * place + within, group, section)[0])
        for begin in range(0, 0 if alone else steps, at_hand):
            size = min(at_hand, steps - begin)
            for i in range(size):
                section, place = _position(step + begin + i)
                a, b, c, d = _block_of_halves(k0, k1, np.uint64(4) * place + within, group, section)
                work[0, i], work[1, i], work[2, i], work[3, i] = _uniform(a), _uniform(b), _uniform(c), _uniform(d)
            if whole <= block < cut:
                for i in range(size):
                    line = out[begin + i]
                    line[at], line[at + 1], line[at + 2], line[at + 3] = work[0, i], work[1, i], work[2, i], work[3, i]
            else:
                for lane in range(max(-at, 0), min(paths - at, 4)):
                    for i in range(size):
                        out[begin + i, at + lane] = work[lane, i]
