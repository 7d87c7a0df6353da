"""An ensemble to read from: on disk or in memory, the same calls and the same values."""

from __future__ import annotations

import contextlib
from collections.abc import Iterator, Mapping, Sequence
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from procgen.ensemble import digest, files, parquet, revealed
from procgen.ensemble.columns import Column, as_float
from procgen.ensemble.errors import EnsembleError
from procgen.ensemble.forms import form
from procgen.ensemble.layouts import Layout
from procgen.ensemble.manifest import Manifest, bytes_text
from procgen.ensemble.places import Place
from procgen.ensemble.plain import Room, new
from procgen.ensemble.plan import GROUP_ROWS, Block, cut
from procgen.ensemble.seal import contradictions, refuse_changed, refuse_version
from procgen.ensemble.shapes import Shapes
from procgen.ensemble.source import read_spec
from procgen.ensemble.store import MANIFEST, PLAN, Folder, folder_path
from procgen.spec.words import did_you_mean
from procgen.terms.varied import Varied

if TYPE_CHECKING:
    import pandas as pd
    import pyarrow as pa

HANDFUL = 5  # names of ensembles that a sentence lists
Blocks = Iterator[tuple[Block, dict[str, np.ndarray]]]


def put(out: Mapping[str, np.ndarray], block: Block, values: Mapping[str, np.ndarray], here: Block) -> None:
    """Copy what rectangle `here` has of `block` to its place in `out`, arrays (paths, steps) by name."""
    common = block.common(here)
    if common is not None:
        for name, array in out.items():
            array[common.within(block)] = values[name][common.within(here)]


