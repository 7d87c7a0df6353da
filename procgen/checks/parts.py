"""The parts of an ensemble on disk, gathered in this process or in others: one range of paths is one task.

A task and its record are data for JSON, so that any engine can send them. A chain of parts, cut along the steps, is
gathered in order by one process, since the shocks of a step need what came before it.
"""

from __future__ import annotations

import base64
import contextlib
import json
import math
import secrets
import threading
from collections.abc import Callable, Iterator, Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.gather import Gather, Plan
from procgen.checks.lane import Outmost, Pass, get_ready, repays
from procgen.checks.rectangles import Blocks, Values, first_values, grouped, named
from procgen.ensemble import digest
from procgen.ensemble.ensemble import OnDisk, open_ensemble
from procgen.ensemble.errors import EnsembleError, Refused
from procgen.ensemble.manifest import node
from procgen.ensemble.places import address
from procgen.ensemble.plan import Block
from procgen.spec.records import dataclass

WORK = "procgen.checks.parts:gather_chain"

Tick = Callable[[int], None]


def tasks(
    ensemble: OnDisk,
    spec: Any,
    columns: Mapping[str, str],
    same_draws: bool,
    workers: int = 1,
    hands: Callable[[int], int] = lambda tasks: 1,
) -> list[dict[str, Any]]:
    """One task for each range of paths, in order; `columns` are the series of `spec` and where they stand.

    hands: how many threads each of so many tasks may have; with two, one reads while the other adds up.
    """
    out = address(ensemble.path)
    shared = {"out": out, "manifest": ensemble.digest, "raw": spec.raw, "columns": dict(columns)}
    shared["same_draws"] = same_draws
    chains: dict[tuple[int, int], list[int]] = {}
    for number, part in enumerate(ensemble.manifest.parts):
        chains.setdefault((part.block.first_path, part.block.end_path), []).append(number)
    shared["compile"] = repays(ensemble.whole.rows * len(columns) // min(workers, len(chains)))
    shared["ahead"] = hands(len(chains)) > 1
    run = secrets.token_hex(8)
    return [{"shared": shared, "parts": numbers, "run": run} for numbers in chains.values()]


def gather_chain(task: Mapping[str, Any], tick: Tick) -> list[dict[str, Any]]:
    """The record of one task: sums by range of paths, digest nodes by part, and what could not be read."""
    ensemble, plan = _context(task["shared"])
    chain = _Chain(ensemble, task["shared"]["columns"], task["parts"])
    ahead = task["shared"]["ahead"] and chain.hold_two()
    one = Pass(plan, tick, task["shared"]["compile"], _outmost(task["run"]))
    for first_path, first_step, values in _read_ahead(chain.blocks()) if ahead else chain.blocks():
        one.absorb(first_path, first_step, values)
    sums = [[first, end, Sums(some)] for first, (end, some) in one.tree.nodes.items()]
    return [{"sums": sums, "nodes": chain.nodes, "faults": chain.faults}]


def _read_ahead(blocks: Iterator[tuple[int, int, Values]]) -> Iterator[tuple[int, int, Values]]:
    """The same blocks, of which another thread reads the next one while one is worked on."""
    from concurrent.futures import ThreadPoolExecutor

    with ThreadPoolExecutor(1) as reader:
        coming = reader.submit(next, blocks, None)
        while (block := coming.result()) is not None:
            coming = reader.submit(next, blocks, None)
            yield block


@dataclass(frozen=True)
class Sums:
    """Sums in a record, for this process or to be packed for another."""

    gather: Gather

    def packed(self) -> tuple[dict[str, Any], bytes]:
        """Facts, among them names, kinds and shapes of all arrays, and the arrays one behind the other."""
        facts, arrays = self.gather.state()
        facts["arrays"] = [[name, values.dtype.str, list(values.shape)] for name, values in arrays.items()]
        return facts, b"".join([np.ascontiguousarray(values).data for values in arrays.values()])


def unpacked(plan: Plan, sums: Any) -> Gather:
    """The sums in a record of this process, or of another one, of which bytes may have come as text."""
    if isinstance(sums, Sums):
        return sums.gather
    facts, data = sums
    data = base64.b64decode(data) if isinstance(data, str) else data
    at, arrays = 0, {}
    for name, kind, shape in facts["arrays"]:
        arrays[name] = np.frombuffer(data, kind, math.prod(shape), at).reshape(shape)
        at += arrays[name].nbytes
    return Gather(plan).restore(facts, arrays)


_CONTEXTS: dict[str, tuple[OnDisk, Plan]] = {}
_OUTMOST: dict[str, Outmost] = {}
_making = threading.Lock()


def plan_for(task: Mapping[str, Any]) -> Plan:
    """The plan of a task; the last one is kept, and each process derives it for itself."""
    return _context(task["shared"])[1]


def prepared(task: Mapping[str, Any]) -> None:
    """Make the plan and load what tasks need, so that workers forked from this process have both."""
    get_ready(plan_for(task), task["shared"]["compile"])


def _outmost(run: str) -> Outmost:
    """The values and shocks farthest out that this process has seen in a run over the data, of whichever tasks."""
    with _making:
        if run not in _OUTMOST:
            _OUTMOST.clear()
            _OUTMOST[run] = Outmost()
        return _OUTMOST[run]


def _context(shared: Mapping[str, Any]) -> tuple[OnDisk, Plan]:
    with _making:
        key = json.dumps(shared)
        if key not in _CONTEXTS:
            _CONTEXTS.clear()
            _CONTEXTS[key] = _made(shared)
        return _CONTEXTS[key]


def _made(shared: Mapping[str, Any]) -> tuple[OnDisk, Plan]:
    from procgen.checks.planning import plan_of
    from procgen.ensemble.source import read_spec

    ensemble = open_ensemble(shared["out"])
    if ensemble.digest != shared["manifest"]:
        raise EnsembleError(f"{shared['out']} was drawn again while it was being read; validate it again")
    plan = plan_of(read_spec(shared["raw"]), ensemble.whole.steps, shared["same_draws"], ensemble.whole.paths)
    if plan.rounded:
        with contextlib.suppress(EnsembleError):  # what cannot be read is named when its part is gathered
            first = first_values(named(ensemble.blocks(), shared["columns"]), ensemble.whole)
            plan.look(first, ensemble.whole.first_path)
    return ensemble, plan


class _Chain:
    """Reads the parts of one range of paths; their digests are made on the way."""

    def __init__(self, ensemble: OnDisk, columns: Mapping[str, str], numbers: list[int]):
        self.ensemble, self.columns = ensemble, columns
        self.held, self.pieces_read, self.parts_read = 1, 0, 0
        self.parts = {number: ensemble.manifest.parts[number] for number in numbers}
        self.nodes: list[tuple[int, dict[str, str]]] = []  # number of a part, packed nodes by column
        self.faults: list[tuple[str, str]] = []  # where, and what
        self._room: dict[tuple[str, str, int], NDArray] = {}

    def hold_two(self) -> bool:
        """Whether the last two blocks can be in memory; blocks that are cut anew share what they were cut from."""
        if len(self.parts) > 1 or next(iter(self.parts.values())).block.paths == 1:
            self.held = 2
        return self.held == 2

    def blocks(self) -> Iterator[tuple[int, int, Values]]:
        """Blocks of whole lane groups; where a part cannot be read it ends, with a fault."""
        part = next(iter(self.parts.values()))
        pieces = self.ensemble.stored(part.block.first_path, part.block.end_path, room=self._bytes)
        try:
            for number, part in self.parts.items():
                yield from self._in_step(self._pieces(number, part.block, pieces), part.block)
            self.pieces_read += 1
            next(pieces, None)  # what comes after the last row is looked at, too
        except Refused:
            raise
        except EnsembleError as error:
            self.faults.append((str(part.block), str(error)))

    def _in_step(self, blocks: Blocks, part: Block) -> Blocks:
        """Blocks of a part cut anew so that those of the same paths come in the order of their steps."""
        if part.paths == 1:
            return blocks
        # Parts that follow each other must be cut at the same paths, hence each is handed on whole.
        return grouped(blocks, part) if len(self.parts) == 1 else [self._whole(blocks, part)]

    def _pieces(self, number: int, part: Block, pieces: Iterator[Any]) -> Iterator[tuple[int, int, Values]]:
        leaves = {name: digest.Leaves(part) for name in self.ensemble.names}
        left = part.rows
        while left:
            self.pieces_read += 1
            block, values = next(pieces)
            left -= block.rows
            numbers = {name: self._as_float(name, values[name]) for name in leaves}
            for name, leaf in leaves.items():
                leaf.add(block.first_path, block.first_step, numbers[name])
            yield block.first_path, block.first_step, {name: numbers[column] for name, column in self.columns.items()}
        whole = self.ensemble.manifest.whole
        self.nodes.append((number, {name: digest.pack(leaf.nodes(whole)) for name, leaf in leaves.items()}))

    def _as_float(self, name: str, values: NDArray) -> NDArray:
        """Stored values as float64, in the same memory for each piece: among what else is asked for it would grow."""
        if values.dtype == np.float64:
            return values
        numbers = self._kept("piece", name, values.shape)
        numbers[...] = values
        return numbers

    def _whole(self, blocks: Blocks, part: Block) -> tuple[int, int, Values]:
        """A part in one piece, in the memory of one before, which has been taken in."""
        self.parts_read += 1
        out: dict[str, NDArray] = {}
        for first_path, first_step, values in blocks:
            for name, numbers in values.items():
                path, step = first_path - part.first_path, first_step - part.first_step
                rows = out[name] if name in out else self._kept("part", name, (part.paths, part.steps))
                rows[path : path + len(numbers), step : step + numbers.shape[1]] = numbers
                out[name] = rows
        return part.first_path, part.first_step, out

    def _bytes(self, name: str, size: int) -> NDArray[np.uint8]:
        return self._kept("stored", name, (-(-size // 8),)).view(np.uint8)[:size]

    def _kept(self, kind: str, name: str, shape: tuple[int, ...]) -> NDArray:
        """An array whose memory is that of one of its kind and name that is no more held, if it is large enough."""
        turn = (self.parts_read if kind == "part" else self.pieces_read) % self.held
        key, size = (kind, name, turn), math.prod(shape)
        if key not in self._room or self._room[key].size < size:
            self._room[key] = np.empty(size)
        return self._room[key][:size].reshape(shape)


def is_whole(ensemble: OnDisk, nodes: Mapping[int, Mapping[str, str]]) -> bool:
    """Whether the digests of all values are those that the manifest records; nodes packed, by part and column."""
    manifest = ensemble.manifest
    if len(nodes) < len(manifest.parts) or any(node(nodes[k]) != part.node for k, part in enumerate(manifest.parts)):
        return False
    roots = {**manifest.stored, **manifest.revealed}
    return all(
        digest.root(
            [(p.block, digest.unpack(nodes[k][name], p.block, manifest.whole)) for k, p in enumerate(manifest.parts)],
            manifest.whole,
        )
        == recorded
        for name, recorded in roots.items()
    )
