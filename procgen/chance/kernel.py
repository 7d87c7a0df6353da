"""Recursions written once, as a loop over steps on rows of paths, run as they stand or compiled.

A kernel's arrays have paths as their last axis: tiles (steps, paths), states (lags, paths), rows (paths,). What it
returns are rows. An argument that is subscripted or asked for its shape in the kernel, and is one-dimensional, holds
coefficients; so does a tuple. Only + - * / np.sqrt, comparisons, np.where, np.abs, np.floor, np.minimum and
np.maximum are allowed, no ** and no sums, so that both forms give the same bits.

Plain, a row is handled by one NumPy call, which is quick for hundreds of paths and slow for a few. Compiled (numba,
the extra `speed`), one path after another runs through the same text as scalars, or from a lane group on, all at each
step, without the interpreter's lock.
"""

from __future__ import annotations

import ast
import atexit
import inspect
import os
import shutil
import sys
import tempfile
import textwrap
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from contextvars import ContextVar
from functools import cache, cached_property, partial, update_wrapper
from hashlib import sha256
from importlib import import_module
from importlib.util import find_spec
from pathlib import Path
from typing import Any, Literal

import numpy as np

from procgen.chance.abreast import abreast, beside, by_step, kind_of, moved, passed
from procgen.chance.machine import Machine, multiplies_eight, write

_NARROW = 4  # paths: with more, the compiled form takes all of them at each step (measured: 1-3 ns against 1-14)
_FEW = 256  # paths: with more, NumPy's rows are quicker than one path after another
_AT_HAND = 64  # steps of pieces that are brought beside each other at a time
_compiling: ContextVar[bool] = ContextVar("compiling", default=False)


@cache
def available() -> bool:
    """Whether kernels can be compiled here, that is, whether numba is installed."""
    return find_spec("numba") is not None


def is_compiling() -> bool:
    """Whether kernels called now are compiled."""
    return _compiling.get()


@contextmanager
def compiling(wanted: bool = True) -> Iterator[None]:
    """Compile the kernels called inside, in this thread. ModuleNotFoundError without numba."""
    if wanted and not available():
        raise ModuleNotFoundError(
            "compiling needs numba, which is not installed: install the extra `speed`, or go on without compiling "
            "(the values are the same)"
        )
    token = _compiling.set(wanted)
    try:
        yield
    finally:
        _compiling.reset(token)