class Ensemble(Shapes):
    """All paths of a spec, or a range of them.

    ``ens["load_kw"]`` is a (paths, steps) float64 array in the series' unit, and ``for name in ens`` gives the names
    of the columns: the series of the spec, then what was revealed. `panel`, `wide`, `nested` and `to_pandas` give
    frames, `each_path` one path after the other. `whole` is the range of paths and steps that is here; paths keep
    their numbers, so row 0 of an array is path ``whole.first_path``.
    """

    def __init__(self, columns: Sequence[Column], whole: Block, stamps: Any = None):
        self.columns = tuple(columns)
        self.whole = whole
        self.stamps = stamps

    # what is here

    def _range(self, first_path: int | None, end_path: int | None) -> tuple[int, int]:
        """The paths from first to end, those that are here where None."""
        first = self.whole.first_path if first_path is None else first_path
        return first, self.whole.end_path if end_path is None else end_path

    @property
    def names(self) -> tuple[str, ...]:
        return tuple(column.name for column in self.columns)

    @property
    def spec(self) -> Any:
        """The Spec that the values follow."""
        raise NotImplementedError

    @property
    def digest(self) -> str:
        """The digest of the stored values (64 hex digits)."""
        raise NotImplementedError

    def stored(
        self,
        first_path: int | None = None,
        end_path: int | None = None,
        names: Sequence[str] | None = None,
        steps: range | None = None,
    ) -> Blocks:
        """Blocks part by part, in row order within each, with values as stored, of the paths first_path … end_path − 1.

        Blocks at the ends of the ranges may reach beyond them. `names` are the columns wanted, all when None; parts
        without any of `steps` are left out.
        """
        raise NotImplementedError

    def blocks(self) -> Iterator[tuple[int, int, dict[str, np.ndarray]]]:
        """(first_path, first_step, {name: (paths, steps) float64}) in row order, in bounded memory.

        The arrays may be views of the ensemble and must not be written to. Raises EnsembleError where a part
        is damaged or its rows are not the paths and steps that belong there.
        """
        for block, values in self.stored():
            yield block.first_path, block.first_step, {name: as_float(v) for name, v in values.items()}

    def times(self) -> np.ndarray | None:
        """The stamps of the steps as datetime64[us] in UTC, or None when the spec has no start."""
        if self.stamps is None:
            return None
        return np.asarray(self.stamps(self.whole.first_step, self.whole.steps)).astype("datetime64[us]")

    # values

    def __contains__(self, name: object) -> bool:
        return name in self.names

    def __iter__(self) -> Iterator[str]:
        return iter(self.names)

    def __len__(self) -> int:
        return len(self.names)

    def _ipython_key_completions_(self) -> list[str]:
        return [*self.names]

    def __getitem__(self, name: str) -> np.ndarray:
        """All values of a column, (paths, steps) float64; KeyError names the columns there are."""
        self.refuse_unknown(name)
        return as_float(self.rectangle(self.whole, (name,))[name])

    def paths(self, first: int, end: int) -> Memory:
        """The paths first … end − 1, by their numbers in the ensemble, as an ensemble in memory.

        Raises EnsembleError when some of them are not here.
        """
        if not self.whole.first_path <= first < end <= self.whole.end_path:
            raise EnsembleError(
                f"expected paths within {self.whole.first_path} to {self.whole.end_path} (its end is not "
                f"included), got {first} to {end}"
            )
        whole = Block(first, end - first, self.whole.first_step, self.whole.steps)
        return Memory(self.rectangle(whole), self.columns, whole, self.stamps, self)

    def refuse_unknown(self, name: str) -> None:
        if name not in self.names:
            hint = did_you_mean(name, self.names)
            if isinstance(name, int):
                hint = f"path {name} alone: .paths({name}, {name + 1})"
            raise KeyError(f"expected one of {', '.join(self.names)}, got {name!r}{hint and f'; {hint}'}")

    def rectangle(self, block: Block, names: Sequence[str] | None = None) -> dict[str, np.ndarray]:
        """Values (paths, steps) of a rectangle as they are stored, by column: those of these names, or all."""
        columns = [column for column in self.columns if names is None or column.name in names]
        out = {column.name: np.empty((block.paths, block.steps), column.type) for column in columns}
        steps = range(block.first_step, block.end_step)
        for here, values in self.stored(block.first_path, block.end_path, [*out], steps):
            put(out, block, values, here)
        return out

    def ranges(self) -> list[range]:
        """Ranges of paths that are stored together, in order."""
        return [range(self.whole.first_path, self.whole.end_path)]

    @property
    def cut_by_steps(self) -> bool:
        """Whether paths are cut into parts, so that blocks of a path do not follow each other."""
        return False

    @property
    def parameters(self) -> pd.DataFrame:
        """What was drawn by path: a frame with a row a path, indexed by its number, and a column a parameter."""
        import pandas as pd

        table = revealed.path_table(Varied(self.spec), self.whole.first_path, self.whole.paths)
        index = pd.RangeIndex(self.whole.first_path, self.whole.end_path, name="path")
        return pd.DataFrame(index=index) if table is None else table.to_pandas().set_index("path")

    @property
    def series(self) -> pd.DataFrame:
        """A frame with a row a series: its group, attributes, and what was drawn by series."""
        import pandas as pd

        table = revealed.series_table(Varied(self.spec))
        index = pd.Index([*self.spec.series], name="series")
        return pd.DataFrame(index=index) if table is None else table.to_pandas().set_index("series")

    def to_arrow(self) -> pa.Table:
        """A table of the long layout: path, step, time (where the spec has a start), then the columns."""
        import pyarrow as pa

        rows = form(Layout(), self.columns, self.stamps, self.whole)
        return pa.concat_tables([rows.table(block, self.columns, values) for block, values in self.stored()])

    def to_pandas(self) -> pd.DataFrame:
        """A frame of the long layout, as `to_arrow` gives it."""
        return self.to_arrow().to_pandas()

    def __repr__(self) -> str:
        size = bytes_text(sum(np.dtype(c.type).itemsize for c in self.columns) * self.whole.rows)
        first = f" from path {self.whole.first_path}" if self.whole.first_path else ""
        what = f"{self.whole.paths} paths × {self.whole.steps} steps{first}"
        return f"<Ensemble of {', '.join(self.names)}: {what}, {size} of values>"


class Memory(Ensemble):
    """An ensemble whose values are arrays in memory."""

    def __init__(
        self, values: Mapping[str, np.ndarray], columns: Sequence[Column], whole: Block, stamps: Any, origin: Any
    ):
        super().__init__(columns, whole, stamps)
        self._values = values
        self._origin = origin  # the ensemble or source that knows the spec

    manifest = None

    @property
    def spec(self) -> Any:
        return self._origin.spec

    @cached_property
    def digest(self) -> str:
        roots = {}
        for column in self.columns:
            if not column.revealed:
                leaves = digest.Leaves(self.whole)
                leaves.add(self.whole.first_path, self.whole.first_step, self._values[column.name])
                roots[column.name] = digest.root([(self.whole, leaves.nodes(self.whole))], self.whole)
        return digest.total(roots)

    def stored(
        self,
        first_path: int | None = None,
        end_path: int | None = None,
        names: Sequence[str] | None = None,
        steps: range | None = None,
    ) -> Blocks:
        first, end = self._range(first_path, end_path)
        wanted = Block(first, end - first, self.whole.first_step, self.whole.steps)
        for block in cut(wanted, GROUP_ROWS):
            yield block, {name: values[block.within(self.whole)] for name, values in self._values.items()}


