"""Filters of many coefficients on many paths, compiled: the same bits as the kernels that are written for few.

NumPy's rows take each product of a coefficient and a row of paths by itself, one path after another takes each from
memory far apart: with 168 coefficients and 64 paths a value took 300 to 4,000 ns, and takes 30 here.
"""

from __future__ import annotations

import numpy as np

from procgen.chance.kernel import machine

STRIP = 32  # paths, as in `compiled_filter`


def fill_values(phi: np.ndarray, theta: np.ndarray, x: np.ndarray, a: np.ndarray) -> None:
    """x[t] = a[t] + Σφ x[t−i] + Σθ a[t−j] into x (p + steps, paths) behind its first p rows; a (q + steps, paths)."""
    wide = np.broadcast_to(a, (len(a), x.shape[1]))
    _run(x, np.ascontiguousarray(wide), phi, theta, True)


def fill_shocks(phi: np.ndarray, theta: np.ndarray, x: np.ndarray, a: np.ndarray) -> None:
    """The shocks of the same values x, into a behind its first q rows."""
    wide = np.broadcast_to(x, (len(x), a.shape[1]))
    _run(np.ascontiguousarray(wide), a, -phi, -theta, False)


def _run(x: np.ndarray, a: np.ndarray, phi: np.ndarray, theta: np.ndarray, forward: bool) -> None:
    (back,), (back_too,) = np.nonzero(phi), np.nonzero(theta)  # what is 0 is left out, as in the kernels
    rows, rows_too = np.zeros(STRIP * len(x)), np.zeros(STRIP * len(a))
    machine("compiled_filter", "filtered")(
        x, a, len(phi), len(theta), back + 1, phi[back], back_too + 1, theta[back_too], int(forward), rows, rows_too,
        np.empty(STRIP),
    )  # fmt: skip
