"""The functions with the same bits on every processor, under one name.

Only what IEEE 754 rounds correctly is used, in a fixed order. NumPy's and the C library's exp, log, sin and pow
differ between processors by a last bit, BLAS and reductions by the order of their terms.
"""

from procgen.chance.elementary import cos_turns, exp, log, log1p, lost, sin_turns
from procgen.chance.matrices import cholesky, matmul, sum_doubling
from procgen.chance.normal import normal_quantile, normal_tail

__all__ = [
    "cholesky",
    "cos_turns",
    "exp",
    "log",
    "log1p",
    "lost",
    "matmul",
    "normal_quantile",
    "normal_tail",
    "sin_turns",
    "sum_doubling",
]
