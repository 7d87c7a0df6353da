"""Are the values still those that were drawn? Digests again from the files, and values drawn again."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import field
from pathlib import Path

import numpy as np

from procgen.chance.streams import STREAM_VERSION
from procgen.ensemble import digest, files, parquet
from procgen.ensemble.columns import store
from procgen.ensemble.draw import Drawer, empty
from procgen.ensemble.ensemble import Blocks, Ensemble, OnDisk, nothing_at
from procgen.ensemble.errors import MEND, EnsembleError, Refused
from procgen.ensemble.expected import departure
from procgen.ensemble.expected import expected as read_expected
from procgen.ensemble.manifest import Manifest, PartRecord, node
from procgen.ensemble.places import Place
from procgen.ensemble.plan import Block
from procgen.ensemble.seal import contradictions, other_than_part, refuse_version
from procgen.ensemble.source import FACTORY, open_source, read_spec
from procgen.ensemble.store import MANIFEST, Folder, folder_path
from procgen.spec.records import dataclass

PLACES = 16  # ranges of paths that are drawn again when all would be too many
ROWS = 4_000_000  # rows that are drawn again

Tick = Callable[[int, int], None]


@dataclass(frozen=True)
class Damage:
    """A part whose values are not those that were written; `series` and `area` where they are known."""

    file: str
    sentence: str
    series: str | None = None
    area: Block | None = None

    def __str__(self) -> str:
        return self.sentence if self.file in self.sentence else f"{self.file}: {self.sentence}"


@dataclass(frozen=True)
class Difference:
    """The first value, by path and step, that is not what its address draws."""

    series: str
    path: int
    step: int
    stored: float
    drawn: float

    def __str__(self) -> str:
        return (
            f"series {self.series}, path {self.path}, step {self.step}: "
            f"{self.stored!r} in the file, {self.drawn!r} when drawn again"
        )


@dataclass(frozen=True)
class DigestResult:
    """What `check_digest` found. `digest` is recomputed, None when some part could not be read."""

    path: str
    digest: str | None
    recorded: str
    expected: str | None = None
    series: Mapping[str, str] = field(default_factory=dict)
    damages: tuple[Damage, ...] = ()
    redrawn: tuple[Block, ...] = ()
    difference: Difference | None = None
    departure: str = ""  # where the ensemble is not the one expected, and why

    @property
    def ok(self) -> bool:
        """Whether the files hold what the manifest records, what was expected, and what is drawn again."""
        as_expected = self.expected in (None, self.digest)
        return not self.damages and self.digest == self.recorded and as_expected and self.difference is None

    def __str__(self) -> str:
        return self.text()

    def text(self) -> str:
        """The result in a few lines."""
        lines = [str(damage) for damage in self.damages]
        if any("other values" in damage.sentence for damage in self.damages) and not self.redrawn:
            lines.append("to see where: --redraw (redraw=True) names the first value that differs")
        if self.damages:
            lines.append(MEND)
        if self.digest is not None:
            verdict = "as recorded" if self.digest == self.recorded else f"recorded was {self.recorded}"
            lines.append(f"{self.digest}  {verdict}")
        if self.expected is not None and self.digest is None:
            lines.append(f"expected {self.expected}: what there is has no digest, since not all of it can be read")
        elif self.expected is not None:
            same = self.expected == self.digest
            lines.append("as expected" if same else self.departure or f"expected {self.expected}: other values")
        if self.difference is not None:
            lines.append(f"first difference: {self.difference}")
        elif self.redrawn and self.digest is None:
            lines.append("drawn again, and nothing to compare with: what is damaged cannot be read")
        elif self.redrawn:
            paths = sum(block.paths for block in self.redrawn)
            lines.append(f"drawn again: {paths} paths, all the same bits")
        if self.damages and self.difference is None and self.digest is not None:
            names = dict.fromkeys(damage.series or damage.file for damage in self.damages)
            lines.append(f"not in order: {', '.join(names)}, as said above")
        return "\n".join(lines)


def check_digest(
    path: str | Path | Ensemble,
    expect: str | Path | None = None,
    redraw: bool = False,
    *,
    progress: Tick | None = None,
    factory: str = FACTORY,
) -> DigestResult:
    """Digests of the ensemble in `path`, recomputed from its files part by part.

    Parameters
    ----------
    path : folder that `render` has finished, or the ensemble that is in it.
    expect : 64 hex digits that the ensemble's digest should be; or an old manifest.json, or the folder of an old
        ensemble, whose digest it should be: then the first value that differs is named, and what may have moved it.
    redraw : draw values again as well: those of damaged parts, or else of paths spread over the range (all of
        them up to 4 million rows), and name the first that differs.
    progress : called with (rows read, rows in all).

    Raises EnsembleError when there is no manifest to compare with, or `expect` is no digest.
    """
    wanted = None if expect is None else read_expected(expect)
    folder = Folder(_home(path) if isinstance(path, Ensemble) else folder_path(path, "path"))
    folder.refuse_file()
    path = str(folder.path)
    data = folder.read_json(MANIFEST)
    if data is None:
        raise EnsembleError(nothing_at(folder))
    manifest = Manifest.read(data, str(folder.path / MANIFEST))
    reader = Reader(folder.path, manifest, factory)
    damages, found = reader.examine(progress)
    false = reader.false_statements()
    if not false and not damages:
        refuse_version(manifest.identity, path)
    roots = None
    if found is not None:
        names = [column.name for column in manifest.columns]
        roots = {name: digest.root([(b, n[name]) for b, n in found], manifest.whole) for name in names}
        damages += _root_damages(manifest, roots, damages)
    damages = [*(Damage(MANIFEST, sentence) for sentence in false), *damages]
    # another spec or stream version than the one that was drawn would draw other values
    same = not false and manifest.identity.get("stream_version") == STREAM_VERSION
    places = reader.places(damages) if redraw and same else []
    return DigestResult(
        path=path,
        digest=None if roots is None else digest.total({name: roots[name] for name in manifest.stored}),
        recorded=manifest.digest,
        expected=None if wanted is None else wanted.digest,
        series={} if roots is None else roots,
        damages=tuple(damages),
        redrawn=tuple(places),
        difference=reader.first_difference(places),
        departure=departure(OnDisk(folder.path, manifest), wanted, progress) if wanted and not damages else "",
    )


def _home(ensemble: Ensemble) -> Place:
    if not isinstance(ensemble, OnDisk):
        raise EnsembleError(
            "the ensemble is in memory and has no files to check; .digest is that of its values, and out= writes files"
        )
    return ensemble.path


def _root_damages(manifest: Manifest, roots: Mapping[str, str], damages: list[Damage]) -> list[Damage]:
    recorded = {**manifest.stored, **manifest.revealed}
    wrong = [name for name in recorded if roots[name] != recorded[name]]
    if damages or not wrong:
        return []
    return [Damage(MANIFEST, f"its digest of {wrong[0]} is not the one of the parts", wrong[0])]


class Reader:
    """Reads and draws the parts of one ensemble."""

    def __init__(self, path: Place, manifest: Manifest, factory: str):
        self.path, self.manifest, self.factory = path, manifest, factory
        self.columns = manifest.columns
        self.others: list[str] = []  # what the first part that was read says otherwise than the manifest
        self.contradictions = contradictions(manifest, factory)
        stamped = manifest.time is not None and not self.contradictions
        self.stamps = read_spec(manifest.raw).time.stamps if stamped else None

    def false_statements(self) -> list[str]:
        """Sentences on what in the manifest is not as it was written, after `examine`."""
        changed = self.manifest.changed
        found = [f"it was changed after it was written: {', '.join(changed)}"] if changed else []
        return found + self.contradictions + (self.others if changed else [])

    def examine(
        self, progress: Tick | None, parts: Sequence[PartRecord] | None = None
    ) -> tuple[list[Damage], list[tuple[Block, dict]] | None]:
        """Damages, and the recomputed digest nodes of all parts (None when one cannot be read)."""
        damages, found, rows = [], [], 0
        for part in self.manifest.parts if parts is None else parts:
            try:
                nodes = self._nodes(part)
                damages += self._compare(part, nodes)
                found.append((part.block, nodes))
            except Refused:
                raise
            except EnsembleError as error:
                damages += [Damage(part.file, str(error)), *self._identity(part)]
            rows += part.block.rows
            if progress is not None:
                progress(rows, self.manifest.whole.rows)
        return damages, found if len(found) == len(self.manifest.parts) else None

    def _nodes(self, part: PartRecord) -> dict[str, dict[digest.Key, bytes]]:
        leaves = {column.name: digest.Leaves(part.block) for column in self.columns}
        for block, values in self._read(part):
            for name, each in leaves.items():
                each.add(block.first_path, block.first_step, values[name])
        return {name: each.nodes(self.manifest.whole) for name, each in leaves.items()}

    def _read(self, part: PartRecord, first: int = 0, end: int | None = None) -> Blocks:
        file = files.missing(Folder(self.path), part.file, self.manifest.layout, self.columns)
        if file is not None:
            what = "the part" if file == part.file else file
            raise EnsembleError(f"{what} is missing; draw it again with --resume (resume=True)")
        layout = self.manifest.layout
        yield from parquet.read(self.path, part.file, part.block, layout, self.columns, self.stamps, first, end)

    def _compare(self, part: PartRecord, nodes: Mapping[str, Mapping[digest.Key, bytes]]) -> list[Damage]:
        """The first series and rectangle whose values are not those that were written, and whose else they may be."""
        mine = {name: digest.pack(each) for name, each in nodes.items()}
        if node(mine) == part.node:
            return self._identity(part)
        written = self._written(part)
        for name in written:
            theirs = digest.unpack(written[name], part.block, self.manifest.whole)
            for key in sorted(theirs):
                if nodes[name][key] != theirs[key]:
                    area = digest.area(key, part.block, self.manifest.whole)
                    return [Damage(part.file, f"series {name} has other values in {area}", name, area)]
        return [Damage(part.file, "it has other values than the manifest says"), *self._identity(part)]

    def _identity(self, part: PartRecord) -> list[Damage]:
        """Whether a part says that it is of another ensemble; of a manifest that was changed, that is its fault."""
        for name in dict.fromkeys([*self.manifest.layout.files(part.file, self.columns), part.file]):
            try:
                said = parquet.footer(self.path / name)[0]
            except Refused:
                raise
            except EnsembleError:  # not there, or written again by another program with the same values
                continue
            found = other_than_part(self.manifest.identity, said)
            if found:
                self.others = self.others or found
                return [] if self.manifest.changed else [Damage(part.file, sentence) for sentence in found[:1]]
        return []

    def _written(self, part: PartRecord) -> Mapping[str, str]:
        """The nodes in the part's own footers, nothing when they are not the ones the manifest was made of."""
        try:
            found = files.footers(Folder(self.path), part.file, self.manifest.layout, self.columns)
            stored = files.together([nodes for _, _, nodes in found])["stored"]
            return stored if node(stored) == part.node else {}
        except Refused:
            raise
        except (EnsembleError, KeyError, TypeError, AttributeError):
            return {}

    # drawing again

    def places(self, damages: list[Damage]) -> list[Block]:
        """Ranges of paths, each within one chain, to draw again."""
        whole = self.manifest.whole
        ranges = sorted({(p.block.first_path, p.block.end_path) for p in self.manifest.parts})
        damaged = {damage.file for damage in damages}
        bad = {p.block.first_path for p in self.manifest.parts if p.file in damaged}
        areas = [damage.area for damage in damages if damage.area is not None]
        if areas:
            wanted = [(areas[0].first_path, areas[0].end_path)]
        elif bad:
            wanted = [(a, b) for a, b in ranges if a in bad][:1]
        elif whole.rows <= ROWS:
            wanted = ranges
        else:
            wanted = list(_spread(whole, max(ROWS // PLACES // whole.steps, 1)))
        cut = [(max(a, c), min(b, d)) for a, b in wanted for c, d in ranges if max(a, c) < min(b, d)]
        return [Block(a, b - a, 0, whole.steps) for a, b in cut]

    def first_difference(self, places: list[Block]) -> Difference | None:
        """The first value, place by place, that is not the one its address draws."""
        if not places:
            return None
        source = open_source(self.manifest.raw, self.manifest.identity.get("reveal", ()), self.factory)
        for place in places:
            drawer = Drawer(source)
            for part in self.manifest.parts:
                if part.block.first_path <= place.first_path < part.block.end_path:
                    rows = Block(place.first_path, place.paths, part.block.first_step, part.block.steps)
                    difference = self._differs(part, rows, drawer)
                    if difference is not None:
                        return difference
        return None

    def _differs(self, part: PartRecord, rows: Block, drawer: Drawer) -> Difference | None:
        drawn = empty(rows, list(self.columns))
        drawer.fill(rows, drawn)
        kept = {column.name: store(drawn[column.name], column) for column in self.columns}
        try:
            for block, values in self._read(part, rows.first_path, rows.end_path):
                found = self._first(block, values, rows, kept)
                if found is not None:
                    return found
        except Refused:
            raise
        except EnsembleError:
            pass  # unreadable from here on; `examine` has said so
        return None

    def _first(self, block: Block, values: dict, rows: Block, kept: dict) -> Difference | None:
        a, b = max(block.first_path, rows.first_path), min(block.end_path, rows.end_path)
        steps = slice(block.first_step - rows.first_step, block.end_step - rows.first_step)
        found = []
        for column in self.columns:
            here = values[column.name][a - block.first_path : b - block.first_path]
            mine = kept[column.name][a - rows.first_path : b - rows.first_path, steps]
            for i, j in _unequal(here, mine):
                value = float(here[i, j]), float(mine[i, j])
                found.append(Difference(column.name, a + int(i), block.first_step + int(j), *value))
        return min(found, key=lambda item: (item.path, item.step), default=None)


def _unequal(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    """The first place where bits differ, as an array of at most one (row, column)."""
    bits = np.dtype(f"u{a.dtype.itemsize}")
    return np.argwhere(np.ascontiguousarray(a).view(bits) != np.ascontiguousarray(b).view(bits))[:1]


def _spread(whole: Block, width: int) -> Iterator[tuple[int, int]]:
    """PLACES ranges of `width` paths, the first and the last of the ensemble among them."""
    count = min(PLACES, -(-whole.paths // width))
    for k in range(count):
        first = whole.first_path + (whole.paths - width) * k // max(count - 1, 1)
        yield first, first + width
