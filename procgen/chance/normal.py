"""The standard normal law's quantile and tail area, with the same bits on every processor.

Sources. normal_quantile: Wichura (1988), Algorithm AS 241 (PPND16), Applied Statistics 37. normal_tail:
exp(-x*x/2) F(x) / (1 + x) with a Chebyshev series for F, after Shepherd & Laframboise (1981), Math. Comp. 36.
"""

from __future__ import annotations

import numpy as np

from procgen.chance.blocks import CHUNK, Scratch, blockwise
from procgen.chance.elementary import horner, log_of, times_exp
from procgen.chance.kernel import is_compiling, machine

_FAR = 40.0  # the tail area beyond is below the smallest float64
_TOP_BITS = np.int64(-(2**27))  # keeps 26 significant bits: their square is exact
_TAIL = (  # F as a polynomial in t = (x - 5) / (x + 5), from a 60-digit Chebyshev fit
    1.999987921814362e-12,
    6.91270385745006e-11,
    1.2087076525191777e-11,
    -8.13625617353924e-10,
    -3.9535493671930353e-10,
    5.589280598259154e-09,
    3.9599312599894615e-09,
    -3.284221001906357e-08,
    -2.681448263817682e-08,
    1.982020450987373e-07,
    1.2839876433087923e-07,
    -1.30875688513428e-06,
    -7.068168509613507e-08,
    9.060427180103588e-06,
    -9.89595457627609e-06,
    -5.360776760261054e-05,
    0.00018233410500499993,
    7.791635118256678e-06,
    -0.0016760723374482289,
    0.006522000663070282,
    -0.015170415403256404,
    0.024536963244008607,
    -0.02640104296626838,
    0.01000235238521867,
    0.03103036842596287,
    -0.09155228183400893,
)
_TAIL_MIDDLE = 0.46151582985003775


def normal_quantile(u, out: np.ndarray | None = None) -> np.ndarray:
    """The standard normal quantile of u in (0, 1), elementwise; out may be u itself.

    Wichura (1988), Algorithm AS 241, PPND16: about 1 part in 1e16, from the tail area min(u, 1 - u) and its side.
    """
    return blockwise(_compiled, u, out, whole=True) if is_compiling() else blockwise(_normal_quantile, u, out)


def normal_tail(x, out: np.ndarray | None = None) -> np.ndarray:
    """The area Q(x) of the standard normal law above x >= 0, elementwise, within 2 ulp; 0 beyond 38.5.

    For a value of either sign, normal_tail(abs(z)) is the area beyond it on its own side. nan below 0 and for nan.
    """
    return blockwise(normal_tail_of, x, out)


