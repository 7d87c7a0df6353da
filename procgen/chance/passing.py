"""How arguments reach machine code: numbers as they are, and an array as the object that it is.

Where an array has its values and how many, the code reads from NumPy's `PyArrayObject`, whose fields are fixed (NumPy C
API, "Python types and C-structures"); first it looks whether the array is of the kind that the code was made for. So a
call takes 1 µs, where to ask Python for all of this took 4 to 10.
"""

from __future__ import annotations

import ctypes
from collections.abc import Callable, Iterator
from functools import cache, partial
from typing import Any

import numpy as np

NUMBERS: dict[str, Any] = {"i": ctypes.c_int64, "u": ctypes.c_uint64, "f": ctypes.c_double}
PLAIN = frozenset({np.ndarray, float, int})  # types that are passed as they are
_NUMBA = {"i": "int64", "u": "uint64", "f": "float64"}
_ORDER = "".join(NUMBERS)
_DTYPES = (ctypes.c_int64 * len(NUMBERS))(*[id(np.dtype(f"{kind}8")) for kind in _ORDER])  # the objects arrays have
_PLACE = ctypes.create_string_buffer(16)  # where a function of numba leaves its result, here none, and what it raises
_NOTHING = ctypes.addressof(_PLACE)
# Words of 64 bits, from the beginning of an object on.
HEAD = object.__basicsize__ // 8
DATA, AXES, SHAPE, DTYPE, FLAGS = (HEAD + word for word in (0, 1, 2, 5, 6))
INT = 0xFFFFFFFF  # the part of a word that is an int of C
SOUND = 0x101  # NPY_ARRAY_C_CONTIGUOUS, NPY_ARRAY_ALIGNED


def kind_of(value: Any) -> Any:
    """How an argument is passed: "f", "i", "u", ("f", axes) for an array of these, ("tuple", kinds); else None."""
    if isinstance(value, np.ndarray):
        plain = value.flags.num & SOUND == SOUND and value.dtype.itemsize == 8 and value.dtype.kind in NUMBERS
        return (value.dtype.kind, value.ndim) if plain and value.ndim else None
    if isinstance(value, tuple):
        kinds = tuple([kind_of(part) for part in value])
        return None if None in kinds else ("tuple", kinds)
    if isinstance(value, np.uint64):
        return "u"
    if isinstance(value, float):
        return "f"
    return "i" if isinstance(value, int | np.int64) and not isinstance(value, bool) else None


def types_of(values: tuple) -> tuple:
    """Their types, of a tuple those of its parts."""
    return tuple([types_of(value) if type(value) is tuple else type(value) for value in values])


def flat(values: tuple) -> Iterator[Any]:
    """Values as they are passed, of a tuple its parts."""
    for value in values:
        if isinstance(value, tuple):
            yield from flat(value)
        else:
            yield int(value) if isinstance(value, np.integer) else value  # ctypes takes no other whole numbers


def words(kinds: tuple) -> Iterator[Any]:
    """The kinds of the words that arguments are passed as: of a tuple those of its parts."""
    for kind in kinds:
        if kind[0] == "tuple":
            yield from words(kind[1])
        else:
            yield kind


def entry(kinds: tuple) -> tuple[str, list[Any]]:
    """The text of a function `entry` that calls `run` with arguments of these kinds, and numba's types for it.

    It raises where an array is of another kind. What else it needs is in `compiled_passing`.
    """
    from numba import types

    all_words = list(words(kinds))
    names = [f"a{number}" for number in range(len(all_words))]
    asked = [
        f"fits({name}, dtypes[{_ORDER.index(word[0])}], {word[1]})"
        for name, word in zip(names, all_words, strict=True)
        if word not in NUMBERS
    ]
    given = iter(names)
    passed = ", ".join([_expression(kind, given) for kind in kinds])
    text = (
        f"def entry({', '.join(('known', *names))}):\n"
        f"    dtypes = carray(known, ({len(_ORDER)},))\n"
        f"    if not ({' and '.join(asked) or True}):\n"
        f"        raise TypeError\n"
        f"    run({passed})\n"
    )
    pointer = types.CPointer(types.int64)
    return text, [pointer, *[getattr(types, _NUMBA[word]) if word in NUMBERS else pointer for word in all_words]]


def _expression(kind: Any, names: Iterator[str]) -> str:
    """The argument again, from its words."""
    if kind in NUMBERS:
        return next(names)
    if kind[0] == "tuple":
        return "(" + "".join([_expression(part, names) + ", " for part in kind[1]]) + ")"
    name = next(names)
    shape = "".join([f"axis({name}, {number}), " for number in range(kind[1])])
    return f"carray(values_{kind[0]}({name}), ({shape}))"


def caller(address: int, kinds: tuple) -> Callable[..., int]:
    """The function `entry` at an address, for flat arguments; 0 when it ran, another number when it raised."""
    types = [NUMBERS.get(word, ctypes.py_object) for word in words(kinds)]
    convention = ctypes.CFUNCTYPE(ctypes.c_int32, ctypes.c_void_p, ctypes.c_void_p, ctypes.c_void_p, *types)
    return partial(convention(address), _NOTHING, _NOTHING, ctypes.addressof(_DTYPES))


@cache
def layout_is_known() -> bool:
    """Whether arrays are made here as is read above."""
    array = np.empty((3, 5))
    fields = (ctypes.c_int64 * (FLAGS + 1)).from_address(id(array))
    shape = (ctypes.c_int64 * 2).from_address(fields[SHAPE])
    return (
        (fields[DATA], fields[AXES] & INT, fields[DTYPE]) == (array.ctypes.data, array.ndim, id(array.dtype))
        and tuple(shape) == array.shape
        and fields[FLAGS] & INT == array.flags.num
    )
