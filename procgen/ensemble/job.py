"""From a spec to an ensemble: what must be drawn, who draws it, and the manifest."""

from __future__ import annotations

import shutil
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from procgen.chance import kernel
from procgen.chance.streams import STREAM_VERSION
from procgen.ensemble import engines, manifest, revealed
from procgen.ensemble.columns import TYPES, as_kept, store
from procgen.ensemble.draw import Drawer, Tick, empty, repays
from procgen.ensemble.engines import Engine, Progress, Work, default_workers
from procgen.ensemble.ensemble import Ensemble, Memory, OnDisk
from procgen.ensemble.errors import EnsembleError
from procgen.ensemble.layouts import Layout
from procgen.ensemble.manifest import Manifest, bytes_text
from procgen.ensemble.part import WORK, Task, get_ready, row_bytes
from procgen.ensemble.places import address
from procgen.ensemble.plan import Block, Chain, batches, chains, narrow_steps
from procgen.ensemble.present import Present
from procgen.ensemble.source import FACTORY, Source, open_source, remember, revealable
from procgen.ensemble.store import MANIFEST, Folder, folder_path
from procgen.spec.records import dataclass
from procgen.terms.given import spec_of
from procgen.terms.hands import hands

THREAD_WORTH = 250_000  # values that repay one more thread
MOST = 2**48  # paths, and steps: far beyond what can be stored, and safe in every int64


def render(
    spec: Any,
    out: str | Path | None = None,
    *,
    paths: int | None = None,
    first_path: int = 0,
    steps: int | None = None,
    seed: int | None = None,
    workers: int | None = None,
    reveal: Sequence[str] | str | None = None,
    resume: bool = False,
    overwrite: bool = False,
    layout: str = "long",
    partition: str | None = None,
    columns: Mapping[str, str] | None = None,
    scheduler: str | None = None,
    progress: Progress | None = None,
    factory: str = FACTORY,
) -> Ensemble:
    """Paths of a spec, as an Ensemble: in the folder `out`, or in memory.

    Parameters
    ----------
    spec : Spec, or what `procgen.load` takes: the path of a YAML file, or a mapping in the spec language
    out : folder to write; what is not ours in it is left alone. None: in memory, in this process.
    paths, steps, seed : instead of what the spec says.
    first_path : number of the first path; path 700 is the same path in every range that has it.
    workers : processes, or threads in memory; None is what the size repays, up to the processors there are.
    reveal : names `series.label[.output]` to give as columns beside the series, or "all".
    resume : go on with a render of the same spec that did not finish; of a finished one, hold all values against
        their digests and draw missing and damaged parts again.
    overwrite : remove the ensemble that is in `out` first.
    layout : "long": path, step, time (where the spec has a start), one column a series. "panel": id (the name of a
        series), path, time (step without a start), value, and what is revealed of a series beside it. "nested": a row a
        path, a list a series. "wide": a row a step, a column a path, one series and at most 1,024 paths a file.
    partition : "paths": a file holds all series of some paths, "series": one series; None: as usual for the layout.
    columns : other names for the roles id, path, step, time, value of the layout, as in {"time": "week"}.
    scheduler : address of a Dask scheduler whose workers draw (extra `cluster`), or "local" to start `workers` of them
        on this machine; None: this process, and worker processes beside it.
    progress : called with (rows drawn, rows in all), often.

    Raises EnsembleError: `out` holds another ensemble or is in use, too little space, a value that is not
    finite, a file that cannot be written. KeyboardInterrupt passes through; only whole parts are left then.
    """
    asked = Layout.asked(layout, partition, columns)
    if resume and overwrite:
        raise EnsembleError("resume goes on with what is there and overwrite removes it; give one of them")
    if out is None and (resume or overwrite):
        word = "resume" if resume else "overwrite"
        raise EnsembleError(f"{word} is about a folder, and there is none; give out=, or leave {word} away")
    if out is None and asked != Layout():
        raise EnsembleError(
            "layout, partition and columns are about files, and there are none; give out=, or leave them away: an "
            "ensemble in memory shows itself by .panel(), .wide() and .nested()"
        )
    if out is None and scheduler is not None:
        raise EnsembleError("a cluster writes files; give out=, or leave scheduler away to draw in memory")
    if out is not None:
        folder = folder_path(out, "out")
    if workers is not None:
        _whole("workers", workers, 1)
    changes = {"paths": paths, "steps": steps, "seed": seed}
    spec, source, whole, names = _source(spec, changes, first_path, reveal, factory)
    if out is None:
        return _in_memory(source, whole, workers, progress)
    job = Job(spec, source, whole, Folder(folder), names, asked, factory)
    if workers is None and scheduler is None:
        workers = default_workers(whole.rows * len(source.columns))
    return job.run(workers, scheduler, resume, overwrite, progress)


