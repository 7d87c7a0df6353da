"""The standard normal quantile of `normal`, compiled: the middle of the law eight values at a time, then its tails.

Imported only where kernels are compiled (numba, the extra `speed`). The same operations in the same order as the plain
form, so that the bits are the same.
"""

from __future__ import annotations

from functools import partial

import numpy as np

from procgen.chance import normal
from procgen.chance.compiled_elementary import _log
from procgen.chance.kernel import compiled_function

_A7, _A6, _A5, _A4, _A3, _A2, _A1, _A0 = normal._CENTRE_TOP
_B7, _B6, _B5, _B4, _B3, _B2, _B1, _B0 = normal._CENTRE_BELOW
_C7, _C6, _C5, _C4, _C3, _C2, _C1, _C0 = normal._MIDDLE_TOP
_D7, _D6, _D5, _D4, _D3, _D2, _D1, _D0 = normal._MIDDLE_BELOW
_E7, _E6, _E5, _E4, _E3, _E2, _E1, _E0 = normal._FAR_TOP
_F7, _F6, _F5, _F4, _F3, _F2, _F1, _F0 = normal._FAR_BELOW


@partial(compiled_function, inline="always")
def _horner(x, c7, c6, c5, c4, c3, c2, c1, c0):
    return ((((((x * c7 + c6) * x + c5) * x + c4) * x + c3) * x + c2) * x + c1) * x + c0


@partial(compiled_function, inline="always")
def _far(r):
    r = r - 5.0
    top = _horner(r, _E7, _E6, _E5, _E4, _E3, _E2, _E1, _E0)
    return top / _horner(r, _F7, _F6, _F5, _F4, _F3, _F2, _F1, _F0)


def quantile(u, out, at_hand, tails, r, places):
    """Quantiles of a float64 vector; out may be u.

    The others are work arrays of one length, float64 but for `places`, which is int64.
    """
    chunk = at_hand.shape[0]
    for first in range(0, u.shape[0], chunk):
        given, found = u[first : first + chunk], out[first : first + chunk]
        size, count = given.shape[0], 0
        for i in range(size):
            q = given[i] - 0.5
            at_hand[i] = given[i]  # u and out may be one, and what may overlap is done value by value
            tails[count] = given[i]
            places[count] = i
            count += 0.180625 - q * q < 0.0  # |u - 1/2| > 0.425
        for i in range(size):
            q = at_hand[i] - 0.5
            x = 0.180625 - q * q
            top = _horner(x, _A7, _A6, _A5, _A4, _A3, _A2, _A1, _A0)
            found[i] = q * top / _horner(x, _B7, _B6, _B5, _B4, _B3, _B2, _B1, _B0)
        for i in range(count):
            r[i] = np.sqrt(-_log(min(tails[i], 1.0 - tails[i])))
            x = r[i] - 1.6
            top = _horner(x, _C7, _C6, _C5, _C4, _C3, _C2, _C1, _C0)
            x = top / _horner(x, _D7, _D6, _D5, _D4, _D3, _D2, _D1, _D0)
            tails[i] = np.copysign(x, tails[i] - 0.5)
        for i in range(count):
            found[places[i]] = tails[i] if not r[i] > 5.0 else np.copysign(_far(r[i]), tails[i])
