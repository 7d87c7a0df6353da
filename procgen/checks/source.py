"""Where the values come from: an ensemble of ours, or a table of anyone's; and the sums of one pass over them."""

from __future__ import annotations

import copy
from collections.abc import Mapping
from pathlib import Path
from typing import Any, Protocol

from procgen.checks import sizes
from procgen.checks.foreign import TableError
from procgen.checks.gather import Gather
from procgen.checks.lane import in_one_process
from procgen.checks.parts import WORK, is_whole, plan_for, prepared, tasks, unpacked
from procgen.checks.rectangles import Blocks, grouped, named
from procgen.checks.tree import Tree
from procgen.checks.verdict import Check
from procgen.ensemble.engines import Progress, Work, default_workers, opened
from procgen.ensemble.places import place_of

WORTH = 16_000_000  # values that repay one more process: it derives the theory for itself


class Origin(Protocol):
    """Values to be judged, and what is to be said of how they are stored."""

    spec: Any
    steps: int
    rows: int
    faults: list[Check]
    columns: dict[str, str]  # series of `spec` -> the name that the reader knows
    same_draws: bool  # whether drawn parameters of a path are those that `spec` draws for it

    def gathered(self, workers: int | None, progress: Progress | None, scheduler: str | None = None) -> Gather: ...
    def blocks(self) -> Blocks: ...
    def checks(self) -> list[Check]: ...
    def about(self) -> dict[str, Any]: ...


def origin(data: Any, spec: Any, columns: Mapping[str, str] | None) -> Origin:
    """The origin behind whatever was given to `validate`; TableError when nothing can be read from it.

    TypeError when it is no kind of data, or `spec` is no kind of spec.
    """
    from procgen.terms.given import spec_of

    spec = None if spec is None else spec_of(spec)
    if isinstance(data, str | Path):
        path = place_of(data)
        if not path.exists():
            raise TableError(f"there is no file or folder {path}; check the path")
        if path.is_dir():
            from procgen.ensemble import open_ensemble

            data = open_ensemble(path)
        else:
            from procgen.checks.foreign import read_table

            if not isinstance(path, Path):
                raise TableError(f"{path} is a table behind a URL; bring it to this machine, then give its path")
            _need_spec(spec, path)
            return read_table(path, spec, columns)
    if hasattr(data, "blocks") and hasattr(data, "whole"):
        if columns:
            raise TableError(
                f"an ensemble knows its own columns, so that none can be named for it, got {dict(columns)}; leave out "
                "columns= (--path-col, --step-col, --time-col, --series-col, --id-col, --value-col)"
            )
        return EnsembleOrigin(data, spec)
    if hasattr(data, "columns") and hasattr(data, "iloc"):
        from procgen.checks.foreign import from_frame

        _need_spec(spec, "the table")
        return from_frame(data, spec, columns)
    raise TypeError(f"expected an ensemble, a DataFrame, or the path of one, got {type(data).__name__}")


def no_cluster(scheduler: str | None) -> None:
    """TableError when a cluster is asked to read what only this process holds."""
    if scheduler is not None:
        raise TableError("a cluster reads the parts of an ensemble in a folder; leave scheduler= (--scheduler) out")


def _need_spec(spec: Any, what: object) -> None:
    if spec is None:
        raise TableError(f"{what} does not say what it should follow; give the spec (--spec SPEC, or spec=)")


class EnsembleOrigin:
    """An ensemble of ours: its values are also held against the digests in its manifest."""

    def __init__(self, ensemble: Any, spec: Any = None):
        self.ensemble = ensemble
        self.spec = ensemble.spec if spec is None else spec
        self.spec_file, self.spec_digest = self.spec.file, self.spec.digest()
        self.same_draws = same_draws(ensemble.spec, self.spec)
        self.steps, self.rows = ensemble.whole.steps, ensemble.whole.rows
        self.faults: list[Check] = []
        missing = [name for name in self.spec.series if name not in ensemble.names]
        if missing:
            raise TableError(f"the ensemble has no series {', '.join(missing)}; it has {', '.join(ensemble.names)}")
        self.spec, self.columns = with_revealed(self.spec, [c.name for c in ensemble.columns if c.revealed])

    def checks(self) -> list[Check]:
        from procgen.checks.parameters import parameter_checks

        sizes_of = sizes.checks(self.ensemble.whole.paths, self.steps, self.spec)
        return [*parameter_checks(self.ensemble, self.spec), *sizes_of]

    def about(self) -> dict[str, Any]:
        """Title, digest and size, for the report."""
        whole = self.ensemble.whole
        manifest = getattr(self.ensemble, "manifest", None)
        return {
            "title": self.spec.title,
            "paths": whole.paths,
            "steps": whole.steps,
            "digest": manifest.digest if manifest is not None else None,
            "spec_digest": self.spec_digest,
            "where": str(self.ensemble.path) if manifest is not None else None,
            "spec_file": self.spec_file,
            "judged_on": "; ".join(sizes.told(whole.paths, whole.steps, self.spec)),
        }

    def gathered(self, workers: int | None, progress: Progress | None, scheduler: str | None = None) -> Gather:
        """The sums of one pass: of the parts on disk by several processes, of an ensemble in memory by this one."""
        if getattr(self.ensemble, "manifest", None) is not None:
            return self._from_parts(workers, progress, scheduler)
        no_cluster(scheduler)
        from procgen.checks.planning import plan_of

        whole = self.ensemble.whole
        plan = plan_of(self.spec, self.steps, self.same_draws, whole.paths)
        return in_one_process(plan, grouped(self.blocks(), whole), whole, progress)

    def blocks(self) -> Blocks:
        """The values of the series of `spec`, in row order."""
        return named(self.ensemble.blocks(), self.columns)

    def _from_parts(self, workers: int | None, progress: Progress | None, scheduler: str | None) -> Gather:
        tree: Tree[Gather] = Tree()
        nodes: dict[int, dict[str, str]] = {}

        def keep(records: list[dict[str, Any]]) -> None:
            plan = plan_for(todo[0])
            for record in records:
                nodes.update(record["nodes"])
                self.faults += [Check.fact("", "rows in order", where, what) for where, what in record["faults"]]
                for first, end, sums in record["sums"]:
                    tree.add(first, end, unpacked(plan, sums))

        if workers is None and scheduler is None:
            workers = default_workers(self.rows * len(self.columns), WORTH)
        with opened(scheduler, workers) as engine:
            todo = tasks(self.ensemble, self.spec, self.columns, self.same_draws, engine.size, engine.hands)
            if isinstance(self.ensemble.path, Path):
                engine.check_sees(str(self.ensemble.path.absolute()))
            engine.run(Work(todo, WORK, keep, progress, 0, self.rows, lambda: prepared(todo[0])))
        self.faults.sort(key=lambda check: check.probe)
        self._compare_digests(nodes)
        return tree.total(Gather(plan_for(todo[0])))

    def _compare_digests(self, nodes: Mapping[int, Mapping[str, str]]) -> None:
        """Every value is the one that was written, or the first place where it is not."""
        from procgen.ensemble import check_digest

        if is_whole(self.ensemble, nodes):
            note = f"every value is the one that was drawn ({self.ensemble.digest[:12]}…)"
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
