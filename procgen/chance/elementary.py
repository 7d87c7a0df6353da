"""Elementary functions with the same bits on every processor.

Only what IEEE 754 rounds correctly is used, in a fixed order: + - * / sqrt, comparisons, rint, operations on bits.
NumPy's and the C library's exp, log, sin differ between processors by a last bit; BLAS and reductions by their order.

Sources. exp, log: argument reduction and minimax polynomials of fdlibm (Sun Microsystems 1993). sin_turns,
cos_turns: Taylor's series on an eighth of a turn.
"""

from __future__ import annotations

import numpy as np

from procgen.chance.blocks import CHUNK, Scratch, blockwise
from procgen.chance.kernel import is_compiling, machine

_LN2_HIGH, _LN2_LOW = 6.93147180369123816490e-01, 1.90821492927058770002e-10
_PER_LN2 = 1.44269504088896338700e00
_EXP = (
    4.13813679705723846039e-08,
    -1.65339022054652515390e-06,
    6.61375632143793436117e-05,
    -2.77777777770155933842e-03,
    1.66666666666666019037e-01,
)
_LOG = (
    1.479819860511658591e-01,
    1.531383769920937332e-01,
    1.818357216161805012e-01,
    2.222219843214978396e-01,
    2.857142874366239149e-01,
    3.999999999940941908e-01,
    6.666666666666735130e-01,
)
_TWO_PI_LOW = 2.4492935982947064e-16  # 2 pi less its float64
_SIN = (  # (-1)**(n//2) (2 pi)**n / n!, n odd, from 17 to 3
    0.10422916220813984,
    -0.7181223017785006,
    3.819952584848282,
    -15.09464257682299,
    42.058693944897655,
    -76.70585975306139,
    81.60524927607506,
    -41.34170224039976,
)
_TWO_PI = 6.283185307179586
_COS = (  # the same, n even, from 18 to 0
    -0.03638284114254567,
    0.28200596845579123,
    -1.714390711088672,
    7.903536371318469,
    -26.4262567833744,
    60.24464137187666,
    -85.45681720669373,
    64.9393940226683,
    -19.739208802178716,
    1.0,
)
_SQRT_HALF_BITS = 0x3FE6A09E00000000  # just below sqrt(1/2)
_MANTISSA = 0x000FFFFFFFFFFFFF


def exp(x, out: np.ndarray | None = None) -> np.ndarray:
    """e**x, elementwise, within 1 ulp; inf above 709.78, 0 below -745.13, nan for nan."""
    return blockwise(_exp, x, out, whole=is_compiling())


def log(x, out: np.ndarray | None = None) -> np.ndarray:
    """The natural logarithm, elementwise, within 1 ulp; -inf at 0, nan below 0."""
    return blockwise(_log, x, out, whole=is_compiling())


def log1p(x, out: np.ndarray | None = None) -> np.ndarray:
    """log(1 + x), elementwise, for x > -1, within 3 ulp also for small x; nan below -1.

    log(1 + x) x / ((1 + x) - 1), both with the same rounded 1 + x (Goldberg 1991, theorem 4).
    """
    return blockwise(_log1p, x, out)


def lost(x) -> np.ndarray:
    """1 - e**-x, elementwise, for x >= 0, without cancelling: the share that is lost at a rate x."""
    x = np.asarray(x, np.float64)
    small = np.minimum(x, 0.5)
    total = np.ones_like(small)
    for n in range(20, 1, -1):  # x (1 - x/2 (1 - x/3 (1 - ...)))
        total = 1.0 - small / n * total
    return np.where(x >= 0.5, 1.0 - exp(-x), small * total)


def sin_turns(x, out: np.ndarray | None = None) -> np.ndarray:
    """sin(2 pi x), elementwise, within 2 ulp; exact at multiples of a quarter; nan for nan and infinities."""
    return blockwise(_sin_turns, x, out)


def cos_turns(x, out: np.ndarray | None = None) -> np.ndarray:
    """cos(2 pi x), elementwise, within 2 ulp; exact at multiples of a quarter; nan for nan and infinities."""
    return blockwise(_cos_turns, x, out)


def horner(coefficients: tuple[float, ...], x: np.ndarray, out: np.ndarray) -> np.ndarray:
    """A polynomial at x, highest power first, into out (not x)."""
    np.multiply(x, coefficients[0], out=out)
    np.add(out, coefficients[1], out=out)
    for coefficient in coefficients[2:]:
        np.multiply(out, x, out=out)
        np.add(out, coefficient, out=out)
    return out


