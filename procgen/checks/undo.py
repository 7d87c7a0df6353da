"""Undoing a series whose parameters are drawn by path: each path with its own values, drawn again by its number."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.terms.base import Unknown
from procgen.terms.by_path import varied_of
from procgen.terms.graph import Graph
from procgen.terms.recover import recovery


class UndoneByPath:
    """What `terms.recover.Recovery` is for one spec, for the paths of a spec with a spec of its own for each."""

    def __init__(self, graph: Any, series: str, first_path: int, paths: int):
        varied = varied_of(graph)
        rows = varied.rows(first_path, paths)
        values = [{name: float(row[i]) for name, row in rows.items()} for i in range(paths)]
        self._paths = [recovery(Graph(varied.at(each)), series, 1) for each in values]

    def tile(self, values: NDArray) -> NDArray | Unknown:
        """Standardised shocks (steps, paths) of the next steps' values; NaN where they cannot be known."""
        columns = []
        for i, path in enumerate(self._paths):
            found = path if isinstance(path, Unknown) else path.tile(values[:, i : i + 1])
            if isinstance(found, Unknown):
                return found
            columns.append(found)
        return np.concatenate(columns, axis=1)


def undone(
    graph: Any, series: str, theory: Any, first_path: int, paths: int, forgotten: float | None = None
) -> Any:
    """What gives the shocks of a series from its values on a range of paths, or Unknown."""
    if getattr(theory, "mixture", None) is None:
        return recovery(graph, series, paths, forgotten)
    return UndoneByPath(graph, series, first_path, paths)
