"""Commands as they are declared, and the plain way to read a call of one.

typer reads what people may write, and says what is wrong with it; to be imported and to convert the values costs it a
third of a small render. So a call that says no more than commands, options and values is read here, and typer is asked
for all else: help, several short options in one word, values that begin with a dash, and whatever is a fault.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from typing import Any, NamedTuple, get_args, get_origin, get_type_hints


class Argument:
    """What is declared of a parameter, as typer's class of this name takes it.

    `parser` makes the value of the text and raises `fault`; without one it is what the annotation says: a text, a path,
    a list of texts, or whether a flag is given.
    """

    def __init__(self, *names: str, parser: Callable[[str], Any] | None = None, **told: Any) -> None:
        self.names, self.parser, self.told = names, parser, told


class Option(Argument):
    """The same of an option; without names it is called as its parameter is."""


class Command(NamedTuple):
    """A function whose parameters are annotated with Argument and Option, and what `-h` says of it besides."""

    function: Callable[..., None]
    told: dict[str, Any]


COMMANDS: dict[str, Command] = {}


def command(name: str | None = None, **told: Any) -> Callable[[Callable[..., None]], Callable[..., None]]:
    """Make a command of a function (decorator), under its own name or another one."""

    def register(function: Callable[..., None]) -> Callable[..., None]:
        COMMANDS[name or function.__name__] = Command(function, told)
        return function

    return register


def fault(text: str, where: str | None = None) -> Exception:
    """What is wrong with a call, to be raised before anything is done; `where` is the option, where it is not plain."""
    from typer import BadParameter

    return BadParameter(text, param_hint=where)


def parameters(function: Callable[..., None]) -> dict[str, tuple[Any, Argument]]:
    """The parameters of a command by name: type, and what is declared."""
    hints = get_type_hints(function, include_extras=True)
    return {name: (hint.__origin__, hint.__metadata__[0]) for name, hint in hints.items() if name != "return"}


class Call(NamedTuple):
    """A command with its arguments, those that are given."""

    function: Callable[..., None]
    arguments: dict[str, Any]


def plain(words: Sequence[str]) -> Call | None:
    """The call that words make; None where typer is to read them."""
    if os.name != "posix" or not words or words[0] not in COMMANDS:  # elsewhere words may be patterns of file names
        return None
    function = COMMANDS[words[0]].function
    declared = parameters(function)
    texts = _texts(words[1:], declared)
    if texts is None or any(name not in texts for name in _required(function, declared)):
        return None
    try:
        return Call(function, {name: _value(text, *declared[name]) for name, text in texts.items()})
    except Exception:  # whatever it is, typer finds it too, and says of which option
        return None


def _texts(words: Sequence[str], declared: dict[str, tuple[Any, Argument]]) -> dict[str, Any] | None:
    """What is given, by parameter: a text, a list of texts, or True; None where that is not plain."""
    options = {option: name for name in declared for option in _names(name, declared[name][1])}
    places = iter([name for name, (_, one) in declared.items() if not isinstance(one, Option)])
    texts: dict[str, Any] = {}
    left = iter(words)
    for word in left:
        option, inside, text = word.partition("=") if word.startswith("--") else (word, "", "")
        name = options.get(option) if word.startswith("-") else next(places, None)
        if name is None:
            return None
        kind = declared[name][0]
        if not word.startswith("-"):
            text = word
        elif kind is not bool and not inside:
            text = next(left, "")
        if kind is bool:
            if inside:
                return None
            texts[name] = True
        elif not text or text.startswith("-"):
            return None
        elif _several(kind):
            texts.setdefault(name, []).append(text)
        elif name in texts:
            return None
        else:
            texts[name] = text
    return texts


def _names(name: str, declared: Argument) -> tuple[str, ...]:
    if not isinstance(declared, Option):
        return ()
    return declared.names or (f"--{name.replace('_', '-')}",)


def _required(function: Callable[..., None], declared: dict[str, tuple[Any, Argument]]) -> list[str]:
    """Parameters without a default, which stand first."""
    defaults = getattr(function, "__wrapped__", function).__defaults__ or ()
    return [*declared][: len(declared) - len(defaults)]


def _several(kind: Any) -> bool:
    return any(get_origin(one) is list for one in (kind, *get_args(kind)))


def _value(text: Any, kind: Any, declared: Argument) -> Any:
    from pathlib import Path

    if declared.parser is not None:
        return declared.parser(text)
    return Path(text) if Path in (kind, *get_args(kind)) else text