def _exp(x: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
    if is_compiling():
        machine("compiled_elementary", "exp")(x, out, scratch(0, CHUNK))
        return
    times_exp(1.0, x, 0.0, out, scratch)


def times_exp(
    factor: np.ndarray | float, x: np.ndarray, low: np.ndarray | float, out: np.ndarray, scratch: Scratch
) -> None:
    """factor exp(x + low); low is far below 1, a correction that x itself is too coarse to hold."""
    n = len(x)
    k, high, tail, r, square, p = (scratch(i, n) for i in range(6))
    np.fmin(np.fmax(x, -800.0, out=high), 800.0, out=high)  # nan becomes a bound here, and nan again below
    np.rint(np.multiply(high, _PER_LN2, out=k), out=k)
    np.subtract(high, np.multiply(k, _LN2_HIGH, out=r), out=high)
    np.multiply(k, _LN2_LOW, out=tail)
    np.subtract(tail, low, out=tail)
    np.subtract(high, tail, out=r)
    np.multiply(r, r, out=square)
    np.multiply(horner(_EXP, square, p), square, out=p)
    np.subtract(r, p, out=p)  # c = r - r**2 P(r**2); exp(r) = 1 + r + r c / (2 - c)
    np.multiply(r, p, out=r)
    np.subtract(2.0, p, out=p)
    np.divide(r, p, out=r)
    np.subtract(tail, r, out=r)
    np.subtract(r, high, out=r)
    np.subtract(factor, np.multiply(r, factor, out=r), out=r)
    bits = scratch(0, n, np.int64)
    half = scratch(1, n, np.int64)
    np.copyto(bits, k, casting="unsafe")
    np.right_shift(bits, 1, out=half)
    np.subtract(bits, half, out=bits)
    with np.errstate(over="ignore", under="ignore"):
        for power in (half, bits):  # in two steps, for results below 2**-1022
            np.left_shift(np.add(power, 1023, out=power), 52, out=power)
            np.multiply(r, power.view(np.float64), out=r)
    undefined = np.isnan(x, out=scratch(0, n, np.bool_))
    if undefined.any():
        r[undefined] = np.nan
    np.copyto(out, r)


def _log(x: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
    if is_compiling():
        machine("compiled_elementary", "log")(x, out, scratch(0, CHUNK))
        return
    log_of(x, out, scratch)


def log_of(x: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
    if x.size and not (x.min() >= 2.0**-1022 and x.max() < np.inf):
        _log_of_odd(x, out)
        return
    n = len(x)
    k, f, s, z, r, half = (scratch(i, n) for i in range(6))
    power, bits = scratch(0, n, np.int64), scratch(1, n, np.int64)
    np.subtract(x.view(np.int64), _SQRT_HALF_BITS, out=bits)
    np.right_shift(bits, 52, out=power)
    np.copyto(k, power)  # x = 2**k (1 + f), sqrt(1/2) < 1 + f < sqrt(2)
    np.add(np.bitwise_and(bits, _MANTISSA, out=bits), _SQRT_HALF_BITS, out=bits)
    np.subtract(bits.view(np.float64), 1.0, out=f)
    np.divide(f, np.add(f, 2.0, out=s), out=s)
    np.multiply(s, s, out=z)
    np.multiply(horner(_LOG, z, r), z, out=r)
    np.multiply(np.multiply(f, 0.5, out=half), f, out=half)
    np.multiply(s, np.add(half, r, out=r), out=r)
    np.add(r, np.multiply(k, _LN2_LOW, out=s), out=r)
    np.subtract(half, r, out=r)
    np.subtract(r, f, out=r)
    np.subtract(np.multiply(k, _LN2_HIGH, out=k), r, out=out)


def _log1p(x: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
    n = len(x)
    above, less, result = scratch(6, n), scratch(7, n), scratch(8, n)
    np.add(x, 1.0, out=above)
    np.subtract(above, 1.0, out=less)
    _log(above, result, Scratch(CHUNK) if is_compiling() else scratch)
    same = np.flatnonzero((less == 0.0) | (above == np.inf))
    less[same] = 1.0
    with np.errstate(invalid="ignore"):
        np.multiply(result, np.divide(x, less, out=less), out=less)
    less[same] = np.where(above[same] == np.inf, np.inf, x[same])
    np.copyto(out, less)


def _log_of_odd(x: np.ndarray, out: np.ndarray) -> None:
    """log where some values are 0, negative, subnormal, infinite or nan."""
    ordinary = (x > 0) & (x < np.inf)
    scaled = np.where(ordinary, x, 1.0)
    tiny = scaled < 2.0**-1022
    result = np.empty_like(scaled)
    log_of(scaled * np.where(tiny, 2.0**54, 1.0), result, Scratch(len(x)))
    result = np.where(tiny, result - 54 * _LN2_HIGH - 54 * _LN2_LOW, result)
    special = np.where(x == 0, -np.inf, np.where(x == np.inf, np.inf, np.nan))
    np.copyto(out, np.where(ordinary, result, special))


def _sin_turns(x: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
    _wave(x, out, scratch, 0)


def _cos_turns(x: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
    _wave(x, out, scratch, 1)


def _wave(x: np.ndarray, out: np.ndarray, scratch: Scratch, ahead: int) -> None:
    """sin(2 pi (x + ahead / 4)): the nearest quarter taken off, exactly, then a series on an eighth of a turn."""
    n = len(x)
    r, quarter, square, sine, cosine = (scratch(i, n) for i in range(5))
    with np.errstate(invalid="ignore"):  # infinity - infinity is the nan that is wanted
        np.subtract(x, np.rint(x, out=r), out=r)
    np.rint(np.multiply(r, 4.0, out=quarter), out=quarter)
    np.subtract(r, np.multiply(quarter, 0.25, out=sine), out=r)
    np.multiply(r, r, out=square)
    horner(_COS, square, cosine)
    np.multiply(horner(_SIN, square, sine), square, out=sine)
    np.add(sine, _TWO_PI_LOW, out=sine)
    np.multiply(sine, r, out=sine)
    np.add(sine, np.multiply(r, _TWO_PI, out=r), out=sine)
    np.add(quarter, float(ahead), out=quarter)  # 0, +-1, +-2, 3: which wave, and its sign
    np.add(quarter, np.multiply(np.less(quarter, 0.0, out=scratch(0, n, np.bool_)), 4.0, out=r), out=quarter)
    odd = np.logical_or(quarter == 1.0, quarter == 3.0)
    np.copyto(sine, cosine, where=odd)
    np.negative(sine, out=sine, where=quarter >= 2.0)
    np.add(sine, 0.0, out=out)  # 0, not -0
