"""Which column of a table is what: by the names that are usual here, or by those that its owner gives."""

from __future__ import annotations

import difflib
from collections.abc import Mapping, Sequence
from typing import Any

from procgen.checks.files import TableError
from procgen.checks.words import joined

_FEW = 12  # columns, up to which all are listed
INDEX = ("path", "step", "time", "id", "value")


class Found:
    """The columns that a table has."""

    def __init__(self, found: list[str], where: str):
        self.found, self.where = found, where

    def pick(self, role: str, given: Mapping[str, str], needed: bool) -> Any:
        name = given.get(role, role)
        places = [str(k) for k, found in enumerate(self.found, 1) if found == name]
        if len(places) > 1:
            raise TableError(
                f"{self.where} has {len(places)} columns named {name!r}, columns {joined(places)}; rename or drop all "
                f"but the one for {role}"
            )
        if places:
            return name
        if needed or role in given:
            from procgen.spec.words import did_you_mean

            hint = did_you_mean(name, self.found)
            raise TableError(
                f"{self.where} has no column {name!r} for {role}; its {listed(name, self.found)}"
                + (f" ({hint})" if hint else "")
                + f"; {option(role)}"
            )
        return None


class Names(Found):
    """Which column of a table with a column a series is what."""

    def __init__(self, found: list[str], spec: Any, given: Mapping[str, str] | None, where: str):
        given = given or {}
        super().__init__(found, where)
        self.path = self.pick("path", given, False)
        timed = "time" in given and "step" not in given  # a column that is named goes before one that is only there
        self.step = None if timed else self.pick("step", given, False)
        self.time = None if self.step else self.pick("time", given, False)
        self.clock = self.pick("time", given, False) if self.step else None  # to be compared with the steps
        self.series = {name: self.pick(name, given, True) for name in spec.series}
        self.all: list[Any] = [
            c for c in (self.path, self.step, self.time, self.clock, *self.series.values()) if c is not None
        ]


def listed(name: str, found: Sequence[Any]) -> str:
    """The columns of a table in words: all of few, or their number and the five nearest to a name."""
    columns = [str(column) for column in found]
    if len(columns) <= _FEW:
        return f"columns are {', '.join(columns)}"
    near = difflib.get_close_matches(name, columns, n=5, cutoff=0.0)
    return f"{len(columns)} columns have none of that name, the nearest are {', '.join(near)}"


def option(role: str) -> str:
    """How to say which column is what."""
    said = f"--{role}-col NAME" if role in INDEX else f"--series-col {role}=NAME"
    return f'name the right one with {said} (columns={{"{role}": NAME}})'
