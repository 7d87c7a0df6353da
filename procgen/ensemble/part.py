"""Rendering one chain of parts: draw, round, digest and write in one pass.

`render_chain` is a plain function of a Task, which is made of numbers and text only, so any engine can run
it anywhere. Running it twice, even at once, gives the same files.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import asdict, field
from functools import partial
from typing import Any

import numpy as np

from procgen.chance import kernel
from procgen.ensemble import digest
from procgen.ensemble.columns import Column, as_kept, store
from procgen.ensemble.draw import Drawer, Tick, empty, together
from procgen.ensemble.files import writing
from procgen.ensemble.layouts import Layout
from procgen.ensemble.places import place_of
from procgen.ensemble.plan import Block, Chain, batches, narrow_steps
from procgen.ensemble.source import FACTORY, Source, open_source
from procgen.ensemble.store import Folder
from procgen.spec.records import dataclass
from procgen.terms.hands import at_hand, behind, done, each, hands


@dataclass(frozen=True)
class Task:
    """One chain to draw: everything a worker must know, as plain data."""

    raw: Mapping[str, Any]
    identity: Mapping[str, Any]
    out: str
    whole: Block
    chain: Chain
    start: int = 0  # parts before this one are there already
    reveal: tuple[str, ...] = ()
    factory: str = FACTORY
    types: Mapping[str, str] = field(default_factory=dict)  # of the columns that are there already, by name
    share: int = 0  # values that a process may expect to draw, of all tasks
    hands: int = 1  # threads that this chain may take

    def json(self) -> dict[str, Any]:
        """The task as data; what tasks have in common is shared, not copied."""
        chain = [asdict(part) for part in self.chain]
        return {**vars(self), "whole": asdict(self.whole), "chain": chain}

    @classmethod
    def read(cls, data: Mapping[str, Any]) -> Task:
        blocks = tuple(Block(**block) for block in data["chain"])
        whole, reveal = Block(**data["whole"]), tuple(data["reveal"])
        return cls(**(dict(data) | {"whole": whole, "chain": blocks, "reveal": reveal}))


def row_bytes(columns: list[Column]) -> int:
    """Bytes of one row in the buffers."""
    return 8 * len(columns)


WORK = "procgen.ensemble.part:draw"


def draw(task: Mapping[str, Any], tick: Tick) -> list[dict[str, Any]]:
    """`render_chain` of a task as data."""
    return render_chain(Task.read(task), tick)


def get_ready() -> None:
    """Import what drawing a part imports, and find where compiled kernels are kept, before workers are forked."""
    import pyarrow.parquet  # noqa: F401

    import procgen.terms.by_path  # noqa: F401

    kernel.cache_folder()


def render_chain(task: Task, tick: Tick = lambda rows: None) -> list[dict[str, Any]]:
    """Draw and write the parts of a chain from `task.start` on; their records for the manifest."""
    source = open_source(task.raw, task.reveal, task.factory)
    folder = Folder(place_of(task.out))
    narrow = narrow_steps(task.chain, row_bytes(source.columns), source.depth)
    drawer = Drawer(source, tick, narrow, task.share)
    records = []
    with hands(task.hands if drawer.compile else 1):  # what the interpreter does goes one by one
        for number in range(_take_up(task, folder, drawer), len(task.chain)):
            if number < task.start:
                _pass_over(task, task.chain[number], source, drawer)
                continue
            records.append(_render_part(task, task.chain[number], source, drawer, folder))
            if number:
                folder.drop_state(task.chain[number - 1].file(task.whole))
    return records


def _take_up(task: Task, folder: Folder, drawer: Drawer) -> int:
    """Restore the state after the last part that is there; the number of parts that need not be drawn."""
    if task.start == 0:
        return 0
    last = task.chain[task.start - 1]
    state = folder.load_state(last.file(task.whole))
    if state is None:
        return 0
    drawer.restore(last.end_step, state)
    return task.start


def _pass_over(task: Task, part: Block, source: Source, drawer: Drawer) -> None:
    """Draw a part that is there already, for the state at its end."""
    columns = source.columns
    for batch in batches(part, row_bytes(columns), task.chain[0].steps):
        drawer.fill(batch, empty(batch, columns))


def _render_part(task: Task, part: Block, source: Source, drawer: Drawer, folder: Folder) -> dict[str, Any]:
    name, layout = part.file(task.whole), Layout.of(task.identity)
    columns = as_kept(source.columns, task.types)
    last = part.end_step == task.whole.end_step
    digests = Digests(part, columns)
    two = part.paths == 1 and at_hand() > 1  # buffers: one is written while the other is drawn into
    buffers: dict[str, np.ndarray] = {}
    other: dict[str, np.ndarray] = {}
    with writing(folder, name, part, layout, columns, source.stamps, task.identity) as writer, behind() as later:
        for batch in batches(part, row_bytes(columns) << two, task.chain[0].steps):
            if two:
                buffers, other = other, buffers
            if not buffers or buffers[columns[0].name].shape != (batch.paths, batch.steps):
                buffers = together(batch, columns)
            drawer.fill(batch, buffers)
            with kernel.compiling(drawer.compile or kernel.is_compiling()):
                kept = each(done, [partial(store, buffers[column.name], column) for column in columns])
            stored = {column.name: values for column, values in zip(columns, kept, strict=True)}
            later.begin(partial(writer.write, batch, stored))
            each(done, digests.adding(batch, buffers, stored))
            if not two:
                later.end()
            if last and batch.end_step == part.end_step:
                drawer.forget(batch)
        writer.nodes = digests.packed(task.whole)
        if not last:
            folder.save_state(name, drawer.state())
    size = folder.sizes([*layout.files(name, columns)])
    return {"part": asdict(part), "bytes": size, "nodes": writer.nodes}


class Digests:
    """The digests of all columns of a part, drawn and stored."""

    def __init__(self, part: Block, columns: list[Column]):
        self.columns = columns
        self.stored = {column.name: digest.Leaves(part) for column in columns}
        self.drawn = {column.name: digest.Leaves(part) for column in columns if not column.exact}

    def adding(
        self, batch: Block, drawn: Mapping[str, np.ndarray], stored: Mapping[str, np.ndarray]
    ) -> list[Callable[[], None]]:
        """What is to be done with a batch, column by column, in any order."""
        first = batch.first_path, batch.first_step
        to_do = [*((each, stored[name]) for name, each in self.stored.items())]
        to_do += [(each, drawn[name]) for name, each in self.drawn.items()]
        return [partial(leaves.add, *first, values) for leaves, values in to_do]

    def packed(self, whole: Block) -> dict[str, dict[str, str]]:
        """Nodes as hex by column; `drawn` is given only where it differs from `stored`."""

        def pack(leaves: Mapping[str, digest.Leaves]) -> dict[str, str]:
            return {name: digest.pack(each.nodes(whole)) for name, each in leaves.items()}

        return {"stored": pack(self.stored), "drawn": pack(self.drawn)}
