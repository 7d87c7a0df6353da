"""exp and log of `elementary`, compiled: a value goes through all operations while it is at hand.

Imported only where kernels are compiled (numba, the extra `speed`). The same operations in the same order as the plain
form, so that the bits are the same.
"""

from __future__ import annotations

from functools import partial
from typing import Any

import numpy as np
from llvmlite import ir
from numba import types
from numba.extending import intrinsic

from procgen.chance import elementary
from procgen.chance.kernel import compiled_function

_LN2_HIGH, _LN2_LOW, _PER_LN2 = elementary._LN2_HIGH, elementary._LN2_LOW, elementary._PER_LN2
_E4, _E3, _E2, _E1, _E0 = elementary._EXP
_L6, _L5, _L4, _L3, _L2, _L1, _L0 = elementary._LOG
_SQRT_HALF_BITS, _MANTISSA = elementary._SQRT_HALF_BITS, elementary._MANTISSA
_WHOLE = 6755399441055744.0  # 1.5 * 2**52: added to a small whole number, its last bits are that number
_WHOLE_BITS = 0x4338000000000000


@intrinsic
def _bits(typing: Any, x: Any) -> Any:
    """The 64 bits of a float64."""

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        return builder.bitcast(arguments[0], ir.IntType(64))

    return types.int64(types.float64), generate


@intrinsic
def _float(typing: Any, bits: Any) -> Any:
    """The float64 of 64 bits."""

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        return builder.bitcast(arguments[0], ir.DoubleType())

    return types.float64(types.int64), generate


@partial(compiled_function, inline="always")
def _exp(x):
    """e**x as in `elementary.times_exp`; nan becomes any number."""
    high = -800.0 if not x > -800.0 else x
    high = 800.0 if high > 800.0 else high
    k = np.rint(high * _PER_LN2)
    high = high - k * _LN2_HIGH
    tail = k * _LN2_LOW
    r = high - tail
    square = r * r
    p = (((square * _E4 + _E3) * square + _E2) * square + _E1) * square + _E0
    p = r - p * square
    r = 1.0 - ((tail - r * p / (2.0 - p)) - high)
    bits = _bits(k + _WHOLE) - _WHOLE_BITS
    half = bits >> 1
    return r * _float((half + 1023) << 52) * _float((bits - half + 1023) << 52)


@partial(compiled_function, inline="always")
def _log(x):
    """log x as in `elementary.log_of`, and of all that is not an ordinary number, too."""
    tiny = x < 2.0**-1022
    found = _log_of_ordinary(x * 2.0**54 if tiny else x)
    found = found - 54 * _LN2_HIGH - 54 * _LN2_LOW if tiny else found
    found = found if x < np.inf else x
    return found if x > 0.0 else -np.inf if x == 0.0 else np.nan


@partial(compiled_function, inline="always")
def _log_of_ordinary(x):
    bits = _bits(x) - _SQRT_HALF_BITS
    k = _float((bits >> 52) + _WHOLE_BITS) - _WHOLE
    f = _float((bits & _MANTISSA) + _SQRT_HALF_BITS) - 1.0
    s = f / (f + 2.0)
    z = s * s
    r = ((((((z * _L6 + _L5) * z + _L4) * z + _L3) * z + _L2) * z + _L1) * z + _L0) * z
    half = f * 0.5 * f
    r = s * (half + r) + k * _LN2_LOW
    return k * _LN2_HIGH - ((half - r) - f)


def exp(x, out, at_hand):
    """e**x of float64 vectors; out may be x, so that some values are taken to hand first: they lie apart from both."""
    chunk = at_hand.shape[0]
    for first in range(0, x.shape[0], chunk):
        given, found = x[first : first + chunk], out[first : first + chunk]
        for i in range(given.shape[0]):
            at_hand[i] = given[i]
        for i in range(given.shape[0]):
            value = _exp(at_hand[i])
            found[i] = value if at_hand[i] == at_hand[i] else np.nan


def log(x, out, at_hand):
    """log x of float64 vectors; out may be x."""
    chunk = at_hand.shape[0]
    for first in range(0, x.shape[0], chunk):
        given, found = x[first : first + chunk], out[first : first + chunk]
        for i in range(given.shape[0]):
            at_hand[i] = given[i]
        for i in range(given.shape[0]):
            found[i] = _log(at_hand[i])
