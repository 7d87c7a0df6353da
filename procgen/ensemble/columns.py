"""What a column of an ensemble is, and how drawn values become stored ones."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import asdict, field, replace
from typing import Any

import numpy as np

from procgen.chance import kernel
from procgen.chance.blocks import CHUNK
from procgen.ensemble.errors import EnsembleError
from procgen.spec.records import dataclass

TYPES = {"float64": 8, "float32": 4, "int64": 8}
EXACT = 2.0**52  # from here on a float64 has no fraction
WHOLE = 2.0**53  # beyond it a float64 leaves whole numbers out
AT_ONCE = 1 << 14  # values of counts that are turned into whole numbers at a time


@dataclass(frozen=True)
class Column:
    """A value column: a series, or a revealed hidden output."""

    name: str
    type: str = "float64"
    decimals: int | None = None
    unit: str | None = None
    revealed: bool = False
    gaps: bool = False  # whether values may be missing: NaN in arrays, null in files
    counted: bool = field(default=False, compare=False)  # int64 for its values, not by its spec

    @property
    def exact(self) -> bool:
        """Whether stored values are the drawn ones."""
        return self.type == "float64" and self.decimals is None

    def json(self) -> dict[str, Any]:
        return {key: value for key, value in asdict(self).items() if key != "counted" and (key != "gaps" or value)}


def as_kept(columns: Iterable[Column], types: Mapping[str, str]) -> list[Column]:
    """Columns as an ensemble has them whose columns are of these `types`.

    One that was drawn before counts became int64 has them as float64, and goes on with that.
    """
    return [
        replace(column, type="float64", counted=False)
        if column.counted and types.get(column.name) == "float64"
        else column
        for column in columns
    ]


def store(values: np.ndarray, column: Column, spare: bool = False) -> np.ndarray:
    """Drawn values (paths, steps) as they are stored; a new array, or the same when nothing changes.

    `spare` says that nobody needs the drawn values: what is stored may then take their memory.

    With d decimals, rint(x·10^d)/10^d: the product is rounded to the nearest whole number, an exact half to
    the even one, and the quotient is the double nearest to that decimal number. `int64` is rint; `float32`
    is the nearest one. Zero is stored without a sign. These are single IEEE 754 operations, hence the same
    everywhere. What is missing stays so.

    Raises EnsembleError when a value does not fit the type.
    """
    if column.exact:
        return values
    kept = values if column.decimals is None else _rounded(values, column.decimals)
    if column.type == "int64":
        if column.counted:
            return _as_whole(kept, column, kept if spare else np.empty(kept.shape))
        kept = np.rint(kept)
        _refuse(np.abs(kept) >= 2.0**63, kept, column)
        return kept.astype(np.int64)
    if column.type == "float32":
        with np.errstate(over="ignore"):
            narrow = kept.astype(np.float32)
        _refuse(np.isinf(narrow), kept, column)
        return narrow
    return kept


def _rounded(values: np.ndarray, decimals: int) -> np.ndarray:
    scale = float(10 ** abs(decimals))  # exact up to 10^22, and never from a library's pow
    with np.errstate(over="ignore"):
        scaled = values * scale if decimals >= 0 else values / scale
    whole = np.abs(scaled) >= EXACT if decimals >= 0 else None
    np.rint(scaled, out=scaled)
    scaled = scaled / scale if decimals >= 0 else scaled * scale
    scaled += 0.0
    if whole is not None and whole.any():
        scaled[whole] = values[whole]
    return scaled


def _as_whole(values: np.ndarray, column: Column, memory: np.ndarray) -> np.ndarray:
    """Whole numbers as int64, in `memory`, which may be theirs.

    EnsembleError unless int64 and float64 both have all of them. A few paths at a time, so that what is compared
    stays in the processor's cache.
    """
    whole = memory.view(np.int64)
    if kernel.is_compiling() and values.flags.c_contiguous and whole.flags.c_contiguous:
        flat, stopped = values.reshape(-1), np.empty(1, np.int64)
        kernel.machine("compiled", "whole")(flat, whole.reshape(-1), WHOLE, stopped, np.empty(CHUNK))
        if stopped[0] < flat.size:
            raise _not_whole(flat[stopped[0] : stopped[0] + CHUNK], column)
        return whole
    paths = max(AT_ONCE // max(values.shape[-1], 1), 1)
    for first in range(0, len(values), paths):
        given = values[first : first + paths]
        found = np.rint(given)
        if given.size and not (-WHOLE <= given.min() <= given.max() <= WHOLE and (found == given).all()):
            raise _not_whole(given, column)
        np.copyto(whole[first : first + paths], found, casting="unsafe")
    return whole


def _not_whole(values: np.ndarray, column: Column) -> EnsembleError:
    bad = values[(np.abs(values) > WHOLE) | (np.rint(values) != values)]
    return EnsembleError(
        f"series {column.name} is stored as int64, as whole numbers are, and the value {float(bad[0])!r} "
        "is not a whole number of at most 2^53 in size; write type: float64 for it in the spec"
    )


def _refuse(bad: np.ndarray, values: np.ndarray, column: Column) -> None:
    if bad.any():
        raise EnsembleError(
            f"series {column.name}: the value {values[bad][0]:g} does not fit type {column.type}; "
            "use type: float64, or a spec whose values stay smaller"
        )


def as_float(values: np.ndarray) -> np.ndarray:
    """Stored values as float64, exactly; this is what digests are over."""
    return values if values.dtype == np.float64 else values.astype(np.float64)
