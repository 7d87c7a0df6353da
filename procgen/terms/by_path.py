"""Values of a spec whose parameters vary by path: each path is run as the path of a spec with its values in place."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

import numpy as np

from procgen.terms.base import Array
from procgen.terms.graph import Graph
from procgen.terms.run import Run
from procgen.terms.varied import Varied

FEW = 8  # distinct values up to which it is cheaper to run each for all paths and to keep some of them


class ByPath:
    """A `Run` of a spec whose parameters vary by path; what it answers, and when, is the same."""

    def __init__(self, graph: Graph, first_path: int, paths: int, reveal: Sequence[str] = ()):
        self._varied = varied_of(graph)
        rows = self._varied.rows(first_path, paths)
        table = np.array([*rows.values()]).T
        distinct, which = np.unique(table, axis=0, return_inverse=True)
        which = which.reshape(-1)
        self.paths = paths
        self._parts: list[tuple[Run, Array, Array]] = []  # each run, which of its columns are kept, and where they go
        if len(distinct) <= FEW:
            for k, values in enumerate(distinct):
                run = Run(self._graph(rows, values), first_path, paths, reveal)
                self._parts.append((run, np.flatnonzero(which == k), np.flatnonzero(which == k)))
        else:
            edges = [0, *(np.flatnonzero(np.diff(which)) + 1).tolist(), paths]
            for start, end in pairwise(edges):
                run = Run(self._graph(rows, table[start]), first_path + start, end - start, reveal)
                self._parts.append((run, np.arange(end - start), np.arange(start, end)))

    def _graph(self, rows: dict[str, Array], values: Array) -> Graph:
        return Graph(self._varied.at(dict(zip(rows, values.tolist(), strict=True))))

    def tile(self, steps: int) -> dict[str, Array]:
        """The next `steps` steps of every series: name to float64 (steps, paths)."""
        out: dict[str, Array] = {}
        for run, kept, places in self._parts:
            for name, values in run.tile(steps).items():
                out.setdefault(name, np.empty((steps, self.paths)))[:, places] = values[:, kept]
        return out

    def state(self) -> dict[str, Array]:
        """The carried states after the last tile, flat, by number of the part and name."""
        return {f"{k}/{name}": rows for k, (run, _, _) in enumerate(self._parts) for name, rows in run.state().items()}

    def restore(self, step: int, state: dict[str, Array]) -> None:
        """Go on from a state that `state()` gave after step `step` − 1 of the same paths."""
        for k, (run, _, _) in enumerate(self._parts):
            mark = f"{k}/"
            run.restore(step, {name.removeprefix(mark): rows for name, rows in state.items() if name.startswith(mark)})


def varied_of(graph: Graph) -> Varied:
    """What varies by path in a graph that `build` made."""
    assert graph.varied is not None
    return graph.varied


def run(graph: Graph, first_path: int, paths: int, reveal: Sequence[str] = ()) -> Run | ByPath:
    """What draws the paths first_path … first_path + paths − 1 of a graph, from step 0 on."""
    kind = ByPath if graph.varied is not None and graph.varied.parameters else Run
    return kind(graph, first_path, paths, reveal)
