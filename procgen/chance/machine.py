"""Compiled functions kept as machine code, which a later process loads without numba: in 0.05 s in place of 0.5 s.

Made by numba the first time (the extra `speed`), loaded by llvmlite, on which numba stands. An object file is named by
what it was made from: the text, the kinds of arguments, versions and the processor. What needs numba when it runs, to
get memory or to raise, cannot be kept this way; it runs as numba compiles it.
"""

from __future__ import annotations

import ctypes
import os
import re
import tempfile
from collections.abc import Callable, Iterator
from functools import cache
from hashlib import sha256
from pathlib import Path
from typing import Any

import numpy as np

_WORDS = {"i": ctypes.c_int64, "u": ctypes.c_uint64, "f": ctypes.c_double}
_LIBRARY = ("sqrt", "floor", "rint", "memset", "memcpy")  # of C, exact everywhere
_PLACE = ctypes.create_string_buffer(16)  # where a function of numba leaves its result, here none, and what it raises
_NOTHING = ctypes.addressof(_PLACE)
_NUMBA = {"i": "int64", "u": "uint64", "f": "float64"}


class Machine:
    """A function that fills arrays and returns nothing.

    Parameters
    ----------
    name : for the file
    text : all that its code depends on
    function : gives what numba compiles, a function of ordinary Python; it is called where there is no file yet
    folder : where files are kept
    """

    def __init__(self, name: str, text: str, function: Callable[[], Callable], folder: Callable[[], Path]) -> None:
        self.name, self.text, self.function, self.folder = name, text, function, folder
        self._loaded: dict[Any, Callable | None] = {}
        self._by_numba: Callable | None = None

    def __call__(self, *args: Any) -> None:
        """Call with numbers, arrays, and tuples of them; arrays that are not contiguous are left to numba."""
        kinds = tuple([_kind(value) for value in args])
        if kinds not in self._loaded:
            self._loaded[kinds] = None if None in kinds else self._load(kinds)
        run = self._loaded[kinds]
        if run is None:
            self._numba()(*args)
        else:
            run(_NOTHING, _NOTHING, *_words(args))

    def _numba(self) -> Callable:
        if self._by_numba is None:
            from procgen.chance.kernel import compiled_function

            self._by_numba = compiled_function(self.function())
        return self._by_numba

    def is_kept(self, *args: Any) -> bool:
        """Whether there is machine code for such arguments, so that it need only be loaded."""
        return self._file(tuple([_kind(value) for value in args])).exists()

    def _file(self, kinds: tuple) -> Path:
        key = sha256("\n".join((self.text, repr(kinds), *_host())).encode()).hexdigest()[:24]
        return self.folder() / f"{self.name}-{key}.o"

    def _load(self, kinds: tuple) -> Callable | None:
        """The function for arguments of these kinds as machine code; None where it cannot be."""
        file = self._file(kinds)
        code = _read(file)
        if code is None:
            code = self._made(kinds)
            write(file, sha256(code).digest() + code)
        if not code:
            return None
        words = [word for kind in kinds for word in _kinds(kind)]
        types: list[Any] = [_WORDS.get(word, ctypes.c_void_p) for word in words]
        return ctypes.CFUNCTYPE(ctypes.c_int32, ctypes.c_void_p, ctypes.c_void_p, *types)(_address(code))

    def _made(self, kinds: tuple) -> bytes:
        """An object file with the function `entry`; empty where it would need numba when it runs."""
        import numba
        from llvmlite import binding

        names, passed = [], []
        for number, kind in enumerate(kinds):
            names += (given := [f"a{number}_{k}" for k in range(len(list(_kinds(kind))))])
            passed.append(_expression(kind, iter(given)))
        run = numba.njit(inline="always", error_model="numpy")(self.function())
        scope: dict[str, Any] = {"run": run, "carray": numba.carray}
        exec(f"def entry({', '.join(names)}):\n    run({', '.join(passed)})\n", scope)
        types = [_type(word) for kind in kinds for word in _kinds(kind)]
        made = numba.cfunc(numba.void(*types), error_model="numpy")(scope["entry"])
        text = _alone(made.inspect_llvm(), made.native_name.removeprefix("cfunc."))
        return b"" if text is None else _target().emit_object(binding.parse_assembly(text))


def _alone(text: str, name: str) -> str | None:
    """A module's text with no function but the one of that name; None where that one calls any of ours or numba's."""
    bodies = re.findall(r"^define [^\n]*\{\n.*?^\}\n", text, re.DOTALL | re.MULTILINE)
    wanted = [body for body in bodies if re.match(rf"define [^\n]*@{re.escape(name)}\(", body)]
    defined = re.findall(r"^@([\w.$]+) =", text, re.MULTILINE)
    called = set(re.findall(r"@([\w.$]+)", "".join(wanted))) - {name, *defined, *_LIBRARY}
    if len(wanted) != 1 or any(not other.startswith("llvm.") for other in called):
        return None
    for body in bodies:
        text = text.replace(body, "" if body is not wanted[0] else body.replace(f"@{name}(", "@entry(", 1))
    return text


