"""Tables in other layouts than a column a series: a row an observation, or a column a path. They are made long first.

A table is taken to be in one of these where its columns say so, and no column has the name of a series.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Any

from procgen.checks.files import TableError
from procgen.checks.roles import INDEX, Found, Names, option
from procgen.checks.words import joined

if TYPE_CHECKING:
    import pandas as pd

LONG = "expected a column a series, as procgen export OUT -o FILE --layout long writes it"
Told = Callable[[int], str]  # where a row is, for people: "line 7"
_TURN = "__turn"  # which of several equal rows


def recognised(found: list[str], spec: Any, columns: Mapping[str, str] | None, where: str) -> Names | Panel | Wide:
    """Which column is what, in the layout that the columns tell. TableError where they fit none."""
    given = {k: v for k, v in (columns or {}).items() if v is not None}
    for role in given:
        if role not in (*INDEX, *spec.series):
            of = f" of {spec.title!r}" if spec.title else ""
            raise TableError(
                f"expected a series of the spec{of}, one of {', '.join(spec.series)}, or one of {', '.join(INDEX)}, "
                f"got {role!r}; name the column of a series with --series-col SERIES=NAME (columns={{SERIES: NAME}})"
            )
    roles = {role for role in ("id", "value") if role not in spec.series}  # else it is a series of that name
    if roles & given.keys():
        return Panel(found, spec, given, where)
    if any(given.get(name, name) in found for name in spec.series):
        return Names(found, spec, given, where)
    if len(roles) == 2 and roles <= {*found}:
        return Panel(found, spec, given, where)
    paths = _paths(found, given.get("path", "path"))
    return Wide(found, paths, spec, given, where) if len(paths) > 1 else Names(found, spec, given, where)


def _paths(found: list[str], prefix: str) -> dict[str, int]:
    """The columns that are named after a path, and its number."""
    named = {name: re.fullmatch(rf"{re.escape(prefix)}_(\d{{1,15}})", name) for name in found}
    return {name: int(match[1]) for name, match in named.items() if match}


class Panel(Found):
    """A table with a row an observation: whose it is, its path, step or time, and the value."""

    def __init__(self, found: list[str], spec: Any, given: Mapping[str, str], where: str):
        super().__init__(found, where)
        self.spec, self.ids = spec, {given.get(name, name): name for name in spec.series}
        self.id, self.value = self.pick("id", given, True), self.pick("value", given, True)
        self.path = self.pick("path", given, False)
        timed = "time" in given and "step" not in given
        self.step = None if timed else self.pick("step", given, False)
        self.time = self.pick("time", given, False)
        self.all: list[Any] = [c for c in (self.id, self.path, self.step, self.time, self.value) if c is not None]

    def long(self, frame: pd.DataFrame, told: Told) -> tuple[pd.DataFrame, Names, Told]:
        """The same with a column a series; what is missing is NaN, what is there twice stays so.

        `told` says where a row of the frame is, and what is returned beside the new frame where a row of that is.
        """
        given_rows = frame = frame[self.all].assign(**{self.id: frame[self.id].astype(str)})
        self._refuse(frame, told)
        frame = frame[frame[self.id].isin(self.ids)]
        index = [c for c in (self.path, self.step, self.time) if c is not None]
        turn = frame.groupby([self.id, *index], dropna=False, sort=False).cumcount()
        keys = [frame[c] for c in index] + [turn.rename(_TURN), frame[self.id]]
        table = frame[self.value].set_axis(_index(keys)).unstack(self.id)
        table = table.rename(columns=self.ids).reset_index().drop(columns=_TURN)
        roles = {"path": self.path, "step": self.step, "time": self.time}
        given = {role: name for role, name in roles.items() if name is not None}
        names = Names([str(c) for c in table.columns], self.spec, given, self.where)
        return table, names, lambda row: told(self._first(given_rows, table[index].iloc[row]))

    def _first(self, frame: pd.DataFrame, cells: pd.Series) -> int:
        """The first row of a series of the spec that has these cells of path, step and time."""
        there = frame[self.id].isin(self.ids).to_numpy()
        for name, cell in cells.items():
            there = there & (frame[name].isna() if cell != cell else frame[name] == cell).to_numpy()
        return int(there.argmax())

    def _refuse(self, frame: pd.DataFrame, told: Told) -> None:
        import pandas as pd

        there = list(dict.fromkeys(frame[self.id]))
        for wanted, name in self.ids.items():
            if len(frame) and wanted not in there:
                few = joined(there[:12]) + (" and others" if len(there) > 12 else "")
                raise TableError(
                    f"{self.where} has no rows whose {self.id} is {wanted!r}, for the series {name}; it has {few}; "
                    f'say which one it is with --series-col {name}=ID (columns={{"{name}": ID}})'
                )
        bad = pd.to_numeric(frame[self.value], errors="coerce").isna() & frame[self.value].notna()
        if bad.any():
            row = int(bad.to_numpy().argmax())
            cell = frame[self.value].iloc[row]
            raise TableError(f"{self.where}: expected numbers in {self.value}, got {cell!r} in {told(row)}; "
                             f"mend it, or {option('value')}")  # fmt: skip


class Wide(Found):
    """A table with a row a step and a column a path, of one series."""

    def __init__(self, found: list[str], paths: Mapping[str, int], spec: Any, given: Mapping[str, str], where: str):
        super().__init__(found, where)
        if len(spec.series) > 1:
            raise TableError(
                f"{where} has a column a path (layout wide), which is one series, and the spec has "
                f"{len(spec.series)}: {joined([*spec.series])}; {LONG}"
            )
        self.spec, self.paths = spec, dict(paths)
        self.step, self.time = self.pick("step", given, False), self.pick("time", given, False)
        self.all: list[Any] = [c for c in (self.step, self.time, *paths) if c is not None]

    def long(self, frame: pd.DataFrame, told: Told) -> tuple[pd.DataFrame, Names, Told]:
        """The same with a column for the series, path after path, and where its rows are."""
        index = {role: name for role, name in (("step", self.step), ("time", self.time)) if name is not None}
        (series,) = self.spec.series
        table = frame[self.all].melt([*index.values()], [*self.paths], "path", series)
        table["path"] = table["path"].map(self.paths)
        names = Names([str(c) for c in table.columns], self.spec, index, self.where)
        return table, names, lambda row: told(row % len(frame))


def _index(keys: list[Any]) -> Any:
    import pandas as pd

    return pd.MultiIndex.from_arrays(keys)