def refuse(
    spec: Any,
    out: str | Path,
    *,
    paths: int | None = None,
    first_path: int = 0,
    steps: int | None = None,
    seed: int | None = None,
    reveal: Sequence[str] | str | None = None,
    layout: str = "long",
    partition: str | None = None,
    columns: Mapping[str, str] | None = None,
    resume: bool = False,
) -> None:
    """Raise what `render` of the same would find in `out` and refuse, before anything is drawn; reads no values."""
    asked, changes = Layout.asked(layout, partition, columns), {"paths": paths, "steps": steps, "seed": seed}
    spec, source, whole, names = _source(spec, changes, first_path, reveal, FACTORY)
    Job(spec, source, whole, Folder(folder_path(out, "out")), names, asked, FACTORY).present.refuse(resume)


def _source(
    spec: Any, changes: Mapping[str, int | None], first_path: int, reveal: Sequence[str] | str | None, factory: str
) -> tuple[Any, Source, Block, tuple[str, ...]]:
    """The spec with the changes, what draws it, the paths and steps that are wanted, and what is revealed."""
    spec = spec_of(spec) if factory == FACTORY else spec
    if any(value is not None for value in changes.values()):
        spec = spec.changed(**changes)
    names = _reveal(spec, reveal)
    source = remember(spec, names) if factory == FACTORY else open_source(spec.raw, names, factory)
    whole = Block(_whole("first_path", first_path, 0), spec.paths, 0, spec.time.steps)
    if max(whole.end_path, whole.steps) > MOST:
        raise EnsembleError(f"expected at most {MOST} paths and steps, got {whole}")
    return spec, source, whole, names


def _whole(name: str, value: int, least: int) -> int:
    if isinstance(value, bool) or not isinstance(value, int) or value < least:
        raise EnsembleError(f"expected {name} to be a whole number of at least {least}, got {value!r}")
    return value


def _reveal(spec: Any, reveal: Sequence[str] | str | None) -> tuple[str, ...]:
    if reveal is None:
        return ()
    if isinstance(reveal, str):
        reveal = [name.strip() for name in reveal.split(",")]
    if list(reveal) == ["all"]:
        return revealable(spec)
    return tuple(dict.fromkeys(reveal))


