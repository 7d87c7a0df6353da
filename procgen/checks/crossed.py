"""Products of many pairs of series over a tile, compiled: what `pairs` does with them in one pass.

Called by `pairs`; imported only where there is no machine code yet (numba, the extra `speed`). Sums add the same
numbers in the same order as the plain form, `blocks.add_lags`, so that the bits are the same. A tile of one series
fills half of a second-level cache, so all pairs take a strip of it at a time.
"""

from __future__ import annotations

from numba import carray
from numba.core import types
from numba.extending import intrinsic

BLOCK = 64  # steps, as in `blocks`
STRIP = 64  # paths


@intrinsic
def _doubles(context, address):
    """The doubles at an address."""

    def code(target, builder, signature, arguments):
        return builder.inttoptr(arguments[0], target.get_value_type(types.CPointer(types.float64)))

    return types.CPointer(types.float64)(types.int64), code


def crossed(scores, heights, sizes, size_heights, pairs, sized, steps, totals, block):
    """Add products of pairs of series, at lags −2 to 2 and of sizes at one step, to totals (pairs, 6, paths).

    scores, sizes: addresses of the views of two windows of each series, of so many rows as `heights` say. pairs
    (number, 4): two series, a place in totals, and the first step that counts, before step 0 of these or after it;
    sized: those among them whose sizes are multiplied. block: room for five strips.
    """
    paths = totals.shape[2]
    for start in range(0, steps, BLOCK):
        end = min(start + BLOCK, steps)
        for left in range(0, paths, STRIP):
            right = min(left + STRIP, paths)
            width = right - left
            for k in range(pairs.shape[0]):
                i, j = pairs[k, 0], pairs[k, 1]
                a = carray(_doubles(scores[i]), (heights[i], paths))
                b = carray(_doubles(scores[j]), (heights[j], paths))
                a_at, b_at = heights[i] - steps, heights[j] - steps
                for p in range(5 * STRIP):
                    block[p] = 0.0
                first = pairs[k, 3]
                t = max(start, min(first, end))
                while t < min(end, first + 2):  # before the first step that counts there is nothing
                    a1, a2 = a[a_at + t - 1, left:right], a[a_at + t, left:right]
                    b1, b2 = b[b_at + t - 1, left:right], b[b_at + t, left:right]
                    for p in range(width):
                        block[2 * STRIP + p] += a2[p] * b2[p]
                    if t > first:
                        for p in range(width):
                            block[STRIP + p] += a1[p] * b2[p]
                        for p in range(width):
                            block[3 * STRIP + p] += a2[p] * b1[p]
                    t += 1
                while t < end - 1:  # two steps at once
                    a0, a1 = a[a_at + t - 2, left:right], a[a_at + t - 1, left:right]
                    a2, a3 = a[a_at + t, left:right], a[a_at + t + 1, left:right]
                    b0, b1 = b[b_at + t - 2, left:right], b[b_at + t - 1, left:right]
                    b2, b3 = b[b_at + t, left:right], b[b_at + t + 1, left:right]
                    for p in range(width):
                        block[p] = (block[p] + a0[p] * b2[p]) + a1[p] * b3[p]
                        block[STRIP + p] = (block[STRIP + p] + a1[p] * b2[p]) + a2[p] * b3[p]
                        block[2 * STRIP + p] = (block[2 * STRIP + p] + a2[p] * b2[p]) + a3[p] * b3[p]
                        block[3 * STRIP + p] = (block[3 * STRIP + p] + a2[p] * b1[p]) + a3[p] * b2[p]
                        block[4 * STRIP + p] = (block[4 * STRIP + p] + a2[p] * b0[p]) + a3[p] * b1[p]
                    t += 2
                if t < end:
                    a0, a1, a2 = a[a_at + t - 2, left:right], a[a_at + t - 1, left:right], a[a_at + t, left:right]
                    b0, b1, b2 = b[b_at + t - 2, left:right], b[b_at + t - 1, left:right], b[b_at + t, left:right]
                    for p in range(width):
                        block[p] += a0[p] * b2[p]
                        block[STRIP + p] += a1[p] * b2[p]
                        block[2 * STRIP + p] += a2[p] * b2[p]
                        block[3 * STRIP + p] += a2[p] * b1[p]
                        block[4 * STRIP + p] += a2[p] * b0[p]
                for lag in range(5):
                    total = totals[pairs[k, 2], lag]
                    for p in range(width):
                        total[left + p] += block[lag * STRIP + p]
            for k in range(sized.shape[0]):
                i, j = sized[k, 0], sized[k, 1]
                a = carray(_doubles(sizes[i]), (size_heights[i], paths))
                b = carray(_doubles(sizes[j]), (size_heights[j], paths))
                a_at, b_at = size_heights[i] - steps, size_heights[j] - steps
                for p in range(width):
                    block[p] = 0.0
                for t in range(start, end):
                    x, y = a[a_at + t, left:right], b[b_at + t, left:right]
                    for p in range(width):
                        block[p] += x[p] * y[p]
                total = totals[sized[k, 2], 5]
                for p in range(width):
                    total[left + p] += block[p]
