"""Where the values come from: an ensemble of ours, or a table of anyone's, as blocks in the order of their steps."""

from __future__ import annotations

import copy
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any, Protocol

import numpy as np

from procgen.checks.foreign import TableError
from procgen.checks.verdict import Check


class Origin(Protocol):
    """Values to be judged, and what is to be said of how they are stored."""

    spec: Any
    steps: int
    rows: int
    faults: list[Check]
    columns: dict[str, str]  # series of `spec` -> the name that the reader knows
    same_draws: bool  # whether drawn parameters of a path are those that `spec` draws for it

    def blocks(self) -> Iterator[tuple[int, int, Mapping[str, np.ndarray]]]: ...
    def checks(self) -> list[Check]: ...
    def about(self) -> dict[str, Any]: ...


def origin(data: Any, spec: Any, columns: Mapping[str, str] | None) -> Origin:
    """The origin behind whatever was given to `validate`; TableError when nothing can be read from it.

    TypeError when it is no kind of data, or `spec` is no kind of spec.
    """
    from procgen.terms.given import spec_of

    spec = None if spec is None else spec_of(spec)
    if isinstance(data, str | Path):
        path = Path(data)
        if not path.exists():
            raise TableError(f"there is no file or folder {path}; check the path")
        if path.is_dir():
            from procgen.ensemble import open_ensemble

            data = open_ensemble(path)
        else:
            from procgen.checks.foreign import read_table

            _need_spec(spec, path)
            return read_table(path, spec, columns)
    if hasattr(data, "blocks") and hasattr(data, "whole"):
        if columns:
            raise TableError(
                f"an ensemble knows its own columns, so that none can be named for it, got {dict(columns)}; leave out "
                "columns= (--path-col, --step-col, --time-col, --series-col)"
            )
        return EnsembleOrigin(data, spec)
    if hasattr(data, "columns") and hasattr(data, "iloc"):
        from procgen.checks.foreign import from_frame

        _need_spec(spec, "the table")
        return from_frame(data, spec, columns)
    raise TypeError(f"expected an ensemble, a DataFrame, or the path of one, got {type(data).__name__}")


def _need_spec(spec: Any, what: object) -> None:
    if spec is None:
        raise TableError(f"{what} does not say what it should follow; give the spec (--spec SPEC, or spec=)")


