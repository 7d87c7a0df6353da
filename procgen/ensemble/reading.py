"""Reading back: the numbers of an Arrow column, in whatever type another program has written them again.

Values decide, not types: what holds the same numbers is as good, and the first that is another one is named.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from procgen.ensemble.columns import Column
from procgen.ensemble.errors import EnsembleError
from procgen.ensemble.plan import Block

if TYPE_CHECKING:
    import pyarrow as pa


def fits(found: pa.DataType, expected: pa.DataType) -> bool:
    """Whether a type can hold the values of another: any text, any numbers, times of a zone, lists of such."""
    import pyarrow as pa

    kinds = pa.types
    if kinds.is_string(expected):
        inside = found.value_type if kinds.is_dictionary(found) else found
        return kinds.is_string(inside) or kinds.is_large_string(inside) or str(inside) == "string_view"
    if kinds.is_timestamp(expected):
        return kinds.is_timestamp(found) and found.tz is not None
    if kinds.is_list(expected):
        lists = kinds.is_list(found) or kinds.is_large_list(found) or kinds.is_fixed_size_list(found)
        return lists and fits(found.value_type, expected.value_type)
    return kinds.is_integer(found) or kinds.is_floating(found)


def values_of(data: pa.ChunkedArray, column: Column, where: object, block: Block) -> np.ndarray:
    """The values (paths, steps) of a rectangle in the type of their column; EnsembleError naming one that is not."""
    found = numbers(data, f"series {column.name}", where, block, column.gaps).reshape(block.paths, block.steps)
    return exactly(found, column, where, block)


def numbers(data: pa.ChunkedArray, name: str, where: object, block: Block, gaps: bool = False) -> np.ndarray:
    """The numbers of an Arrow column of a rectangle, NaN for null where it may have `gaps`; times as microseconds."""
    import pyarrow as pa

    if gaps:
        import pyarrow.compute as pc

        data = data if pa.types.is_floating(data.type) else data.cast(pa.float64())
        found = numbers(pc.fill_null(data, np.nan), name, where, block)
        return np.where(np.isnan(found), found.dtype.type(np.nan), found)  # one NaN, whatever bits a file has
    if data.null_count:
        path, step = divmod(data.is_null().index(True).as_py(), block.steps)
        raise EnsembleError(
            f"{where} is damaged: {name} has no value at path {block.first_path + path}, step {block.first_step + step}"
        )
    timed = pa.types.is_timestamp(data.type)
    if timed and data.type.unit != "us":
        data = data.cast(pa.timestamp("us", data.type.tz))
    if data.num_chunks == 1:  # its memory as it is; `to_numpy` would import pandas for it
        chunk = data.chunk(0)
        kind = np.dtype("<i8" if timed else data.type.to_pandas_dtype())
        return np.frombuffer(chunk.buffers()[1], kind, len(chunk), chunk.offset * kind.itemsize)
    return data.cast(pa.int64()).to_numpy() if timed else data.to_numpy()


def exactly(values: np.ndarray, column: Column, where: object, block: Block) -> np.ndarray:
    """Values (paths, steps) in the type of their column, where a file has them in another one."""
    if values.dtype == column.type:
        return values
    with np.errstate(all="ignore"):
        kept = values.astype(column.type)
        other = kept.astype(values.dtype) != values
    if column.gaps:
        other &= ~np.isnan(values)
    if other.any():
        i, j = np.argwhere(other)[0]
        raise EnsembleError(
            f"{where} is damaged: series {column.name}, path {block.first_path + i}, step {block.first_step + j}: "
            f"{values[i, j]} is not of type {column.type}"
        )
    return kept


def expect(where: object, name: str, got: np.ndarray, wanted: np.ndarray, block: Block) -> None:
    """EnsembleError naming the first row of a rectangle that is not the one that belongs there."""
    if np.array_equal(got, np.broadcast_to(wanted, got.shape)):
        return
    i, j = np.argwhere(got != wanted)[0]
    raise EnsembleError(
        f"{where} is damaged: where path {block.first_path + i}, step {block.first_step + j} belongs, "
        f"column {name} has {got[i, j]}"
    )
