"""The command line as typer reads it: help, and every fault of a call."""

from __future__ import annotations

import inspect
from collections.abc import Callable
from functools import wraps
from typing import Annotated, Any

import typer

import procgen.cli  # noqa: F401  (which declares the commands)
from procgen.console import printed
from procgen.declared import COMMANDS, Argument, Option, parameters

app = typer.Typer(
    name="procgen",
    help="Time series whose true behaviour is known: what a spec implies, paths of it, and whether they agree.",
    epilog="A spec is a YAML file; specs/README.md in the checkout describes the language.",
    context_settings={"help_option_names": ["-h", "--help"]},
    no_args_is_help=True,
    add_completion=False,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
)


def _version(wanted: bool) -> None:
    if wanted:
        from procgen import __version__

        printed(f"procgen {__version__}")
        raise typer.Exit


@app.callback()
def common(
    version: Annotated[
        bool, typer.Option("--version", help="Print the version.", callback=_version, is_eager=True)
    ] = False,
) -> None:
    pass


def _for_typer(function: Callable[..., None]) -> Callable[..., None]:
    """The function with typer's own declarations in place of ours."""

    @wraps(function)
    def call(*args: Any, **kwargs: Any) -> None:
        function(*args, **kwargs)

    hints = {name: Annotated[kind, _declared(one)] for name, (kind, one) in parameters(function).items()}
    given = inspect.signature(function).parameters.values()
    call.__annotations__ = hints
    call.__signature__ = inspect.Signature(  # type: ignore[attr-defined]
        [one.replace(annotation=hints[one.name]) for one in given]
    )
    return call


def _declared(one: Argument) -> Any:
    if isinstance(one, Option):
        return typer.Option(*one.names, parser=one.parser, **one.told)
    return typer.Argument(parser=one.parser, **one.told)


for _name, _command in COMMANDS.items():
    app.command(_name, **_command.told)(_for_typer(_command.function))