class EnsembleOrigin:
    """An ensemble of ours: its values are also held against the digests in its manifest."""

    def __init__(self, ensemble: Any, spec: Any = None):
        self.ensemble = ensemble
        self.spec = ensemble.spec if spec is None else spec
        self.same_draws = same_draws(ensemble.spec, self.spec)
        self.steps, self.rows = ensemble.whole.steps, ensemble.whole.rows
        self.faults: list[Check] = []
        missing = [name for name in self.spec.series if name not in ensemble.names]
        if missing:
            raise TableError(f"the ensemble has no series {', '.join(missing)}; it has {', '.join(ensemble.names)}")
        self.spec, self.columns = with_revealed(self.spec, [c.name for c in ensemble.columns if c.revealed])
        self._nodes: list[tuple[Any, dict[str, Any]]] = []

    def checks(self) -> list[Check]:
        return []

    def about(self) -> dict[str, Any]:
        """Title, digest and size, for the report."""
        whole = self.ensemble.whole
        manifest = getattr(self.ensemble, "manifest", None)
        return {
            "title": self.spec.title,
            "paths": whole.paths,
            "steps": whole.steps,
            "digest": manifest.digest if manifest is not None else None,
            "spec_digest": self.spec.digest(),
        }

    def blocks(self) -> Iterator[tuple[int, int, Mapping[str, np.ndarray]]]:
        """Blocks of the spec's series; parts that cannot be read become faults."""
        manifest = getattr(self.ensemble, "manifest", None)
        if manifest is None:
            for first_path, first_step, values in self.ensemble.blocks():
                yield first_path, first_step, {name: values[column] for name, column in self.columns.items()}
            return
        chains: dict[tuple[int, int], list[Any]] = {}
        for part in manifest.parts:
            chains.setdefault((part.block.first_path, part.block.end_path), []).append(part)
        for (first, end), parts in chains.items():
            yield from self._chain(first, end, parts)
        self._compare_digests(manifest)

    def _chain(self, first: int, end: int, parts: list[Any]) -> Iterator[tuple[int, int, Mapping[str, np.ndarray]]]:
        """The parts of one range of paths; one that cannot be read becomes a fault."""
        from procgen.ensemble.errors import EnsembleError

        pieces = self.ensemble.stored(first, end)
        part = parts[0]
        try:
            for part in parts:
                # Parts that follow each other must be cut at the same paths, hence each is handed on whole.
                yield from self._pieces(part, pieces) if len(parts) == 1 else [self._whole(part, pieces)]
            next(pieces, None)  # what comes after the last row is looked at, too
        except EnsembleError as error:
            self.faults.append(Check.fact("", "rows in order", str(part.block), str(error)))

    def _pieces(self, part: Any, pieces: Iterator[Any]) -> Iterator[tuple[int, int, Mapping[str, np.ndarray]]]:
        """The pieces of a part as they are stored; its digest is made on the way."""
        from procgen.ensemble import digest
        from procgen.ensemble.columns import as_float

        leaves = {name: digest.Leaves(part.block) for name in self.ensemble.names}
        left = part.block.rows
        while left:
            block, values = next(pieces)
            left -= block.rows
            numbers = {name: as_float(values[name]) for name in leaves}
            for name, leaf in leaves.items():
                leaf.add(block.first_path, block.first_step, numbers[name])
            yield block.first_path, block.first_step, {name: numbers[column] for name, column in self.columns.items()}
        whole = self.ensemble.manifest.whole
        self._nodes.append((part, {name: leaf.nodes(whole) for name, leaf in leaves.items()}))

    def _whole(self, part: Any, pieces: Iterator[Any]) -> tuple[int, int, Mapping[str, np.ndarray]]:
        block = part.block
        out = {name: np.empty((block.paths, block.steps)) for name in self.columns}
        for first_path, first_step, values in self._pieces(part, pieces):
            for name, numbers in values.items():
                path, step = first_path - block.first_path, first_step - block.first_step
                out[name][path : path + len(numbers), step : step + numbers.shape[1]] = numbers
        return block.first_path, block.first_step, out

    def _compare_digests(self, manifest: Any) -> None:
        """Every value is the one that was written, or the first place where it is not."""
        from procgen.ensemble import check_digest, digest
        from procgen.ensemble.manifest import node

        good = len(self._nodes) == len(manifest.parts) and all(
            node({name: digest.pack(each) for name, each in nodes.items()}) == part.node for part, nodes in self._nodes
        )
        if good:
            blocks = [(part.block, nodes) for part, nodes in self._nodes]
            good = all(
                digest.root([(block, nodes[name]) for block, nodes in blocks], manifest.whole) == recorded
                for name, recorded in {**manifest.stored, **manifest.revealed}.items()
            )
        if good:
            note = f"every value is the one that was drawn ({manifest.digest[:12]}…)"
            self.faults.append(Check.fact("", "rows in order", "all parts", "", "every path and step once, in order"))
            self.faults.append(Check.fact("", "digest", "all parts", "", note))
            return
        result = check_digest(self.ensemble.path, redraw=True)
        damages = result.damages or ("the values are not those that the manifest records",)
        first = f"; first difference: {result.difference}" if result.difference else ""
        for k, damage in enumerate(damages[:3]):
            series = getattr(damage, "series", None) or (result.difference.series if result.difference else "")
            self.faults.append(Check.fact(series, "digest", "all parts", str(damage) + (first if k == 0 else "")))


def with_revealed(spec: Any, revealed: list[str]) -> tuple[Any, dict[str, str]]:
    """The spec with every revealed term as a series of its own, and the column behind each series.

    A revealed term is then checked like any series: its shocks can be recovered where those of its sum cannot.
    """
    columns = {name: name for name in spec.series}
    if not revealed:
        return spec, columns
    from procgen.ensemble.source import read_spec
    from procgen.spec.model import SpecError

    raw = copy.deepcopy(dict(spec.raw))
    for column in revealed:
        name = column.replace(".", "__")
        raw.setdefault("series", {})[name] = [{"use": column}]
        try:
            spec = read_spec(raw)
            columns[name] = column
        except SpecError:  # revealed under a name that no `use:` can take, such as the `use` itself
            del raw["series"][name]
    return spec, columns


def same_draws(first: Any, second: Any) -> bool:
    """Whether two specs draw the same parameters for a path."""
    from procgen.terms.varied import Varied

    if first is second:
        return True
    a, b = ({(p.name, p.varying, p.stream) for p in Varied(spec).parameters.values()} for spec in (first, second))
    return b <= a
