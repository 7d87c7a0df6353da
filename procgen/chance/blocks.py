"""Long arrays worked on in short blocks, so that the intermediate results stay in the processor's cache."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

BLOCK = 16384  # values: 128 KiB of float64
CHUNK = 1024  # values that machine code has at hand


class Scratch:
    """Work arrays of one call, made when first asked for and used again for every block."""

    def __init__(self, size: int) -> None:
        self.size = size
        self._arrays: dict[tuple[int, type], np.ndarray] = {}

    def __call__(self, number: int, count: int, kind: type = np.float64) -> np.ndarray:
        """Work array `number` of a dtype, its first `count` elements, holding anything."""
        key = (number, kind)
        if key not in self._arrays:
            self._arrays[key] = np.empty(self.size, kind)
        return self._arrays[key][:count]


def blockwise(
    function: Callable[[np.ndarray, np.ndarray, Scratch], object],
    x,
    out: np.ndarray | None = None,
    whole: bool = False,
) -> np.ndarray:
    """Apply function(source, target, scratch) to x block by block; float64 of the shape of x.

    function gets float64 vectors; source and target may be the same memory (out=x) and source is never written to
    otherwise. A scalar x gives a float64 scalar. `whole` is for machine code, which takes short blocks by itself: it
    gets all of x as one, and scratch of CHUNK values.
    """
    values = np.asarray(x, np.float64)
    if out is None:
        out = np.empty(values.shape)
    elif out.shape != values.shape or out.dtype != np.float64:
        raise ValueError(f"expected out to be float64 of shape {values.shape}, got {out.dtype} of {out.shape}")
    if not out.flags.c_contiguous:
        out[...] = blockwise(function, values, whole=whole)
        return out
    source, target = values.reshape(-1), out.reshape(-1)
    if whole:
        function(source, target, Scratch(CHUNK))
        return out if out.ndim else out[()]
    scratch = Scratch(min(BLOCK, source.size))
    for start in range(0, source.size, BLOCK):
        function(source[start : start + BLOCK], target[start : start + BLOCK], scratch)
    return out if out.ndim else out[()]
