"""What is in OUT already: a finished ensemble, an unfinished one, another one, other people's files."""

from __future__ import annotations

import contextlib
from collections.abc import Container, Iterator, Mapping, Sequence
from dataclasses import asdict
from itertools import groupby
from typing import TYPE_CHECKING, Any

from procgen.ensemble import files, parquet, revealed
from procgen.ensemble.columns import Column
from procgen.ensemble.engines import Progress
from procgen.ensemble.errors import Damaged, EnsembleError, Refused
from procgen.ensemble.layouts import Layout
from procgen.ensemble.manifest import Manifest, PartRecord, covers
from procgen.ensemble.plan import Block, Chain
from procgen.ensemble.seal import refuse_changed
from procgen.ensemble.source import FACTORY
from procgen.ensemble.store import MANIFEST, PLAN, Folder

if TYPE_CHECKING:
    from procgen.ensemble.check import Damage


class Present:
    """What a folder holds, seen by a render of `columns` and `whole` that `identity` names."""

    def __init__(
        self,
        folder: Folder,
        whole: Block,
        identity: Mapping[str, Any],
        columns: Sequence[Column],
        factory: str = FACTORY,
    ):
        self.folder, self.whole, self.identity, self.factory = folder, whole, identity, factory
        self.columns, self.layout = columns, Layout.of(identity)
        self.damaged: set[str] = set()  # names of parts that `complete` found to be so

    def complete(self, resume: bool, progress: Progress | None = None) -> Manifest | None:
        """The manifest when all is there, None when there is something to draw.

        With `resume` the values of all parts are held against their digests; else those of parts whose size is
        another, since other bytes may hold the same values. Raises EnsembleError when it is another ensemble, or
        something is missing, damaged or changed and `resume` is not asked for.
        """
        found = self._manifest()
        if found is None:
            return None
        if not resume:
            refuse_changed(found, self.folder.path / MANIFEST)
        if not found.changed:  # else the parts say what they are
            self._refuse_other(found.identity)
        sizes = {part: self.folder.sizes([*found.layout.files(part.file, found.columns)]) for part in found.parts}
        suspects = [part for part, size in sizes.items() if resume or size != part.bytes]
        damages = self._damages(found, suspects, progress) if suspects else []
        if damages and not resume:
            mend = "" if "resume=True" in damages[0].sentence else "; draw it again with --resume (resume=True)"
            raise EnsembleError(f"{self.folder.path / damages[0].file}: {damages[0].sentence}{mend}")
        self.damaged = {damage.file for damage in damages}
        return None if damages or found.changed else found

    def _damages(self, found: Manifest, suspects: list[PartRecord], progress: Progress | None) -> list[Damage]:
        from procgen.ensemble.check import Reader

        return Reader(self.folder.path, found, self.factory).examine(progress, suspects)[0]

    def refuse(self, resume: bool) -> None:
        """EnsembleError when another ensemble is there, or an unfinished one without `resume`."""
        found = self._manifest()
        if found is None:
            self.chains(resume)
        elif not found.changed:
            self._refuse_other(found.identity)

    def chains(self, resume: bool) -> tuple[Chain, ...] | None:
        """The chains of the render that is there, None when there is none; they are kept when it goes on."""
        found = self._manifest()
        if found is not None and found.whole == self.whole:
            return _chains([part.block for part in found.parts])
        plan = self._json(PLAN)
        if plan is None:
            return None
        self._refuse_other(plan.get("identity", {}))
        if not resume:
            raise EnsembleError(
                f"{self.folder.path} holds an unfinished render of this spec; "
                "go on with --resume (resume=True), or begin again with --overwrite (overwrite=True)"
            )
        try:
            blocks = [Block(*map(int, numbers)) for numbers in plan["parts"]]
            covers(blocks, self.whole)
        except (KeyError, TypeError, ValueError):
            raise EnsembleError(
                f"{self.folder.path / PLAN} is damaged; begin again with --overwrite (overwrite=True)"
            ) from None
        return _chains(blocks)

    def write_plan(self, chains: Sequence[Chain], columns: Sequence[Column]) -> None:
        parts = [part for chain in chains for part in chain]
        blocks = [(part.first_path, part.paths, part.first_step, part.steps) for part in parts]
        names = [file for part in parts for file in self._files(part)]
        types = {column.name: column.type for column in columns}
        self.folder.write_json(PLAN, {"identity": self.identity, "types": types, "files": names, "parts": blocks})
        self.folder.begun = True

    def types(self) -> dict[str, str]:
        """The types of the columns that are there, by name; {} when nothing is."""
        found, plan = self._manifest(), self._json(PLAN)
        if found is not None:
            return {column.name: column.type for column in found.columns}
        if plan is None:
            return {}
        return plan.get("types", {column.name: "float64" for column in self.columns})  # what all were, untold

    def records(self, chains: Sequence[Chain]) -> dict[Block, dict[str, Any]]:
        """Records of the parts that are there, whole, and of this render."""
        found: dict[Block, dict[str, Any]] = {}
        there, listed = set(self.folder.part_files()), self._listed()
        for part in (part for chain in chains for part in chain):
            if part.file(self.whole) in self.damaged:  # drawn again, whatever it says of itself
                continue
            footers = [self._footer(file, listed) for file in self._files(part) if file in there]
            mine = [nodes for said, nodes in filter(None, footers) if said.get("part") == asdict(part)]
            if len(mine) == len(self._files(part)):
                size = self.folder.sizes(self._files(part))
                found[part] = {"part": asdict(part), "bytes": size, "nodes": files.together(mine)}
        return found

    def _files(self, part: Block) -> list[str]:
        return [*self.layout.files(part.file(self.whole), self.columns)]

    def _footer(self, file: str, listed: set[str]) -> tuple[dict[str, Any], dict[str, Any]] | None:
        """What a file says of itself; None when it is ours and damaged, so that it is drawn again."""
        try:
            identity, nodes, _ = parquet.footer(self.folder.path / file)
        except Refused:
            raise
        except EnsembleError as error:
            if file in listed:
                return None
            raise EnsembleError(f"{error}; it is in the way and not ours: move it away") from None
        self._refuse_other(identity)
        return identity, nodes

    def refuse_strays(self, plan: Sequence[Chain]) -> None:
        """EnsembleError for Parquet files in OUT that are none of the plan's: readers of a folder would mix them in."""
        planned = {file for chain in plan for part in chain for file in self._files(part)}
        self.refuse_foreign(planned)
        old = [name for name in self._ours() if name not in planned]
        self._refuse_beside(old, "of another ensemble", "remove what is there with --overwrite (overwrite=True)")

    def refuse_foreign(self, planned: Container[str] = ()) -> None:
        """EnsembleError for Parquet files in OUT that are neither planned nor ours to remove."""
        ours = self._ours()
        others = [name for name in self.folder.tables() if name not in planned and name not in ours]
        found = [name for name in others if parquet.is_parquet(self.folder.path / name)]
        self._refuse_beside(found, "not ours", "move away what is not ours")

    def _refuse_beside(self, names: Sequence[str], whose: str, mend: str) -> None:
        if names:
            named = ", ".join(names[:3]) + (f" and {len(names) - 3} more" if len(names) > 3 else "")
            raise EnsembleError(
                f"{self.folder.path} holds {named}, {whose}, which would be read among the parts of this one; choose "
                f"another OUT, or {mend}"
            )

    def remove(self) -> None:
        """Remove the ensemble that is there: files that it lists or that say that they are ours."""
        self.folder.remove([MANIFEST, *self._ours()])
        revealed.remove(self.folder)
        self.folder.clean_state(keep_plan=False)

    def _ours(self) -> list[str]:
        listed = self._listed()
        return [name for name in self.folder.part_files() if name in listed or self._is_ours(name)]

    def _manifest(self) -> Manifest | None:
        data = self._json(MANIFEST)
        with _mended():
            return None if data is None else Manifest.read(data, str(self.folder.path / MANIFEST))

    def _json(self, name: str) -> dict[str, Any] | None:
        with _mended():
            return self.folder.read_json(name)

    def _listed(self) -> set[str]:
        """Names of parts that the manifest or the plan in the folder lists, which makes them ours."""
        found = self._manifest()
        mine = set()
        if found is not None:
            mine = {file for part in found.parts for file in found.layout.files(part.file, found.columns)}
        return mine | set((self._json(PLAN) or {}).get("files", ()))

    def _is_ours(self, name: str) -> bool:
        try:
            parquet.footer(self.folder.path / name)
        except Refused:
            raise
        except EnsembleError:
            return False
        return True

    def _refuse_other(self, identity: Mapping[str, Any]) -> None:
        names = {"spec": "spec (its digest)"}
        keys = [*self.identity, *(key for key in identity if key not in self.identity and key != "part")]
        differ = [key for key in keys if identity.get(key) != self.identity.get(key)]
        told = differ == ["spec"] and self.folder.size(MANIFEST) >= 0
        command = f"; procgen difference {self.folder.path} SPEC tells what differs" if told else ""
        if len(differ) > 1 and "spec" in differ:
            differ.remove("spec")  # it holds seed, paths and steps too, which are easier to read
        if differ:
            pairs = [(names.get(k, k), identity.get(k, "as usual"), self.identity.get(k, "as usual")) for k in differ]
            found = ", ".join(f"{name} {there} there, {asked} asked" for name, there, asked in pairs)
            raise EnsembleError(
                f"{self.folder.path} holds an ensemble of another kind ({found}); "
                f"choose another OUT, or remove that one with --overwrite (overwrite=True){command}"
            )


@contextlib.contextmanager
def _mended() -> Iterator[None]:
    """Has what is damaged say what may be done, since it may be somebody else's and is not removed."""
    try:
        yield
    except Damaged as error:
        raise EnsembleError(
            f"{error}; choose another OUT, or, if it is ours, remove it and render again with --overwrite "
            "(overwrite=True)"
        ) from None


def _chains(blocks: Sequence[Block]) -> tuple[Chain, ...]:
    return tuple(tuple(chain) for _, chain in groupby(blocks, key=lambda block: block.first_path))