def normal_tail_of(x: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
    """normal_tail of one block; uses the work arrays 0 to 11."""
    n = len(x)
    near, low, f, t, below, part = (scratch(i, n) for i in range(6, 12))
    np.fmin(np.fmax(x, 0.0, out=near), _FAR, out=near)
    np.divide(near, np.add(near, 5.0, out=below), out=t)
    np.subtract(np.multiply(t, 2.0, out=t), 1.0, out=t)  # (x - 5) / (x + 5), and accurate for small x
    np.multiply(horner(_TAIL, t, below), t, out=t)
    np.add(t, _TAIL_MIDDLE, out=f)
    # What rounding takes from F, 1 + x, their quotient and x*x goes into the exponent, where it is not lost.
    np.subtract(t, np.subtract(f, _TAIL_MIDDLE, out=below), out=t)
    np.divide(t, f, out=low)
    np.add(near, 1.0, out=below)
    np.subtract(near, np.subtract(below, 1.0, out=t), out=t)
    np.subtract(low, np.divide(t, below, out=t), out=low)
    quotient = scratch(0, n)
    np.divide(f, below, out=quotient)
    np.add(low, np.divide(_residue(f, quotient, below, scratch), f, out=t), out=low)
    np.copyto(f, quotient)
    _top_bits(near, part)  # x*x = part*part + (x - part)(x + part)
    np.subtract(near, part, out=t)
    np.multiply(t, np.add(near, part, out=below), out=t)
    np.subtract(low, np.multiply(t, 0.5, out=t), out=low)
    np.multiply(np.multiply(part, part, out=part), -0.5, out=part)
    times_exp(f, part, low, t, scratch)
    t[np.flatnonzero(~(x >= 0.0))] = np.nan
    np.copyto(out, t)


def _top_bits(x: np.ndarray, out: np.ndarray) -> np.ndarray:
    """x cut to 26 significant bits, so that a product of two such numbers is exact."""
    np.bitwise_and(x.view(np.int64), _TOP_BITS, out=out.view(np.int64))
    return out


def _residue(value: np.ndarray, a: np.ndarray, b: np.ndarray, scratch: Scratch) -> np.ndarray:
    """value - a b for a b close to value, but for a few bits of the last place (Dekker 1971)."""
    n = len(value)
    a_top, b_top, rest, term = (scratch(i, n) for i in range(1, 5))
    _top_bits(a, a_top)
    _top_bits(b, b_top)
    np.subtract(value, np.multiply(a_top, b_top, out=rest), out=rest)
    np.subtract(b, b_top, out=term)
    np.subtract(rest, np.multiply(a_top, term, out=term), out=rest)
    np.multiply(np.subtract(a, a_top, out=term), b, out=term)
    return np.subtract(rest, term, out=rest)


_CENTRE_TOP = (
    2509.0809287301226727,
    33430.575583588128105,
    67265.770927008700853,
    45921.953931549871457,
    13731.693765509461125,
    1971.5909503065514427,
    133.14166789178437745,
    3.387132872796366608,
)
_CENTRE_BELOW = (
    5226.495278852545925,
    28729.085735721942674,
    39307.89580009271061,
    21213.794301586595867,
    5394.1960214247511077,
    687.1870074920579083,
    42.313330701600911252,
    1.0,
)
_MIDDLE_TOP = (
    7.7454501427834140764e-4,
    0.0227238449892691845833,
    0.24178072517745061177,
    1.27045825245236838258,
    3.64784832476320460504,
    5.7694972214606914055,
    4.6303378461565452959,
    1.42343711074968357734,
)
_MIDDLE_BELOW = (
    1.05075007164441684324e-9,
    5.475938084995344946e-4,
    0.0151986665636164571966,
    0.14810397642748007459,
    0.68976733498510000455,
    1.6763848301838038494,
    2.05319162663775882187,
    1.0,
)
_FAR_TOP = (
    2.01033439929228813265e-7,
    2.71155556874348757815e-5,
    0.0012426609473880784386,
    0.026532189526576123093,
    0.29656057182850489123,
    1.7848265399172913358,
    5.4637849111641143699,
    6.6579046435011037772,
)
_FAR_BELOW = (
    2.04426310338993978564e-15,
    1.4215117583164458887e-7,
    1.8463183175100546818e-5,
    7.868691311456132591e-4,
    0.0148753612908506148525,
    0.13692988092273580531,
    0.59983220655588793769,
    1.0,
)


def _compiled(u: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
    work = [scratch(i, CHUNK) for i in range(3)]
    machine("compiled_normal", "quantile")(u, out, *work, scratch(0, CHUNK, np.int64))


def _normal_quantile(u: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
    n = len(u)
    q, r, top, below = (scratch(i, n) for i in (6, 7, 8, 9))
    np.subtract(u, 0.5, out=q)
    np.subtract(0.180625, np.multiply(q, q, out=r), out=r)
    outside = np.flatnonzero(np.less(r, 0.0, out=scratch(0, n, np.bool_)))  # |u - 1/2| > 0.425
    tail = u[outside]
    horner(_CENTRE_TOP, r, top)
    horner(_CENTRE_BELOW, r, below)
    np.divide(np.multiply(q, top, out=q), below, out=out)
    if tail.size:
        out[outside] = _tail_quantile(tail, scratch)


def _tail_quantile(u: np.ndarray, scratch: Scratch) -> np.ndarray:
    n = len(u)
    r, top, below = (scratch(i, n) for i in (6, 7, 8))
    np.minimum(u, np.subtract(1.0, u, out=r), out=r)
    log_of(r, top, scratch)
    np.sqrt(np.negative(top, out=top), out=r)
    far = np.flatnonzero(r > 5.0)
    beyond = r[far] - 5.0
    np.subtract(r, 1.6, out=r)
    z = np.divide(horner(_MIDDLE_TOP, r, top), horner(_MIDDLE_BELOW, r, below))
    if far.size:
        size = far.size
        z[far] = horner(_FAR_TOP, beyond, top[:size]) / horner(_FAR_BELOW, beyond, below[:size])
    return np.copysign(z, np.subtract(u, 0.5, out=r), out=z)
