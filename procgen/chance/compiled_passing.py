"""What machine code asks of the arrays that it is given as objects: see `passing`.

Imported only where kernels are compiled (numba, the extra `speed`).
"""

from __future__ import annotations

from functools import partial
from typing import Any

from llvmlite import ir
from numba import carray, njit, types
from numba.extending import intrinsic

from procgen.chance import passing

_DATA, _AXES, _SHAPE, _DTYPE, _FLAGS = passing.DATA, passing.AXES, passing.SHAPE, passing.DTYPE, passing.FLAGS
_INT, _SOUND = passing.INT, passing.SOUND
_ENTRY = partial(njit, inline="always", error_model="numpy")


def _pointer(word: int, kind: Any) -> Any:
    """A function that reads a pointer to numbers of a kind, the word of that number of an object."""

    @intrinsic
    def read(typing: Any, words: Any) -> Any:
        def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
            pointer = context.get_value_type(signature.return_type)
            words = builder.bitcast(arguments[0], pointer.as_pointer())
            return builder.load(builder.gep(words, [ir.Constant(ir.IntType(64), word)]))

        return types.CPointer(kind)(types.CPointer(types.int64)), generate

    return read


values_f, values_i, values_u = (_pointer(_DATA, kind) for kind in (types.float64, types.int64, types.uint64))
_lengths = _pointer(_SHAPE, types.int64)


@_ENTRY
def axis(array, number):
    return carray(_lengths(array), (number + 1,))[number]


@_ENTRY
def fits(array, dtype, axes):
    """Whether an array has this data type and so many axes, and its values lie one after the other."""
    words = carray(array, (_FLAGS + 1,))
    return words[_DTYPE] == dtype and words[_AXES] & _INT == axes and words[_FLAGS] & _SOUND == _SOUND
