"""Compiled functions kept as machine code, which a later process loads without numba: in 0.05 s in place of 0.5 s.

Made by numba the first time (the extra `speed`), loaded by llvmlite, on which numba stands. An object file is named by
what it was made from: the text, the kinds of arguments, versions and the processor. What needs numba when it runs, to
get memory or to raise, cannot be kept this way; it runs as numba compiles it.
"""

from __future__ import annotations

import os
import re
import sys
import tempfile
from collections.abc import Callable
from functools import cache
from hashlib import sha256
from importlib.util import find_spec
from pathlib import Path
from typing import Any

from procgen.chance import passing

_LIBRARY = ("sqrt", "floor", "rint", "memset", "memcpy")  # of C, exact everywhere


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
        self._last: dict[tuple, Callable[..., int]] = {}  # what ran last with arguments of these types
        self._loaded: dict[tuple, Callable[..., int] | None] = {}
        self._files: dict[tuple, Path] = {}
        self._by_numba: Callable | None = None

    def __call__(self, *args: Any) -> None:
        """Call with numbers, arrays, and tuples of them; arrays that are not contiguous are left to numba."""
        types, flat = tuple(map(type, args)), args
        if not passing.PLAIN.issuperset(types):
            types, flat = passing.types_of(args), tuple(passing.flat(args))
        run = self._last.get(types)
        if run is None or run(*flat):  # it tells whether arrays are of another kind
            self._look_up(types, args, flat)

    def _look_up(self, types: tuple, args: tuple, flat: tuple) -> None:
        kinds = tuple([passing.kind_of(value) for value in args])
        if kinds not in self._loaded:
            self._loaded[kinds] = None if None in kinds else self._load(kinds)
        run = self._loaded[kinds]
        if run is None or run(*flat):
            self._numba()(*args)
        else:
            self._last[types] = run

    def _numba(self) -> Callable:
        if self._by_numba is None:
            from procgen.chance.kernel import compiled_function

            self._by_numba = compiled_function(self.function())
        return self._by_numba

    def is_kept(self, *args: Any) -> bool:
        """Whether there is machine code for such arguments, so that it need only be loaded."""
        return self._file(tuple([passing.kind_of(value) for value in args])).exists()

    def _file(self, kinds: tuple) -> Path:
        if kinds not in self._files:
            key = sha256("\n".join((self.text, repr(kinds), *_host())).encode()).hexdigest()[:24]
            self._files[kinds] = self.folder() / f"{self.name}-{key}.o"
        return self._files[kinds]

    def _load(self, kinds: tuple) -> Callable[..., int] | None:
        """The function for arguments of these kinds as machine code; None where it cannot be."""
        file = self._file(kinds)
        code = _read(file)
        if code is None:
            code = self._made(kinds)
            write(file, sha256(code).digest() + code)
        return passing.caller(_address(code), kinds) if code and passing.layout_is_known() else None

    def _made(self, kinds: tuple) -> bytes:
        """An object file with the function `entry`; empty where it would need numba when it runs."""
        import numba
        from llvmlite import binding

        from procgen.chance import compiled_passing

        run = numba.njit(inline="always", error_model="numpy")(self.function())
        scope: dict[str, Any] = {**vars(compiled_passing), "run": run}
        source, types = passing.entry(kinds)
        exec(source, scope)
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


def multiplies_eight() -> bool:
    """Whether code is for a processor that multiplies eight whole numbers of 64 bits at once."""
    return "+avx512dq" in _processor()[1].split(",")


@cache
def _host() -> tuple[str, ...]:
    """What machine code depends on beside its text."""
    import llvmlite
    from llvmlite import binding

    versions = (_numba_version(), llvmlite.__version__, sys.version)
    convention = Path(passing.__file__).read_text(encoding="utf-8")
    return (*versions, binding.get_process_triple(), *_processor(), convention)


def _numba_version() -> str:
    """What tells versions of numba apart, from a file of its own: importlib.metadata takes 0.02 s to say it."""
    spec = find_spec("numba")
    if spec is not None and spec.origin is not None and (file := Path(spec.origin).with_name("_version.py")).exists():
        return file.read_text(encoding="utf-8")
    from importlib.metadata import version

    return version("numba")


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
