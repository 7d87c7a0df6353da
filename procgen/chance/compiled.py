"""Words and uniforms by a compiled Philox: only the lanes that are wanted, the same bits as NumPy's.

Imported only where kernels are compiled (numba, the extra `speed`). NumPy makes all 16 lanes of a group; this makes
the blocks of four that are needed, and holds no lock. Measured, ns a word: one path alone 13 against 61, whole
groups 4 against 5.
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
_UNIT = 2.0**-52


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
def _uniform(word):
    kept = np.int64(word >> np.uint64(12))
    return (np.float64(kept) + 0.5) * _UNIT


@compiled_function
def words(k0, k1, group, section, first, low, high, out):
    """Lanes low to high - 1 of a group at the positions from `first` on, into uint64 out (positions, lanes)."""
    wanted = high - low
    for i in range(out.shape[0]):
        for block in range(low // 4, (high + 3) // 4):
            a, b, c, d = _block(k0, k1, np.uint64(4) * (first + np.uint64(i)) + np.uint64(block), group, section)
            at = 4 * block - low
            if at >= 0:
                out[i, at] = a
            if 0 <= at + 1 < wanted:
                out[i, at + 1] = b
            if 0 <= at + 2 < wanted:
                out[i, at + 2] = c
            if at + 3 < wanted:
                out[i, at + 3] = d


@compiled_function
def uniforms(k0, k1, group, section, first, low, high, out):
    """The same as uniforms ((word >> 12) + 1/2) 2**-52, into float64 out."""
    wanted = high - low
    for i in range(out.shape[0]):
        for block in range(low // 4, (high + 3) // 4):
            a, b, c, d = _block(k0, k1, np.uint64(4) * (first + np.uint64(i)) + np.uint64(block), group, section)
            at = 4 * block - low
            if at >= 0:
                out[i, at] = _uniform(a)
            if 0 <= at + 1 < wanted:
                out[i, at + 1] = _uniform(b)
            if 0 <= at + 2 < wanted:
                out[i, at + 2] = _uniform(c)
            if at + 3 < wanted:
                out[i, at + 3] = _uniform(d)
