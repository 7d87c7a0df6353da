"""Sizes of what a system of several series is given: how many rows of how many numbers, and what is wrong with them."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

import numpy as np

from procgen.spec.words import one_of
from procgen.terms.base import Issue, number

MOST_NAMES, MOST_LAGGED = 20, 60
SMALLEST = 1e-10  # of the eigenvalues of a correlation: below it is singular to rounding

Matrix = Sequence[Sequence[float]]


def shape_faults(values: Mapping[str, Any], square: Sequence[str]) -> Iterator[Issue]:
    """Faults of sizes: names, the matrices that must be `square`, spreads, and the correlation."""
    k = len(values["names"])
    if k > MOST_NAMES:
        yield "names", f"expected at most {MOST_NAMES} components, got {k}; split the system"
    for name in square:
        for place, matrix in enumerate(values[name], start=1):
            if not fits(matrix, k, k):
                which = "" if len(values[name]) == 1 else f" in matrix {place} of {len(values[name])}"
                mend = f"give a row to each of {', '.join(values['names'])}, with a weight for each of them, 0 for none"
                yield name, f"expected {shape(k, k)}, one a component, got {given(matrix)}{which}; {mend}"
                break
    lagged = max((len(values[name]) for name in square), default=0) * k
    if lagged > MOST_LAGGED:
        what = "lagged values (components times lags)"
        yield square[0], f"expected at most {MOST_LAGGED} {what}, got {lagged}; take fewer lags, or split the system"
    yield from one_each("sd", values["sd"], values["names"])
    if values["correlation"] is not None:
        yield from _correlation_faults(values["correlation"], values["names"])


def one_each(name: str, numbers: Sequence[float], names: Sequence[str]) -> Iterator[Issue]:
    """The fault of a list that has neither one number for all nor one a component."""
    if len(numbers) not in (1, len(names)):
        mend = f"give those of {', '.join(names)} in this order"
        yield name, f"expected {len(names)} values, one a component, or one for all, got {len(numbers)}; {mend}"


def fits(rows: Matrix, count: int, width: int) -> bool:
    """Whether there are `count` rows of `width` numbers."""
    return len(rows) == count and all(len(row) == width for row in rows)


def shape(count: int, width: int | str) -> str:
    """Such as `2 rows of 3`."""
    return f"{count} row{'' if count == 1 else 's'} of {width}"


def given(rows: Matrix) -> str:
    """The shape that rows have; their widths where they differ."""
    widths = sorted({len(row) for row in rows})
    return shape(len(rows), one_of(map(str, widths)).removeprefix("one of "))


def _correlation_faults(rows: Matrix, names: Sequence[str]) -> Iterator[Issue]:
    k = len(names)
    if not fits(rows, k, k):
        mend = f"give a row and a column to each of {', '.join(names)}"
        yield "correlation", f"expected {shape(k, k)}, one a component, got {given(rows)}; {mend}"
        return
    for i, row in enumerate(rows):
        if row[i] != 1.0:
            mend = "write 1 there: how large a shock is, says sd"
            yield "correlation", f"expected 1 on the diagonal, got {number(row[i])} in row {i + 1}; {mend}"
            return
        for j in range(i):
            if row[j] != rows[j][i]:
                got = f"{number(row[j])} in row {i + 1}, column {j + 1} and {number(rows[j][i])} across it"
                yield "correlation", f"expected a symmetric matrix, got {got}; make them equal"
                return
    smallest = float(np.linalg.eigvalsh(np.array(rows))[0])
    if smallest < SMALLEST:
        mend = "bring its entries nearer to 0, or to each other"
        got = f"got one whose smallest eigenvalue is {smallest:.3g}"
        yield "correlation", f"expected a positive definite correlation, {got}; {mend}"