class OnDisk(Ensemble):
    """An ensemble in a folder, read part by part."""

    def __init__(self, path: Place, manifest: Manifest, spec: Any = None):
        self.path, self.manifest = path, manifest
        self._spec = spec
        super().__init__(manifest.columns, manifest.whole)
        self.stamps = self.spec.time.stamps if manifest.time is not None else None

    @property
    def spec(self) -> Any:
        if self._spec is None:
            for sentence in contradictions(self.manifest):
                raise EnsembleError(f"{self.path / MANIFEST} contradicts itself: {sentence}; draw the ensemble again")
            self._spec = read_spec(self.manifest.raw)
        return self._spec

    @property
    def digest(self) -> str:
        return self.manifest.digest

    def ranges(self) -> list[range]:
        found = dict.fromkeys((part.block.first_path, part.block.end_path) for part in self.manifest.parts)
        return [range(*ends) for ends in found]

    @property
    def cut_by_steps(self) -> bool:
        return any(part.block.steps != self.whole.steps for part in self.manifest.parts)

    def stored(
        self,
        first_path: int | None = None,
        end_path: int | None = None,
        names: Sequence[str] | None = None,
        steps: range | None = None,
        room: Room = new,
    ) -> Blocks:
        """See `Ensemble.stored`; `room` as of `parquet.read`."""
        first, end = self._range(first_path, end_path)
        stamps, layout = self.stamps, self.manifest.layout
        steps = range(self.whole.end_step) if steps is None else steps
        for part in self.manifest.parts:
            inside = part.block.end_path > first and part.block.first_path < end
            if inside and part.block.end_step > steps.start and part.block.first_step < steps.stop:
                yield from parquet.read(
                    self.path, part.file, part.block, layout, self.columns, stamps, first, end, names, room
                )


def nothing_at(folder: Folder) -> str:
    """Why there is no ensemble to read in a folder without a manifest, and where one may be meant."""
    path, made = folder.path, "expected a folder that procgen render has made"
    if (path / PLAN).exists():
        return f"{path} is an unfinished ensemble; go on with: procgen render SPEC -o {path} --resume (resume=True)"
    if not isinstance(path, Path):
        return f"{path} has no {MANIFEST}; {made}"
    if not path.exists():
        near = did_you_mean(path.name, _ensembles_in(path.parent))
        return f"there is no folder {path}; {made}{near and f'; {near}'}"
    inside = _ensembles_in(path)
    names = f"{', '.join(inside[:HANDFUL])}{', …' if len(inside) > HANDFUL else ''}"
    hint = f"; there are ensembles in it ({names}): give one of them, such as {path / inside[0]}" if inside else ""
    return f"{path} has no {MANIFEST}; {made}{hint}"


def _ensembles_in(path: Path) -> list[str]:
    """The names of the folders in a folder that are ensembles, such as variants."""
    with contextlib.suppress(OSError):
        return sorted(file.parent.name for file in path.glob(f"*/{MANIFEST}"))
    return []


def open_ensemble(path: str | Place) -> OnDisk:
    """The ensemble in a folder that `render` has finished; reads only its manifest, and checks no values.

    Values are read as the files have them; `check_digest` tells whether they are those that were drawn.

    Raises EnsembleError when there is none, when it was changed, when it is unfinished, when parts are missing,
    or when it was drawn with another stream version.
    """
    folder = Folder(folder_path(path, "path"))
    folder.refuse_file()
    data = folder.read_json(MANIFEST)
    if data is None:
        raise EnsembleError(nothing_at(folder))
    manifest = Manifest.read(data, str(folder.path / MANIFEST))
    refuse_changed(manifest, folder.path / MANIFEST)
    refuse_version(manifest.identity, path)
    for part in manifest.parts:
        files.refuse_missing(folder, part.file, manifest.layout, manifest.columns)
    return OnDisk(folder.path, manifest)
