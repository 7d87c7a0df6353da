"""Layouts: which files a part has, what their columns are called, and what a manifest says of it.

Every layout holds the same values, hence has the same digests; what their rows look like is in `forms`.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import field
from typing import Any

from procgen.ensemble.columns import Column
from procgen.ensemble.errors import EnsembleError
from procgen.ensemble.plan import CELL
from procgen.spec.records import dataclass
from procgen.spec.words import did_you_mean

KINDS = ("long", "panel", "nested", "wide")
PARTITIONS = ("paths", "series")
ROLES = {
    "long": ("path", "step", "time"),
    "panel": ("id", "path", "step", "time", "value"),
    "nested": ("path", "step", "time"),
    "wide": ("path", "step", "time"),
}
LOOKS = {
    "long": "a row a path and step, a column a series",
    "panel": "a row an observation",
    "nested": "a row a path, a list a series; a path longer than a part has several rows, each from its first step on",
    "wide": f"a row a step, a column a path; a file holds one series and at most {CELL:,} paths",
}
LONGEST = 240  # bytes of a file name that every usual file system takes


@dataclass(frozen=True)
class Layout:
    """What was asked for: the kind, what a file holds, and columns with other names.

    `partition` "paths": a file holds all series of some paths; "series": one series of them, with what is revealed of
    it. `renamed` maps roles (id, path, step, time, value) to names.
    """

    kind: str = "long"
    partition: str = "paths"
    renamed: Mapping[str, str] = field(default_factory=dict)

    @classmethod
    def asked(cls, kind: str, partition: str | None = None, columns: Mapping[str, str] | None = None) -> Layout:
        """The layout of these words; EnsembleError when they name none."""
        if kind not in KINDS:
            hint = did_you_mean(kind, KINDS)
            raise EnsembleError(
                f"expected layout {', '.join(KINDS[:-1])} or {KINDS[-1]}, got {kind!r}{hint and f'; {hint}'}"
            )
        usual = "series" if kind == "wide" else "paths"
        partition = usual if partition is None else partition
        if partition not in PARTITIONS:
            raise EnsembleError(f"expected partition {' or '.join(PARTITIONS)}, got {partition!r}")
        if kind == "wide" and partition != "series":
            raise EnsembleError(
                "a file of layout wide holds one series, got partition paths; leave it away, or choose another layout"
            )
        if columns is not None and not isinstance(columns, Mapping):
            kind_given = type(columns).__name__
            raise EnsembleError(
                f'expected columns as roles and their names, as in {{"time": "week"}}, got {kind_given}'
            )
        renamed = dict(columns or {})
        for role, name in renamed.items():
            if role not in ROLES[kind]:
                raise EnsembleError(
                    f"expected one of {', '.join(ROLES[kind])} to get another name in layout {kind}, got {role!r}"
                )
            if not isinstance(name, str) or not name.strip() or not name.isprintable():
                raise EnsembleError(f"expected a name for the column {role}, got {name!r}")
        return cls(kind, partition, {role: name for role, name in renamed.items() if name != role})

    @classmethod
    def of(cls, identity: Mapping[str, Any]) -> Layout:
        """The layout that the identity of an ensemble names."""
        return cls.asked(identity.get("layout", "long"), identity.get("partition"), identity.get("columns"))

    def identity(self) -> dict[str, Any]:
        """What a manifest says of it; only what is not as usual is added to the name."""
        found: dict[str, Any] = {"layout": self.kind}
        if self.partition != Layout.asked(self.kind).partition:
            found["partition"] = self.partition
        if self.renamed:
            found["columns"] = dict(self.renamed)
        return found

    @property
    def streams(self) -> bool:
        """Whether batches are written as they come; else a part is gathered first."""
        return self.kind == "long" and self.partition == "paths"

    @property
    def widest(self) -> int | None:
        """The most paths that a part can hold, None where that does not matter."""
        return CELL if self.kind == "wide" else None

    def name(self, role: str, stamped: bool = True) -> str:
        """The name of the column in a role; without stamps, the step stands where a panel has its time."""
        if self.kind == "panel" and not stamped and role == "time":
            return self.renamed.get("step", self.renamed.get("time", "step"))
        return self.renamed.get(role, role)

    def of_path(self, path: int) -> str:
        """The name of the column of a path, where each has one."""
        return f"{self.name('path')}_{path}"

    def _is_of_path(self, name: str, paths: range) -> bool:
        number = name.rpartition("_")[2]
        return number.isdecimal() and int(number) in paths and name == self.of_path(int(number))

    def index(self, stamped: bool) -> dict[str, str]:
        """Roles of the columns that say where a row belongs, and their names, in order."""
        if self.kind == "panel":
            return {role: self.name(role, stamped) for role in ("id", "path", "time")}
        roles = ("step", "time") if self.kind == "wide" else ("path", "step", "time")
        return {role: self.name(role) for role in roles if stamped or role != "time"}

    def files(self, part: str, columns: Sequence[Column]) -> dict[str, tuple[Column, ...]]:
        """The files of the part of that name, and the columns that each holds."""
        if self.partition == "paths":
            return {part: tuple(columns)}
        held = [(column,) for column in columns] if self.kind == "wide" else owned(columns)
        return {f"{some[0].name}.{part}": some for some in held}

    def check(self, columns: Sequence[Column], stamped: bool, paths: range) -> None:
        """EnsembleError when an ensemble of these columns and paths cannot have this layout."""
        if "time" in self.renamed and not stamped and self.kind != "panel":
            raise EnsembleError(
                "the spec has no start, so that there is no time to give another name; name the step, or give a start"
            )
        if self.kind == "panel" and "step" in self.renamed and (stamped or "time" in self.renamed):
            have = "time and no step" if stamped else "one column for time or step"
            raise EnsembleError(f"layout panel has {have} here; give another name to the time alone")
        names = [*self.index(stamped).values()]
        if self.kind == "panel":
            names += [self.name("value"), *dict.fromkeys(label for some in owned(columns) for label in labels(some))]
        elif self.kind == "wide":
            names += [name for name in names if self._is_of_path(name, paths)]
        else:
            names += [column.name for column in columns]
        for name, count in Counter(names).items():
            if count > 1:
                raise EnsembleError(
                    f"{count} columns of layout {self.kind} would be called {name!r}; give one another name with "
                    f"--columns (columns=), whose roles are {', '.join(ROLES[self.kind])}"
                )

    def check_files(self, part: str, columns: Sequence[Column]) -> None:
        """EnsembleError when a part of that name cannot have its files in one folder."""
        seen: dict[str, str] = {}
        for name in self.files(part, columns):
            if len(name.encode()) > LONGEST:
                raise EnsembleError(f"the file name {name} is too long; use partition paths, or reveal shorter names")
            if seen.setdefault(name.casefold(), name) != name:
                raise EnsembleError(
                    f"{seen[name.casefold()]} and {name} are one file where letters have no case; "
                    "use partition paths, or other names"
                )

    def sentence(self, stamped: bool) -> str:
        """What a reader of the files meets."""
        names = [*self.index(stamped).values()] + [self.name("value")] * (self.kind == "panel")
        file = "; a file a series" if self.partition == "series" and self.kind != "wide" else ""
        return f"layout {self.kind} ({', '.join(names)}): {LOOKS[self.kind]}{file}"


def owned(columns: Sequence[Column]) -> list[tuple[Column, ...]]:
    """Each series with what is revealed of it; what is revealed of no series stands alone."""
    series = {column.name: [column] for column in columns if not column.revealed}
    loose: list[Column] = []
    for column in columns:
        if column.revealed:
            owner = column.name.partition(".")[0]
            (series[owner] if owner in series and owner != column.name else loose).append(column)
    return [*map(tuple, series.values()), *((column,) for column in loose)]


def labels(some: Sequence[Column]) -> list[str]:
    """What the columns revealed of one series are called beside it: their names without its own."""
    return [column.name.partition(".")[2] for column in some[1:]]