class Kernel:
    """A recursion that can be called like the function it was written as; see the module text."""

    def __init__(self, function: Callable[..., Any]) -> None:
        update_wrapper(self, function)
        self.plain = function
        self._of_many: Callable[..., Any] | None = None

    def __call__(self, *args: Any) -> Any:
        if not _compiling.get():
            return self.plain(*args)
        return self.compiled(*args) if _lanes(args) <= _NARROW else self.abreast(*args)

    def compiled(self, *args: Any) -> Any:
        """The same values by the compiled form, whatever `compiling` says."""
        lanes = _lanes(args)
        rows = [np.empty(lanes) for _ in range(self._text.returns)]
        self._driver(tuple(map(self._kind, self._text.names, args)))(lanes, *args, *rows)
        return _as_returned(rows)

    def abreast(self, *args: Any) -> Any:
        """The same values by the compiled form for many paths; by another one where there is none."""
        lanes, names = _lanes(args), self._text.names
        subscripted, by_step = self._text.subscripted, self._text.by_step
        kinds = tuple(kind_of(a, n in subscripted, n in by_step, lanes) for n, a in zip(names, args, strict=True))
        run = self._abreast(kinds)
        if run is None and self._of_many is not None:
            return self._of_many(*args)
        if run is None:
            return self.compiled(*args) if lanes <= _FEW else self.plain(*args)
        rows = [np.empty(lanes) for _ in range(self._text.returns)]
        kept = [np.empty(lanes) for name in names if name in self._text.moved]
        run(lanes, *map(passed, args, kinds), *kept, *rows)
        return _as_returned(rows)

    def of_many(self, function: Callable[..., Any]) -> None:
        """Have a function give the same values abreast where there are many coefficients, and none is written in."""
        self._of_many = function

    @property
    def carries(self) -> list[bool]:
        """Of each argument, whether it moves on with the steps."""
        return [name in self._text.moved for name in self._text.names]

    def beside(self, stride: int, steps: int, keep: bool, *args: Any) -> bool:
        """Run pieces of one path abreast by the compiled form: see `abreast.beside`; False where there is none.

        Arguments that move on are rows, one value a piece, and are moved; tiles have the one path's steps.
        """
        lanes = next(len(a) for a, carried in zip(args, self.carries, strict=True) if carried)
        names, subscripted = self._text.names, self._text.subscripted
        kinds = tuple(
            "tile" if np.ndim(a) == 2 else kind_of(a, n in subscripted, False, lanes)
            for n, a in zip(names, args, strict=True)
        )
        key = ("beside", *kinds)
        if key not in self._drivers:
            text = beside(self._text.definition, dict(zip(names, kinds, strict=True)), self._text.returns)
            name = f"{self.plain.__module__}.{self.plain.__qualname__}.beside"
            self._drivers[key] = None if text is None else _compile(text, name)
        if self._drivers[key] is None:
            return False
        rows = [np.empty(lanes) for _ in range(len(self._text.moved) + self._text.returns)]
        at_hand = [np.empty((_AT_HAND, lanes)) for kind in kinds if kind == "tile"]
        self._drivers[key](lanes, stride, steps, int(keep), *map(passed, args, kinds), *rows, *at_hand)
        return True

    @cached_property
    def _text(self) -> _Text:
        return _Text(textwrap.dedent(inspect.getsource(self.plain)))

    @cached_property
    def _drivers(self) -> dict[tuple, Any]:
        return {}

    def _driver(self, kinds: tuple) -> Callable:
        if kinds not in self._drivers:
            name = f"{self.plain.__module__}.{self.plain.__qualname__}"
            self._drivers[kinds] = _compile(self._text.driver(kinds), name)
        return self._drivers[kinds]

    def _abreast(self, kinds: tuple) -> Callable | None:
        key = ("abreast", *kinds)
        if key not in self._drivers:
            text = abreast(self._text.definition, dict(zip(self._text.names, kinds, strict=True)), self._text.returns)
            name = f"{self.plain.__module__}.{self.plain.__qualname__}.abreast"
            self._drivers[key] = None if text is None else _compile(text, name)
        return self._drivers[key]

    def _kind(self, name: str, value: Any) -> Any:
        """How one path's share of an argument is written: see _share."""
        if isinstance(value, tuple):
            return tuple(self._kind("", part) for part in value)
        dimensions = np.ndim(value)
        if dimensions > 2:
            raise TypeError(f"expected arrays of at most two axes in a kernel, got {dimensions} for {name!r}")
        if dimensions == 1 and name in self._text.subscripted:
            return 0
        return dimensions


def kernel(function: Callable[..., Any]) -> Kernel:
    """Make a kernel of a function written in the plain subset (decorator)."""
    return Kernel(function)


class _Text:
    """What can be read from a kernel's text."""

    def __init__(self, source: str) -> None:
        definition = ast.parse(source).body[0]
        assert isinstance(definition, ast.FunctionDef)
        definition.decorator_list = []
        self.name = definition.name
        self.names = tuple(argument.arg for argument in definition.args.args)
        self.subscripted = frozenset(_subscripted(definition))
        values = [node.value for node in ast.walk(definition) if isinstance(node, ast.Return)]
        value = values[-1] if values else None
        self.returns = len(value.elts) if isinstance(value, ast.Tuple) else int(value is not None)
        self.by_step = by_step(definition)
        self.moved = moved(definition)
        self.definition = _Choices().visit(definition)
        self.source = ast.unparse(self.definition)

    def driver(self, kinds: tuple) -> str:
        """A module with the kernel and `run(lanes, *arguments, *rows)`, which calls it path by path."""
        rows = [f"row{i}" for i in range(self.returns)]
        call = f"{self.name}({', '.join(map(_share, self.names, kinds))})"
        store = ", ".join(f"{row}[lane]" for row in rows)
        return (
            f"{self.source}\n\n{self.name} = compiled({self.name})\n\n"
            f"def run(lanes, {', '.join((*self.names, *rows))}):\n"
            f"    for lane in range(lanes):\n"
            f"        {store + ' = ' if rows else ''}{call}\n"
        )


class _Choices(ast.NodeTransformer):
    """Writes np.where of numbers as a choice: numba makes arrays of them (measured: 170 ns against less than 1)."""

    def visit_Call(self, node: ast.Call) -> ast.AST:
        self.generic_visit(node)
        return ast.IfExp(*node.args) if ast.unparse(node.func) == "np.where" else node


