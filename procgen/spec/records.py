"""Dataclasses that cost little to declare.

`dataclasses` writes and compiles six functions for a class, in some 0.4 ms: for a hundred classes that was a sixth of a
small render. Here all classes have the same functions, which look up what the fields are; an object takes 1 to 2 µs in
place of 1. A class with slots or an order is left to `dataclasses`.
"""

from __future__ import annotations

import dataclasses
from dataclasses import MISSING, FrozenInstanceError, fields
from operator import attrgetter
from reprlib import recursive_repr
from typing import TYPE_CHECKING, Any

__all__ = ["dataclass"]

if TYPE_CHECKING:
    from dataclasses import dataclass
else:

    def dataclass(cls=None, /, *, frozen=False, eq=True, **more):
        """As `dataclasses.dataclass`, and to whoever asks its objects are such."""
        if more:
            return dataclasses.dataclass(cls, frozen=frozen, eq=eq, **more)
        return (lambda cls: _made(cls, frozen, eq)) if cls is None else _made(cls, frozen, eq)


def _made(cls: Any, frozen: bool, eq: bool) -> type:
    cls.__doc__ = cls.__doc__ or cls.__qualname__  # or a signature would be made of it
    cls = dataclasses.dataclass(init=False, repr=False, eq=False)(cls)
    if not all(one.init and one.hash is None and not one.kw_only for one in fields(cls)):
        raise TypeError(f"{cls.__qualname__} has a field that only `dataclasses` makes; take dataclass from there")
    functions = {"__init__": _init(cls), "__repr__": _repr(cls)}
    if frozen:
        functions |= {"__setattr__": _set, "__delattr__": _delete}
    if eq:
        functions |= _same(cls, frozen)
    for name, function in functions.items():
        # of a class that says what equals it, Python makes the hash None
        if name not in vars(cls) or (name == "__hash__" and cls.__hash__ is None and "__eq__" in vars(cls)):
            setattr(cls, name, function)
    return cls


def _init(cls: Any) -> Any:
    names = [one.name for one in fields(cls)]
    defaults = {one.name: one.default for one in fields(cls) if one.default is not MISSING}
    makers = {one.name: one.default_factory for one in fields(cls) if one.default_factory is not MISSING}
    then = hasattr(cls, "__post_init__")

    def __init__(self: Any, *given: Any, **named: Any) -> None:
        if len(given) > len(names):
            raise TypeError(f"{cls.__qualname__} has {len(names)} fields, and {len(given)} values were given")
        values = vars(self)
        for name, value in zip(names, given, strict=False):
            values[name] = value
        for name in names[len(given) :]:
            if name in named:
                values[name] = named.pop(name)
            elif name in defaults:
                values[name] = defaults[name]
            elif name in makers:
                values[name] = makers[name]()
            else:
                raise TypeError(f"{cls.__qualname__} needs a value for {name}")
        if named:
            raise TypeError(f"{cls.__qualname__} has no field {', '.join(named)}, or its value was given twice")
        if then:
            self.__post_init__()

    return __init__


def _repr(cls: Any) -> Any:
    names = [one.name for one in fields(cls) if one.repr]

    @recursive_repr()
    def __repr__(self: Any) -> str:
        return f"{type(self).__qualname__}({', '.join([f'{name}={getattr(self, name)!r}' for name in names])})"

    return __repr__


def _same(cls: Any, frozen: bool) -> dict[str, Any]:
    """What tells whether two objects are equal, and the hash of one that stays as it is."""
    names = [one.name for one in fields(cls) if one.compare]
    values = attrgetter(*names) if len(names) > 1 else lambda self: tuple([getattr(self, name) for name in names])

    def __eq__(self: Any, other: object) -> Any:
        return values(self) == values(other) if type(other) is type(self) else NotImplemented

    def __hash__(self: Any) -> int:
        return hash(values(self))

    return {"__eq__": __eq__, "__hash__": __hash__ if frozen else None}


def _set(self: Any, name: str, value: Any) -> None:
    raise FrozenInstanceError(f"cannot assign to field {name!r}")


def _delete(self: Any, name: str) -> None:
    raise FrozenInstanceError(f"cannot delete field {name!r}")
