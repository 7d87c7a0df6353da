"""Specs whose parameters vary by path: what each path's values are, and the spec that has them in place.

Path p of such a spec is path p of the spec with the values of p written in. A draw is addressed like any other:
by seed, name of the parameter (or stream and label of where it is used), the role "parameter", and the path; one
over series is that of path 0.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from functools import cached_property
from typing import Any

import numpy as np

from procgen.chance import draws
from procgen.chance.streams import Stream
from procgen.spec.draws import TableDraw
from procgen.spec.model import Fault, Place, Spec, SpecError
from procgen.spec.records import dataclass
from procgen.spec.varying import PATH, SERIES, Varying, fixed, varying_of

ROLE = "parameter"
Array = np.ndarray


@dataclass(frozen=True)
class Parameter:
    """One drawn parameter: the name that people see, what it is, and the stream of its draws."""

    name: str
    owner: str  # the series or shared body that it belongs to; "" for one that several share
    varying: Varying
    stream: Stream

    def values(self, first_path: int, paths: int) -> Array:
        """Its values on a range of paths, (paths,), in the unit of the draw."""
        law = self.varying.law
        if isinstance(law, TableDraw):
            return self._looked_up(law, first_path, paths)
        if self.varying.over == SERIES:
            first_path, paths = 0, 1
        return draws.values(law, self.stream.uniforms(first_path, paths, 0, 1)[0])

    def _looked_up(self, law: TableDraw, first_path: int, paths: int) -> Array:
        if isinstance(law.values, tuple):
            last = first_path + paths - 1
            if last >= len(law.values):
                raise self._fault(f"has values of {len(law.values)} paths, and path {last} is asked for")
            return np.array(law.values[first_path : first_path + paths])
        if self.owner not in law.values:
            raise self._fault(f"has no value for series {self.owner}")
        return np.array([law.values[self.owner]])

    def _fault(self, what: str) -> SpecError:
        return SpecError((Fault(Place(None, 0, 0, ""), f"the table of {self.name} {what}; add it there"),))


class Varied:
    """A spec with its draws over series made; `parameters` are those that are left, drawn by path."""

    def __init__(self, spec: Spec):
        self.given = spec
        self.by_series = {p.name: p for p in _parameters(spec) if p.varying.over == SERIES}
        self.constants = {name: float(p.values(0, 1)[0]) for name, p in self.by_series.items()}
        self.spec = fixed(spec, self._constant)
        self.declared = {p.name: p for p in _parameters(spec) if p.varying.over == PATH}
        self._owners = {owner for owner, _ in varying_of(self.spec)}
        used = {varying.key(owner) for owner, varying in varying_of(spec)}
        self.parameters = {name: p for name, p in self.declared.items() if name in used}

    def _constant(self, owner: str, varying: Varying) -> object:
        return varying.number(self.constants[varying.key(owner)]) if varying.over == SERIES else varying

    def rows(self, first_path: int, paths: int) -> dict[str, Array]:
        """The values of every parameter on a range of paths, each (paths,)."""
        return {name: p.values(first_path, paths) for name, p in self.parameters.items()}

    def at(self, values: Mapping[str, Any], spec: Spec | None = None) -> Spec:
        """The spec, or a part of it, with these values of its parameters in place: numbers, or rows of them."""
        return fixed(spec or self.spec, lambda owner, varying: varying.number(values[varying.key(owner)]), self._owners)

    @cached_property
    def typical(self) -> Spec:
        """The spec at the medians of its draws."""
        return self.at({name: median(p.varying) for name, p in self.parameters.items()})


def median(varying: Varying) -> float:
    """The median of a drawn parameter; of a table, the value in the middle."""
    if isinstance(varying.law, TableDraw):
        return sorted(varying.law.numbers)[len(varying.law.numbers) // 2]
    return float(draws.values(varying.law, np.array([0.5]))[0])


def _parameters(spec: Spec) -> Iterator[Parameter]:
    """Every drawn parameter once: those declared by path in their order, then the others where they stand."""
    for name, varying in spec.parameters.items():
        if varying.over == PATH:
            yield Parameter(name, "", varying, Stream(spec.seed, name, "", ROLE))
    seen = set()
    for owner, varying in varying_of(spec):
        key = varying.key(owner)
        if key not in seen and not (varying.name and varying.over == PATH):
            seen.add(key)
            stream = spec.series[owner].stream if owner in spec.series else owner
            yield Parameter(key, owner, varying, Stream(spec.seed, stream, varying.name or varying.label, ROLE))