def _subscripted(definition: ast.FunctionDef) -> Iterator[str]:
    """Names used as sequences: a[...], a.shape, len(a)."""
    for node in ast.walk(definition):
        if isinstance(node, ast.Subscript | ast.Attribute) and isinstance(node.value, ast.Name):
            yield node.value.id
        elif isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id == "len":
            yield from (argument.id for argument in node.args if isinstance(argument, ast.Name))


def _share(name: str, kind: Any) -> str:
    """The part of an argument that belongs to path `lane`; a single column stands for every path's."""
    if isinstance(kind, tuple):
        return "(" + "".join(_share(f"{name}[{i}]", part) + ", " for i, part in enumerate(kind)) + ")"
    if kind == 2:
        return f"{name}[:, min(lane, {name}.shape[1] - 1)]"
    if kind == 1:
        return f"{name}[min(lane, {name}.shape[0] - 1)]"
    return name


def _as_returned(rows: list[np.ndarray]) -> Any:
    return None if not rows else rows[0] if len(rows) == 1 else tuple(rows)


def _lanes(args: tuple) -> int:
    """The number of paths: the longest last axis of two-dimensional arguments."""
    return max((arg.shape[1] for arg in args if isinstance(arg, np.ndarray) and arg.ndim == 2), default=1)


def _compile(text: str, name: str) -> Machine:
    """The function `run` of a module text, compiled, and kept in the user's cache from one process to the next."""
    return Machine(name, text, lambda: _function(text, name), cache_folder)


def _function(text: str, name: str) -> Callable:
    """The function `run` of a module text, as it stands, in a file of the cache."""
    path = cache_folder() / f"{name}-{sha256(text.encode()).hexdigest()[:16]}.py"
    if not path.exists():
        write(path, text.encode())
    compiled = partial(compiled_function, inline="always")
    scope: dict[str, Any] = {"np": np, "compiled": compiled, "__name__": __name__}  # numba's cache imports it
    exec(compile(text, str(path), "exec"), scope)  # our own text, not the file's: that only lends its name
    return scope["run"]


@cache
def machine(module: str, function: str, room: str = __package__) -> Machine:
    """A function of a module that imports numba, which is imported only where it is not compiled yet.

    The module may depend on this room alone.
    """
    text = _room_text()
    if room != __package__:
        text += (Path(import_module(room).__path__[0]) / f"{module}.py").read_text(encoding="utf-8")

    def given() -> Callable:
        return getattr(import_module(f"{room}.{module}"), function)

    return Machine(f"{module}.{function}", text, given, cache_folder)


@cache
def _room_text() -> str:
    return "".join([file.read_text(encoding="utf-8") for file in sorted(Path(__file__).parent.glob("*.py"))])


@cache
def uniforms() -> Machine:
    """What fills with uniforms quickest here."""
    return machine("compiled", "uniforms_abreast" if multiplies_eight() else "uniforms")


def are_kept() -> bool:
    """Whether the kernels that nearly all draws need are kept as machine code here."""
    return uniforms().is_kept(0, 0, 0, 0, np.empty((0, 0)), np.empty((0, 0)))


def compiled_function(function: Callable, inline: Literal["never", "always"] = "never") -> Callable:
    """A function compiled by numba with IEEE arithmetic and without the lock, kept in the user's cache."""
    import numba

    config: Any = numba.config
    kept, config.CACHE_DIR = config.CACHE_DIR, str(cache_folder())
    try:
        # error_model: a division by 0 is inf, as in the plain form, and needs no branch
        return numba.njit(nogil=True, fastmath=False, cache=True, inline=inline, error_model="numpy")(function)
    finally:
        config.CACHE_DIR = kept


@cache
def cache_folder() -> Path:
    """The folder of compiled kernels: the user's cache, never the installation; a temporary one where none can be."""
    if sys.platform == "win32":
        base = os.environ.get("LOCALAPPDATA", "")
    else:
        base = os.environ.get("XDG_CACHE_HOME") or os.path.expanduser("~/.cache")
    folder = Path(base) / "procgen" / "kernels"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        if os.access(folder, os.W_OK):
            return folder
    except OSError:
        pass
    temporary = tempfile.mkdtemp(prefix="procgen-kernels-")
    atexit.register(shutil.rmtree, temporary, ignore_errors=True)
    return Path(temporary)
