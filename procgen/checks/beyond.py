"""Values beyond bounds in some rows of a tile, compiled: few are, and to look for them with arrays takes many of these.

Called by `blocks.places_beyond`; imported only where there is no machine code yet (numba, the extra `speed`).
"""

from __future__ import annotations

SOME = 16  # values that are looked at together


def beyond(x, rows, low, high, at, paths, values, found):
    """Of each of these rows of x the values below low or above high (rows,), as many as there is room for.

    at: their places among the rows; found: how many there are, with those for which there is no room.
    """
    width, count, room = x.shape[1], 0, values.shape[0]
    for k in range(rows.shape[0]):
        row, least, most = x[rows[k]], low[k], high[k]
        for begin in range(0, width, SOME):
            end, some = min(begin + SOME, width), 0
            for p in range(begin, end):
                some += (row[p] < least) | (row[p] > most)
            if some:
                for p in range(begin, end):
                    if (row[p] < least) | (row[p] > most):
                        if count < room:
                            at[count], paths[count], values[count] = k, p, row[p]
                        count += 1
    found[0] = count