def _kind(value: Any) -> Any:
    """How an argument is passed: "f", "i", "u", ("f", axes) for an array of these, a list for a tuple; else None."""
    if isinstance(value, np.ndarray):
        plain = value.flags.c_contiguous and value.dtype.itemsize == 8 and value.dtype.kind in _WORDS
        return (value.dtype.kind, value.ndim) if plain and value.ndim else None
    if isinstance(value, tuple):
        kinds = tuple([_kind(part) for part in value])
        return None if None in kinds else ("tuple", kinds)
    if isinstance(value, np.uint64):
        return "u"
    if isinstance(value, float):
        return "f"
    return "i" if isinstance(value, int | np.int64) and not isinstance(value, bool) else None


def _words(values: tuple) -> list[Any]:
    """What arguments are passed as: numbers as they are, an array as its address and shape."""
    words: list[Any] = []
    for value in values:
        if isinstance(value, np.ndarray):
            words.append(_place(value))
            words += value.shape
        elif isinstance(value, tuple):
            words += _words(value)
        else:
            words.append(value if isinstance(value, float) else int(value))
    return words


def _place(values: np.ndarray) -> int:
    """The address of an array: of one that may be written to by its buffer, which takes a ninth of the time."""
    if values.size and values.flags.writeable:
        return ctypes.addressof(ctypes.c_char.from_buffer(values))  # type: ignore[arg-type]
    return values.__array_interface__["data"][0]


def _kinds(kind: Any) -> Iterator[str]:
    """The kinds of the words that an argument is passed as; "*f" points to some."""
    if isinstance(kind, str):
        yield kind
    elif kind[0] == "tuple":
        for part in kind[1]:
            yield from _kinds(part)
    else:
        yield f"*{kind[0]}"
        yield from "i" * kind[1]


def _expression(kind: Any, names: Iterator[str]) -> str:
    """The argument again, from its words."""
    if isinstance(kind, str):
        return next(names)
    if kind[0] == "tuple":
        return "(" + "".join([_expression(part, names) + ", " for part in kind[1]]) + ")"
    return f"carray({next(names)}, ({''.join([next(names) + ', ' for _ in range(kind[1])])}))"


def _type(word: str) -> Any:
    import numba

    kind = getattr(numba.types, _NUMBA[word[-1]])
    return numba.types.CPointer(kind) if word[0] == "*" else kind


@cache
def _processor() -> tuple[str, str]:
    """Name and features of the processor that code is for: this one, or what numba is told by the environment."""
    from llvmlite import binding

    name = os.environ.get("NUMBA_CPU_NAME", "host")
    if name == "host":
        name, features = binding.get_host_cpu_name(), binding.get_host_cpu_features().flatten()
    else:
        features = ""
    return name, os.environ.get("NUMBA_CPU_FEATURES", features)


@cache
def _host() -> tuple[str, ...]:
    """What machine code depends on beside its text."""
    import platform
    from importlib.metadata import version

    from llvmlite import binding

    versions = (version("numba"), version("llvmlite"), platform.python_version())
    return (*versions, binding.get_process_triple(), *_processor())


@cache
def _target() -> Any:
    from llvmlite import binding

    binding.initialize_native_target()
    binding.initialize_native_asmprinter()
    name, features = _processor()
    target = binding.Target.from_triple(binding.get_process_triple())
    return target.create_target_machine(cpu=name, features=features, opt=3, jit=True)


_ENGINES: list[Any] = []  # what is loaded lives as long as they do


def _address(code: bytes) -> int:
    """Where the function `entry` of an object file is, once it is loaded."""
    from llvmlite import binding

    engine = binding.create_mcjit_compiler(binding.parse_assembly(""), _target())
    engine.add_object_file(binding.ObjectFileRef.from_data(code))
    engine.finalize_object()
    _ENGINES.append(engine)
    return engine.get_function_address("entry")


def _read(file: Path) -> bytes | None:
    """The code in a file; None where there is none, or another one than was written."""
    try:
        data = file.read_bytes()
    except OSError:
        return None
    return data[32:] if sha256(data[32:]).digest() == data[:32] else None


def write(path: Path, code: bytes) -> None:
    handle, draft = tempfile.mkstemp(dir=path.parent)
    with os.fdopen(handle, "wb") as file:
        file.write(code)
    os.replace(draft, path)
