"""Where values come from: a spec read once a process, its columns, its stamps, and runs of it."""

from __future__ import annotations

import importlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any, Protocol

import numpy as np

from procgen.ensemble.columns import Column
from procgen.ensemble.errors import EnsembleError


class Run(Protocol):
    """A range of paths, drawn tile by tile from step 0 on."""

    def tile(self, steps: int) -> Mapping[str, np.ndarray]: ...
    def state(self) -> dict[str, np.ndarray]: ...
    def restore(self, step: int, state: dict[str, np.ndarray]) -> None: ...


class Source(Protocol):
    """A spec ready to be drawn.

    `stamps(first_step, count)` is None when the spec has no start; `depth` is how many steps before step 0 it draws.
    A source may say `gains`: that many paths side by side are drawn quicker where kernels are compiled.
    """

    columns: list[Column]
    stamps: Any
    portable: tuple[bool, str]
    depth: int

    def run(self, first_path: int, paths: int) -> Run: ...


class SpecSource:
    """The values of a spec: series in the order of the spec, then revealed outputs in the order asked for."""

    def __init__(self, spec: Any, reveal: tuple[str, ...] = ()):
        from procgen.terms.by_path import deepest
        from procgen.terms.graph import build
        from procgen.terms.supports import counted

        self.spec, self.reveal = spec, reveal
        self.graph = build(spec)
        try:
            for name in reveal:
                self.graph.resolve(name)
        except KeyError as error:
            raise EnsembleError(f"cannot reveal: {error.args[0]}") from None
        for name in reveal:
            if name in spec.series:
                raise EnsembleError(f"cannot reveal: {name} is a series, which is written anyway; give {name}.LABEL")
        self.columns = [
            Column(
                s.name,
                s.type or ("int64" if whole else "float64"),
                s.decimals,
                s.unit,
                gaps=self.graph.gappy(s.name),
                counted=whole,
            )
            for s in spec.series.values()
            for whole in [counted(self.graph, s.name)]
        ]
        self.columns += [Column(name, revealed=True, gaps=self.graph.gappy(name)) for name in reveal]
        self.stamps = spec.time.stamps if spec.time.start is not None else None
        self.portable = self.graph.portable
        self.depth = deepest(self.graph)
        self.gains = any(node.term.compiles for _, node in self.graph.terms())

    def run(self, first_path: int, paths: int) -> Run:
        from procgen.terms.by_path import run

        return run(self.graph, first_path, paths, self.reveal)


def read_spec(raw: Mapping[str, Any]) -> Any:
    """The Spec that `raw` describes, as a manifest has it: without the names of files. SpecError with every fault."""
    from procgen.chance.laws import LAWS
    from procgen.spec.reader import read_raw
    from procgen.spec.tables import KEPT
    from procgen.terms import catalogue

    return replace(read_raw(dict(raw), catalogue(), LAWS, KEPT), file=None)


def spec_source(raw: Mapping[str, Any], reveal: tuple[str, ...]) -> Source:
    """The usual factory: `raw` is a mapping in the spec language."""
    return SpecSource(read_spec(raw), reveal)


FACTORY = "procgen.ensemble.source:spec_source"


Key = tuple[str, tuple[str, ...], str]
_SOURCES: dict[Key, Source] = {}


def open_source(raw: Mapping[str, Any], reveal: Sequence[str] = (), factory: str = FACTORY) -> Source:
    """The source of a spec; the last few are kept, so that a worker reads a spec once for all its chains."""
    key = (json.dumps(raw), tuple(reveal), factory)
    if key not in _SOURCES:
        module, _, name = factory.partition(":")
        _keep(key, getattr(importlib.import_module(module), name)(raw, tuple(reveal)))
    return _SOURCES[key]


def _keep(key: Key, source: Source) -> None:
    while len(_SOURCES) >= 4:
        _SOURCES.pop(next(iter(_SOURCES)))
    _SOURCES[key] = source


def remember(spec: Any, reveal: tuple[str, ...]) -> Source:
    """The source of a spec that has been read already, kept for the chains that this process draws."""
    key = (json.dumps(spec.raw), reveal, FACTORY)
    if key not in _SOURCES:
        _keep(key, SpecSource(spec, reveal))
    return _SOURCES[key]


def revealable(spec: Any) -> tuple[str, ...]:
    """Every `series.label` and `series.label.output` of a spec, in its order; what has no name alone is left out."""
    from procgen.terms.graph import build

    names: dict[str, None] = {}
    for name, node in build(spec).terms():
        if name.endswith("."):
            continue
        names[name] = None
        names.update({f"{name}.{output}": None for output in node.term.outputs})
    return tuple(names)


def unnamed(spec: Any) -> tuple[str, ...]:
    """The series and shared bodies of which `revealable` has to leave some terms out."""
    from procgen.terms.graph import build

    return tuple(dict.fromkeys(name[:-1] for name, _ in build(spec).terms() if name.endswith(".")))
