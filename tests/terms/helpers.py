"""Small helpers for the tests of the terms: specs from text, and paths of impulses instead of chance."""

from __future__ import annotations

import numpy as np

from procgen.chance.laws import LAWS, Law
from procgen.chance.streams import Stream
from procgen.spec.reader import read_text
from procgen.terms import catalogue
from procgen.terms.graph import Graph, build
from procgen.terms.run import Run


def graph_of(series: str, *, steps: int = 60, seed: int = 11, rest: str = "") -> Graph:
    """The graph of a spec given by its `series:` block (indented by two) and anything after it."""
    time = f"{{start: 2027-01-04, every: 1h, steps: {steps}}}"
    text = f"procgen: 1\nseed: {seed}\npaths: 64\ntime: {time}\n{rest}\nseries:\n{series}\n"
    return build(read_text(text, catalogue(), LAWS))


def draw(graph: Graph, first_path: int, paths: int, tiles: list[int]) -> dict[str, np.ndarray]:
    """All series over tiles of the given lengths, (steps, paths)."""
    run = Run(graph, first_path, paths)
    parts = [{name: np.array(rows) for name, rows in run.tile(steps).items()} for steps in tiles]
    return {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}


def jacobian(graph: Graph, steps: int, monkeypatch, width: int = 4096) -> dict[str, np.ndarray]:
    """Response of every series to every primary normal that it uses, (steps, normals).

    Path 0 sees no shock at all, path k sees a single unit normal: what the value code does to it, less what it
    does to nothing, is column k. For a linear graph, with shocks of any law, J J′ is therefore the exact
    covariance of the values as they are drawn, with no theory and no sampling in it.
    """
    places: dict[tuple, int] = {}

    def impulses(self, first_path, paths, first_step, steps, out=None):
        z = np.zeros((steps, width))
        for row in range(steps):
            column = places.setdefault((self.key, first_step + row), len(places) + 1)
            z[row, column] = 1.0
        if out is not None:
            np.copyto(out, z)
        return z if out is None else out

    with monkeypatch.context() as patch:
        patch.setattr(Stream, "uniforms", impulses)
        for law in (Law, *LAWS.values()):
            patch.setattr(law, "shocks", lambda self, u, out=None: u)
            patch.setattr(law, "shocks_from_normals", lambda self, z, out=None: z)
        values = draw(graph, 0, width, [steps])
    return {name: x[:, 1 : len(places) + 1] - x[:, :1] for name, x in values.items()}
