"""The files of a part: written from batches of values, and what their footers say together."""

from __future__ import annotations

import contextlib
import os
import tempfile
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import asdict
from pathlib import Path
from typing import Any, Protocol

import numpy as np

from procgen.ensemble import parquet
from procgen.ensemble.columns import TYPES, Column
from procgen.ensemble.errors import EnsembleError, system_sentence
from procgen.ensemble.forms import form
from procgen.ensemble.layouts import Layout
from procgen.ensemble.parquet import PartWriter
from procgen.ensemble.places import Place
from procgen.ensemble.plan import PART_BYTES, Block
from procgen.ensemble.store import Folder


class Writer(Protocol):
    """Takes the batches of a part in row order; `nodes` are its digest nodes, set at the end."""

    nodes: dict[str, Any]

    def write(self, batch: Block, values: Mapping[str, np.ndarray]) -> None: ...


@contextlib.contextmanager
def writing(
    folder: Folder,
    name: str,
    part: Block,
    layout: Layout,
    columns: Sequence[Column],
    stamps: Any,
    identity: Mapping[str, Any],
) -> Iterator[Writer]:
    """The part of that name: its files appear, each whole, when the block ends well, and not at all otherwise."""
    said = {**identity, "part": asdict(part)}
    if layout.streams:
        with folder.writing(name) as temporary:
            with PartWriter(temporary, form(layout, columns, stamps, part), said) as writer:
                yield writer
        return
    with _gathered(folder, part, columns) as gathered:
        yield gathered
        for file, held in layout.files(name, columns).items():
            with folder.writing(file) as temporary:
                with PartWriter(temporary, form(layout, held, stamps, part, columns), said) as writer:
                    for group, unit in writer.form.pages(8 * len(columns)):
                        writer.page(group, unit, part, gathered.values)
                    writer.nodes = _of(gathered.nodes, held)


class Gathered:
    """All values of a part: in memory, or in a file without a name where the part is larger than most."""

    def __init__(self, part: Block, columns: Sequence[Column], room: Any = None):
        self.part, self.columns, self.room = part, columns, room
        self.values: dict[str, np.ndarray] = {}
        self.nodes: dict[str, Any] = {}

    def write(self, batch: Block, values: Mapping[str, np.ndarray]) -> None:
        if batch == self.part:
            self.values = dict(values)
            return
        if not self.values:
            self.values = self._arrays()
        for name, array in self.values.items():
            array[batch.within(self.part)] = values[name]

    def _arrays(self) -> dict[str, np.ndarray]:
        shape, found, offset = (self.part.paths, self.part.steps), {}, 0
        for column in self.columns:
            if self.room is None:
                found[column.name] = np.empty(shape, column.type)
            else:
                found[column.name] = np.memmap(self.room, column.type, "r+", offset, shape)
                offset += self.part.rows * TYPES[column.type]
        return found


@contextlib.contextmanager
def _gathered(folder: Folder, part: Block, columns: Sequence[Column]) -> Iterator[Gathered]:
    size = part.rows * sum(TYPES[column.type] for column in columns)
    if size <= 2 * PART_BYTES:
        yield Gathered(part, columns)
        return
    with scratch(folder.state, size) as file:
        yield Gathered(part, columns, file)


@contextlib.contextmanager
def scratch(folder: Place, size: int) -> Iterator[Any]:
    """An open file of that size in a folder, without a name, which is gone when it is closed."""
    with contextlib.ExitStack() as stack:
        try:
            file = stack.enter_context(tempfile.TemporaryFile(dir=folder if isinstance(folder, Path) else None))
            if hasattr(os, "posix_fallocate"):  # a full disk is said here; writing into a map could only crash
                os.posix_fallocate(file.fileno(), 0, size)
            else:
                file.truncate(size)
        except OSError as error:
            raise EnsembleError(system_sentence(error, f"making room in {folder}")) from None
        yield file


def _of(nodes: Mapping[str, Mapping[str, str]], columns: Sequence[Column]) -> dict[str, dict[str, str]]:
    """Those nodes that are of the columns of a file."""
    names = {column.name for column in columns}
    return {kind: {name: text for name, text in some.items() if name in names} for kind, some in nodes.items()}


def footers(
    folder: Folder, name: str, layout: Layout, columns: Sequence[Column]
) -> list[tuple[str, dict[str, Any], dict[str, Any]]]:
    """(file, identity, nodes) from the footers of all files of a part; EnsembleError when one is not of ours."""
    found = []
    for file in layout.files(name, columns):
        identity, nodes, _ = parquet.footer(folder.path / file)
        found.append((file, identity, nodes))
    return found


def together(nodes: Sequence[Mapping[str, Mapping[str, str]]]) -> dict[str, dict[str, str]]:
    """The nodes of a part from those in its files' footers."""
    kinds = ("stored", "drawn")
    return {kind: {name: text for some in nodes for name, text in some[kind].items()} for kind in kinds}


def missing(folder: Folder, name: str, layout: Layout, columns: Sequence[Column]) -> str | None:
    """The first file of a part that is not there."""
    return next((file for file in layout.files(name, columns) if folder.size(file) < 0), None)


def refuse_missing(folder: Folder, name: str, layout: Layout, columns: Sequence[Column]) -> None:
    """EnsembleError when a file of a part is not there."""
    file = missing(folder, name, layout, columns)
    if file is not None:
        raise EnsembleError(f"{folder.path / file} is missing; draw it again with --resume (resume=True)")