def _in_memory(source: Source, whole: Block, workers: int | None, progress: Progress | None) -> Memory:
    need, free = whole.rows * row_bytes(source.columns), _free_memory()
    if free is not None and need > free:
        raise EnsembleError(
            f"{whole.rows} rows of {len(source.columns)} columns take {bytes_text(need)} in memory, and "
            f"{bytes_text(free)} are free; give out= to write them to files, or ask for fewer paths or steps"
        )
    values = empty(whole, source.columns)
    size, narrow = row_bytes(source.columns), narrow_steps((whole,), row_bytes(source.columns), source.depth)
    count = default_workers(whole.rows * len(source.columns)) if workers is None else workers
    share = whole.rows * len(source.columns) // count
    # Threads are for compiled kernels: what the interpreter does goes one by one.
    compiled = repays(source, narrow, share)
    if workers is None:
        count = default_workers(whole.rows * len(source.columns), THREAD_WORTH)
    threads = count if compiled else 1
    tasks: dict[int, list[Block]] = {}
    for chain in chains(whole, size, threads):
        for part in chain:
            for batch in batches(part, size, chain[0].steps):
                tasks.setdefault(batch.first_path, []).append(batch)

    def draw(task: list[Block], tick: Tick) -> list[Any]:
        drawer = Drawer(source, tick, narrow, share)
        with hands(threads // len(tasks)):
            for batch in task:
                rows = slice(batch.first_path - whole.first_path, batch.end_path - whole.first_path)
                span = slice(batch.first_step, batch.end_step)
                drawer.fill(batch, {name: data[rows, span] for name, data in values.items()})
        return []

    engines.in_threads(draw, [*tasks.values()], threads, progress, whole.rows)
    with kernel.compiling(compiled or kernel.is_compiling()):
        stored = {column.name: store(values.pop(column.name), column, spare=True) for column in source.columns}
    return Memory(stored, source.columns, whole, source.stamps, source)


def _free_memory() -> int | None:
    try:
        with open("/proc/meminfo", encoding="ascii") as lines:
            found = [line.split()[1] for line in lines if line.startswith("MemAvailable")]
    except OSError:
        return None
    return int(found[0]) * 1024 if found else None


@dataclass
class Job:
    """One render into a folder."""

    spec: Any
    source: Source
    whole: Block
    folder: Folder
    reveal: tuple[str, ...]
    layout: Layout
    factory: str

    def __post_init__(self) -> None:
        self.columns = [*self.source.columns]
        paths = range(self.whole.first_path, self.whole.end_path)
        self.layout.check(self.columns, self.source.stamps is not None, paths)
        self.layout.check_files(self.whole.file(self.whole), self.columns)
        self.identity = {
            "spec": self.spec.digest(),
            "seed": self.spec.seed,
            "first_path": self.whole.first_path,
            "paths": self.whole.paths,
            "steps": self.whole.steps,
            "stream_version": STREAM_VERSION,
            **self.layout.identity(),
            "reveal": list(self.reveal),
        }
        self.present = Present(self.folder, self.whole, self.identity, self.columns, self.factory)

    def run(
        self, workers: int | None, scheduler: str | None, resume: bool, overwrite: bool, progress: Progress | None
    ) -> OnDisk:
        """Draw what is missing; nothing when all is there."""
        if not overwrite and (found := self._complete(resume, progress)) is not None:
            self.folder.tidy()
            return OnDisk(self.folder.path, found, self.spec)
        with self.folder.locked() as descriptor:
            # another render may have finished while this one waited for the lock
            if overwrite or (found := self._complete(resume, progress)) is None:
                advice = f"{engines.FEWER}, then go on with --resume (resume=True)"
                with engines.opened(scheduler, workers, descriptor, advice) as engine:
                    found = self._draw(engine, resume, overwrite, progress)
        return OnDisk(self.folder.path, found, self.spec)

    def _complete(self, resume: bool, progress: Progress | None) -> Manifest | None:
        """The manifest when all is there, parts and tables."""
        found = self.present.complete(resume, progress)
        return found if self.factory != FACTORY or revealed.there(self.folder, self.spec) else None

    def _draw(self, engine: Engine, resume: bool, overwrite: bool, progress: Progress | None) -> Manifest:
        self._refuse_too_large()
        if isinstance(self.folder.state, Path):
            engine.check_sees(str(self.folder.state.absolute()))
        if overwrite:
            self.present.refuse_foreign()
            self.present.remove()
        self.columns = as_kept(self.columns, {} if overwrite else self.present.types())
        plan = self.present.chains(resume) or chains(
            self.whole, row_bytes(self.columns), engine.size, self.layout.widest
        )
        self.present.refuse_strays(plan)
        there = self.present.records(plan)
        self.folder.clean_state(keep_plan=True)
        self.present.write_plan(plan, self.columns)
        self.folder.remove([MANIFEST])

        left, records = [], []
        for chain in plan:
            start = next((k for k, part in enumerate(chain) if part not in there), len(chain))
            records += [there[part] for part in chain[:start]]
            if start < len(chain):
                left.append((chain, start))
        hands = engine.hands(len(left))
        share = self.whole.rows * len(self.columns) // engine.size * hands
        tasks = [self._task(chain, start, share, hands) for chain, start in left]
        done = sum(Block(**record["part"]).rows for record in records)
        todo = [task.json() for task in tasks]
        engine.run(Work(todo, WORK, records.extend, progress, done, self.whole.rows, get_ready))
        if self.factory == FACTORY:
            revealed.write(self.folder, self.spec, self.whole, self.identity)
        made = self._make_manifest(records)
        self.folder.write_json(MANIFEST, made.json())
        self.folder.clean_state(keep_plan=False)
        return made

    def _task(self, chain: Chain, start: int, share: int, hands: int) -> Task:
        out, types = address(self.folder.path), {column.name: column.type for column in self.columns}
        told = self.reveal, self.factory, types, share, hands
        return Task(self.spec.raw, self.identity, out, self.whole, chain, start, *told)

    def _refuse_too_large(self) -> None:
        """Refuse what the disk cannot hold, before the parts are even planned."""
        need = self.whole.rows * sum(TYPES[column.type] for column in self.columns)
        if not isinstance(self.folder.path, Path):
            return  # a store behind a URL does not say
        free = shutil.disk_usage(self.folder.path).free
        there = sum(max(self.folder.size(name), 0) for name in self.folder.part_files())
        if need - there > free:
            raise EnsembleError(
                f"{self.whole.rows} rows of {len(self.columns)} columns take about {bytes_text(need)}, and "
                f"{self.folder.path} has {bytes_text(free)} free; ask for fewer paths or steps, use "
                "type: float32, or choose another OUT"
            )

    def _make_manifest(self, records: list[dict[str, Any]]) -> Manifest:
        records.sort(key=lambda record: (record["part"]["first_path"], record["part"]["first_step"]))
        series = [column.name for column in self.columns if not column.revealed]
        revealed = [column.name for column in self.columns if column.revealed]
        portable, why = self.source.portable
        return Manifest(
            identity=self.identity,
            raw=self.spec.raw,
            canonical=self.spec.canonical(),
            whole=self.whole,
            columns=tuple(self.columns),
            time=self._time(),
            parts=tuple(manifest.part_record(record, self.whole) for record in records),
            stored=manifest.roots(records, self.whole, "stored", series),
            drawn=manifest.roots(records, self.whole, "drawn", series),
            revealed=manifest.roots(records, self.whole, "stored", revealed),
            portable=portable,
            why_not_portable=why,
            versions=manifest.versions(),
        )

    def _time(self) -> dict[str, Any] | None:
        if self.source.stamps is None:
            return None
        first, last = (self.source.stamps(step, 1)[0] for step in (0, self.whole.steps - 1))
        grid = self.spec.time
        stamps = {"first": _iso(first), "last": _iso(last)}
        return {"zone": grid.zone or "UTC", "stamp": grid.stamp, **stamps, "tzdata": manifest.tz_version()}


def _iso(microseconds: int) -> str:
    import numpy as np

    return str(np.datetime64(int(microseconds), "us")) + "Z"
