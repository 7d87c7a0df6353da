"""The checked Spec: frozen dataclasses, and the faults that stand in its place."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Iterator, Mapping
from dataclasses import field
from typing import TYPE_CHECKING, Any

from procgen.spec.records import dataclass

if TYPE_CHECKING:
    from procgen.spec.calendar import Grid
    from procgen.spec.variants import Written


class Frozen(Mapping[str, Any]):
    """A read-only mapping that keeps its order, can be hashed, and can be sent to a worker process."""

    __slots__ = ("_items",)

    def __init__(self, items: Mapping[str, Any] | None = None) -> None:
        self._items = dict(items or {})

    def __getitem__(self, key: str) -> Any:
        return self._items[key]

    def __iter__(self) -> Iterator[str]:
        return iter(self._items)

    def __len__(self) -> int:
        return len(self._items)

    def __hash__(self) -> int:
        return hash(frozenset(self._items.items()))

    def __repr__(self) -> str:
        return repr(self._items)


@dataclass(frozen=True, slots=True)
class Place:
    """Where something stands: file, line and column (from 1; 0 when not from a file), and dotted path."""

    file: str | None
    line: int
    column: int
    path: str

    def __str__(self) -> str:
        where = [self.file] if self.file else []
        if self.line:
            where.append(f"line {self.line}, column {self.column}")
        spot = self.path or "the spec"
        return f"{spot} ({', '.join(where)})" if where else spot


@dataclass(frozen=True, slots=True)
class Fault:
    """One thing wrong with a spec: what was expected and given and how to mend it, and where."""

    place: Place
    message: str

    def __str__(self) -> str:
        return f"{self.message}\n  at {self.place}"


class SpecError(ValueError):
    """Every fault of a spec; `str` lists them all."""

    def __init__(self, faults: tuple[Fault, ...]) -> None:
        super().__init__(faults)
        self.faults = faults

    def __str__(self) -> str:
        count = len(self.faults)
        head = "" if count == 1 else f"{count} faults in this spec\n"
        return head + "\n".join(str(fault) for fault in self.faults)


@dataclass(frozen=True)
class Entry:
    """One term of a body, checked.

    `values` has every declared parameter, per step, defaults filled in, without bodies and shock; beside a
    `shock`, the parameters it replaces (sd, total_sd, law) are None. Equality ignores places.
    """

    kind: str
    label: str
    times: float
    values: Mapping[str, Any]
    bodies: Mapping[str, tuple[Entry, ...]]
    shock: Entry | None
    place: Place = field(compare=False)
    places: Mapping[str, Place] = field(compare=False, default_factory=Frozen)


@dataclass(frozen=True)
class Series:
    """A named output column."""

    name: str
    of: tuple[Entry, ...]
    unit: str | None
    type: str | None  # "float64", "float32" or "int64"; None: as its values are (`terms.supports`)
    decimals: int | None
    stream: str
    note: str | None
    place: Place = field(compare=False)
    group: str | None = None
    attributes: Mapping[str, Any] = field(default_factory=Frozen)  # its row in the group's table
    before: tuple[float, ...] | None = None  # its values up to step −1, oldest first, that it leaves from


@dataclass(frozen=True)
class Shared:
    """A body drawn once a path and used by several series; its stream is its name."""

    name: str
    of: tuple[Entry, ...]
    place: Place = field(compare=False)


@dataclass(frozen=True)
class Copula:
    """Names ("series.label") whose shocks are tied by a t copula of `df` degrees of freedom."""

    names: tuple[str, ...]
    df: float


@dataclass(frozen=True)
class Following:
    """Names whose correlations follow the state of what `by` names, with a matrix for each of its states."""

    by: str
    names: tuple[str, ...]
    states: tuple[str, ...]
    matrices: tuple[tuple[tuple[float, ...], ...], ...]
    place: Place = field(compare=False)

    def among(self, wanted: Callable[[str], bool]) -> Following:
        """Return what it says of some of the names."""
        kept = [i for i, name in enumerate(self.names) if wanted(name)]
        matrices = tuple([tuple([tuple([m[i][j] for j in kept]) for i in kept]) for m in self.matrices])
        return Following(self.by, tuple([self.names[i] for i in kept]), self.states, matrices, self.place)


@dataclass(frozen=True)
class Correlation:
    """Correlation of the primary normals of `names` ("series.label"), in order of first appearance.

    Under one of the `copulas` it is that of the t variables which take the place of the normals. Where it differs by
    state the matrix has 0, and one of `following` has it.
    """

    names: tuple[str, ...] = ()
    matrix: tuple[tuple[float, ...], ...] = ()
    copulas: tuple[Copula, ...] = ()
    following: tuple[Following, ...] = ()

    def among(self, wanted: Callable[[str], bool]) -> Correlation:
        """Return what it says of some of the names."""
        kept = [i for i, name in enumerate(self.names) if wanted(name)]
        copulas = [Copula(tuple([name for name in c.names if wanted(name)]), c.df) for c in self.copulas]
        return Correlation(
            tuple([self.names[i] for i in kept]),
            tuple([tuple([self.matrix[i][j] for j in kept]) for i in kept]),
            tuple([copula for copula in copulas if len(copula.names) > 1]),
            tuple([each for f in self.following if len((each := f.among(wanted)).names) > 1]),
        )


@dataclass(frozen=True)
class Spec:
    """A checked spec.

    `raw` is the mapping as written, anchors expanded, without its variants; reading it again gives an equal Spec.
    """

    title: str | None
    seed: int
    paths: int
    time: Grid
    shared: Mapping[str, Shared]
    series: Mapping[str, Series]
    correlation: Correlation
    raw: dict[str, Any] = field(compare=False)
    file: str | None = field(compare=False)
    parameters: Mapping[str, Any] = field(default_factory=Frozen)  # declared draws by name (`spec.varying`)
    written: Written | None = field(compare=False, repr=False, default=None)  # what `variant` and `set` read again

    def __repr__(self) -> str:
        head = f"{self.title}: " if self.title else ""
        size = f"{self.paths} paths × {self.time.steps} steps"
        variants = f", variants {', '.join(self.variants)}" if self.variants else ""
        return f"<Spec {head}{', '.join(self.series)}; {size}, seed {self.seed}{variants}>"

    @property
    def variants(self) -> tuple[str, ...]:
        """The names of its variants, in the order of writing."""
        return () if self.written is None else tuple(self.written.variants)

    def variant(self, name: str) -> Spec:
        """Return a variant by its name, "base" being the spec itself; SpecError names those there are.

        It has the shocks of the spec: what is drawn by the same names is the same.
        """
        from procgen.spec.reader import variant
        from procgen.spec.variants import BASE, no_such

        if name == BASE:
            return self
        if name not in self.variants:
            raise SpecError((Fault(Place(self.file, 0, 0, "variants"), no_such(name, self.variants)),))
        return variant(self, name)

    def set(self, values: Mapping[str, Any]) -> Spec:
        """Return this spec with other values at dotted places, as in {"series.load.swing.sd": 9, "time.steps": 500}.

        Places are those of faults, or have the label of a term in the place of its number; None takes out what is
        there. SpecError lists every fault, as of a file: places that are not there, values out of their domain.
        """
        from procgen.spec.reader import settled
        from procgen.spec.variants import settings_of

        return settled(self, settings_of(values))

    def changed(self, paths: int | None = None, steps: int | None = None, seed: int | None = None) -> Spec:
        """Return this spec with another number of paths or steps, or another seed; SpecError when out of range."""
        from procgen.spec.reader import change

        asked = {"paths": paths, "steps": steps, "seed": seed}
        return change(self, **{key: value for key, value in asked.items() if value is not None})

    def canonical(self) -> dict[str, Any]:
        """Return `raw` without what changes no value (title, notes, reuse), keys sorted, numbers normalised.

        The order of series is kept: it is the order of the columns.
        """
        raw = {key: value for key, value in self.raw.items() if key not in ("title", "reuse")}
        canonical = _normal(raw)
        for section in ("series", "groups"):
            if section in raw:
                canonical[section] = {name: _normal(_without_note(body)) for name, body in raw[section].items()}
        return canonical

    def digest(self) -> str:
        """Return the SHA-256 of the canonical spec, in hexadecimal."""
        text = json.dumps(self.canonical(), ensure_ascii=False, separators=(",", ":"), allow_nan=False)
        return hashlib.sha256(text.encode("utf-8")).hexdigest()


def _without_note(body: Any) -> Any:
    return {key: value for key, value in body.items() if key != "note"} if isinstance(body, dict) else body


def _normal(value: Any) -> Any:
    """Return plain data with sorted keys, and whole floats as the integers they equal."""
    if isinstance(value, dict):
        return {key: _normal(value[key]) for key in sorted(value)}
    if isinstance(value, list):
        return [_normal(item) for item in value]
    if isinstance(value, float) and value.is_integer() and abs(value) < 2**53:
        return int(value)
    return value
