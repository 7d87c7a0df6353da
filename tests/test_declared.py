"""A call is read to the same arguments whether it is plain, or typer reads it."""

from __future__ import annotations

import subprocess
import sys

import pytest
from typer.testing import CliRunner

import procgen.cli  # noqa: F401  (which declares the commands)
from procgen.declared import COMMANDS, Option, command, parameters, plain

TEXTS = {  # what each parser of the commands takes, by the name that its values are shown under
    "N": "7",
    "P": "0.01",
    "0-99": "3-8",
    "0-95": "0",
    "0,1,10": "0,1,10",
    "0,10,100": "4,5",
    "1,10,100": "1,5",
    "0,0.1": "0,0.25",
    "id=NAME,…": "id=shop,time=week",
}


def as_typer_reads(words: list[str]) -> dict:
    """What typer calls the command with, all arguments."""
    from procgen.app import app

    seen: dict = {}
    found = next(one for one in app.registered_commands if one.name == words[0])
    call, found.callback = found.callback, _noting(found.callback, seen)
    try:
        result = CliRunner().invoke(app, words, catch_exceptions=False)
    finally:
        found.callback = call
    assert result.exit_code == 0, result.output
    return seen


def _noting(call, seen):
    def note(**arguments):
        seen.update(arguments)

    note.__annotations__, note.__signature__ = call.__annotations__, call.__signature__
    return note


def full(name: str, arguments: dict) -> dict:
    """Arguments with the defaults of those that are not given."""
    function = COMMANDS[name].function.__wrapped__
    defaults = dict(zip(reversed([*parameters(function)]), reversed(function.__defaults__ or ()), strict=False))
    return defaults | arguments


def words_of(name: str, style: str) -> list[str]:
    """A call of a command with all that can be given."""
    words = [name]
    for parameter, (kind, one) in parameters(COMMANDS[name].function).items():
        text = TEXTS.get(one.told.get("metavar"), "a b=c")
        if not isinstance(one, Option):
            words.append(text)
            continue
        option = one.names[0] if one.names else f"--{parameter.replace('_', '-')}"
        if kind is bool:
            words.append(option)
        else:
            joined = style == "joined" and option.startswith("--")
            words += [f"{option}={text}"] if joined else [option, text]
            words += [option, "again"] if "list" in str(kind) else []
    return words


@pytest.mark.parametrize("style", ["apart", "joined"])
@pytest.mark.parametrize("name", [*COMMANDS])
def test_all_that_can_be_given_is_read_as_typer_reads_it(name, style):
    words = words_of(name, style)
    call = plain(words)
    assert call is not None and call.function is COMMANDS[name].function
    theirs = as_typer_reads(words)
    assert call.arguments == theirs
    assert [type(value) for value in call.arguments.values()] == [type(theirs[name]) for name in call.arguments]


@pytest.mark.parametrize(
    "words",
    [
        ["render", "a.yaml", "-o", "b"],
        ["render", "-o", "b", "a.yaml"],
        ["render", "--resume", "a.yaml", "--out=b", "--first-path", "12"],
        ["difference", "a"],
        ["terms"],
        ["theory", "a.yaml", "--set", "x=1", "--at", "3", "--set", "y=2"],
    ],
)
def test_what_is_not_given_is_the_default(words):
    call = plain(words)
    assert call is not None
    theirs = as_typer_reads(words)
    ours = full(words[0], call.arguments)
    assert {k: v or None for k, v in ours.items()} == {k: v or None for k, v in theirs.items()}


@pytest.mark.parametrize(
    "words",
    [
        [],
        ["-h"],
        ["--version"],
        ["rend", "a.yaml", "-o", "b"],
        ["render", "-h"],
        ["render", "a.yaml"],
        ["render", "-o", "b"],
        ["render", "a.yaml", "-o"],
        ["render", "a.yaml", "-ob"],
        ["render", "a.yaml", "-o=b"],
        ["render", "a.yaml", "--o", "b"],
        ["render", "a.yaml", "-o", "b", "c"],
        ["render", "a.yaml", "-o", "b", "-o", "c"],
        ["render", "a.yaml", "-o", "b", "--resume=1"],
        ["render", "a.yaml", "-o", "b", "--paths", "1e3"],
        ["render", "a.yaml", "-o", "b", "--seed", "-1"],
        ["render", "a.yaml", "-o", "b", "--seed="],
        ["render", "--", "a.yaml", "-o", "b"],
        ["render", "-", "-o", "b"],
        ["export", "a", "-o", "b", "--paths", "5-2"],
    ],
)
def test_all_else_is_left_to_typer(words):
    assert plain(words) is None


def test_nothing_is_plain_where_words_may_be_patterns(monkeypatch):
    monkeypatch.setattr("procgen.declared.os.name", "nt")
    assert plain(["terms"]) is None


def test_a_fault_that_a_command_finds_is_told_by_typer():
    done = subprocess.run([sys.executable, "-m", "procgen", "difference", "a"], capture_output=True, text=True)
    assert done.returncode == 2 and done.stdout == ""
    assert "procgen difference -h" in done.stderr and "expected B, or --variant NAME" in done.stderr


def test_a_render_imports_nothing_that_reads_command_lines(tmp_path):
    spec = tmp_path / "a.yaml"
    spec.write_text("procgen: 1\nseed: 1\npaths: 2\ntime: {steps: 3}\nseries: {x: [{white_noise: {sd: 1}}]}\n")
    code = (
        "import sys\nfrom procgen.cli import run as main\n"
        f"sys.argv = ['procgen', 'render', {str(spec)!r}, '-o', {str(tmp_path / 'out')!r}]\n"
        "try:\n    main()\nexcept SystemExit as end:\n    assert end.code == 0\n"
        "print(sorted({'typer', 'pydantic', 'click', 'argparse', 'scipy', 'pandas', 'numba'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "[]"


def test_a_command_has_the_name_that_it_is_given():
    def hello() -> None: ...

    try:
        assert command("good-day", short_help="Greet.")(hello) is hello
        assert plain(["good-day"]) == (hello, {})
    finally:
        del COMMANDS["good-day"]
