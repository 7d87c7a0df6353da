"""What differs between two ensembles, or two specs: in meaning, in values, and by how much where shocks are shared."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from procgen.checks.held import broken
from procgen.checks.paired import Paired, Sums
from procgen.ensemble.beside import First, common, note, side_by_side
from procgen.ensemble.ensemble import Ensemble, open_ensemble
from procgen.ensemble.errors import EnsembleError, Refused
from procgen.ensemble.manifest import Manifest
from procgen.ensemble.places import Place, Remote, place_of
from procgen.ensemble.plan import Block
from procgen.ensemble.seal import refuse_changed
from procgen.ensemble.source import read_spec
from procgen.ensemble.store import MANIFEST, Folder
from procgen.spec.meaning import Change, changes
from procgen.spec.model import Spec
from procgen.spec.records import dataclass
from procgen.terms.given import spec_of
from procgen.terms.recipe import Recipe, recipes

HANDFUL = 5
DATA = (".csv", ".parquet", ".xlsx", ".npy")
Tick = Callable[[int, int], None]


@dataclass(frozen=True)
class Side:
    """One of the two: how it was named, its spec, and its values where there are any."""

    name: str
    spec: Spec
    ensemble: Ensemble | None

    @property
    def whole(self) -> Block:
        """Its paths and steps, those of an ensemble or of a spec."""
        if self.ensemble is not None:
            return self.ensemble.whole
        return Block(0, self.spec.paths, 0, self.spec.time.steps)


@dataclass(frozen=True)
class SeriesDifference:
    """What became of one series.

    Attributes
    ----------
    name : str
    state : str
        "equal", "differs", "new" (only in b), "gone" (only in a) or "renamed" (the same recipe and draws, in a
        under the name `was`); "unread" where damage kept values from being compared.
    first : First or None
        The first value that differs, by path and then by step: `.path`, `.step`, `.a`, `.b`; None where specs alone
        were compared.
    moved : tuple of str
        Terms that differ and may have moved it, by what it depends on.
    shares : bool
        Whether it draws some of the same shocks in both.
    """

    name: str
    state: str
    first: First | None = None
    moved: tuple[str, ...] = ()
    shares: bool = False
    was: str = ""


@dataclass(frozen=True)
class Difference:
    """What differs between a and b.

    Attributes
    ----------
    a, b : Side
    meaning : tuple of Change
        Places at which the specs differ in meaning: `.place`, `.old`, `.new`; last the range of paths, where the
        numbers of the first paths differ.
    series : tuple of SeriesDifference
        One for each series of either, in the order of b, those that are gone last.
    compared : Block or None
        The paths and steps whose values were compared; None where there are not two ensembles with common paths.
    paired : tuple of Paired
        Means, paired mean change, standard error, correlation and share of variance saved, by series and step, of
        series that differ and share shocks.
    damages : tuple of str
        What of an ensemble is not what its manifest says, where that came to light.
    """

    a: Side
    b: Side
    meaning: tuple[Change, ...]
    series: tuple[SeriesDifference, ...]
    compared: Block | None
    paired: tuple[Paired, ...] = ()
    damages: tuple[str, ...] = ()

    @property
    def equal(self) -> bool:
        """Whether both mean the same, and have the same series with the same values, undamaged."""
        same = not self.meaning and all(one.state == "equal" for one in self.series)
        return same and not self.damages and self.a.whole == self.b.whole

    @property
    def table(self) -> Any:
        """The paired figures as a DataFrame, a row a series and step."""
        import pandas as pd

        return pd.DataFrame([row.row() for row in self.paired], columns=list(Paired.__dataclass_fields__))

    def text(self) -> str:
        """The difference for a terminal."""
        from procgen.report.difference import difference_text

        return difference_text(self)

    def to_dict(self) -> dict[str, Any]:
        """The difference as plain data, in the shape of `difference --json`."""
        block = self.compared
        return {
            "equal": self.equal,
            "a": self.a.name,
            "b": self.b.name,
            "meaning": [dict(vars(change)) for change in self.meaning],
            "series": [
                {**vars(one), "moved": list(one.moved), "first": None if one.first is None else one.first.to_dict()}
                for one in self.series
            ],
            "compared": None if block is None else dict(vars(block)),
            "paired": [row.row() for row in self.paired],
            "damages": list(self.damages),
        }

    def to_json(self) -> str:
        """The difference as JSON text."""
        return json.dumps(self.to_dict(), ensure_ascii=False, allow_nan=False)

    def __str__(self) -> str:
        return self.text()

    def __repr__(self) -> str:
        states = ", ".join(f"{one.name} {one.state}" for one in self.series)
        return f"Difference({'equal' if self.equal else f'{len(self.meaning)} in meaning'}; {states})"


def difference(a: Any, b: Any, at: Sequence[int] | None = None, progress: Tick | None = None) -> Difference:
    """What differs between two ensembles, two specs, or one of each.

    Parameters
    ----------
    a, b : an ensemble, the folder of one, an old manifest.json; or a spec, its YAML file or a mapping. Values are
        compared where both are ensembles, over the paths and steps that both have; else it is said which series
        would change, by what each depends on, and nothing is drawn.
    at : steps of the paired figures; a handful over the length when None.
    progress : called with (rows read, rows in all).

    Values are read, whatever digests the manifests record; those of revealed columns that both have, too. Where they
    differ without a reason, or cannot be read, both are held against their manifests (`.damages`). Raises SpecError,
    EnsembleError, TypeError when a or b cannot be read, ValueError when a step of `at` is not in both.
    """
    left, right = _side(a), _side(b)
    block = None
    if left.ensemble is not None and right.ensemble is not None:
        block = common(left.whole, right.whole)
    steps = _steps(at, block or Block(0, 1, 0, min(left.whole.steps, right.whole.steps)))
    meaning = (*changes(left.spec, right.spec), *_ranges(left, right))
    before, after = recipes(left.spec), recipes(right.spec)
    was = _renamed(before, after)
    names = [name for name in dict.fromkeys([*after, *before]) if name not in was.values()]
    series = [_stated(name, before.get(name), after.get(name), was.get(name, "")) for name in names]
    if block is None:
        return Difference(left, right, meaning, tuple(series), None)
    series, paired, damages = _seen(series, left, right, block, steps, progress)
    return Difference(left, right, meaning, tuple(series), block, tuple(paired), damages)


def _ranges(a: Side, b: Side) -> tuple[Change, ...]:
    """The paths by number, where they do not begin with the same: their count alone would not tell."""
    if a.whole.first_path == b.whole.first_path:
        return ()
    return (Change("range of paths", *(f"{one.first_path}–{one.end_path - 1}" for one in (a.whole, b.whole))),)


def _renamed(before: Mapping[str, Recipe], after: Mapping[str, Recipe]) -> dict[str, str]:
    """The former names of series that have another one now and are otherwise the same, where these draw something."""
    gone = [name for name in before if name not in after and before[name].draws]
    found: dict[str, str] = {}
    for name in after if gone else ():
        same = [old for old in gone if name not in before and not after[name].moved_from(before[old])]
        if same:
            found[name] = same[0]
            gone.remove(same[0])
    return found


def _stated(name: str, before: Recipe | None, after: Recipe | None, was: str = "") -> SeriesDifference:
    """What must become of a series by its recipes."""
    if was:
        return SeriesDifference(name, "renamed", was=was, shares=True)
    if before is None or after is None:
        return SeriesDifference(name, "new" if before is None else "gone")
    moved = after.moved_from(before)
    return SeriesDifference(name, "differs" if moved else "equal", None, moved, after.shares(before))


def _seen(
    stated: Sequence[SeriesDifference], a: Side, b: Side, block: Block, steps: list[int], progress: Tick | None
) -> tuple[list[SeriesDifference], list[Paired], tuple[str, ...]]:
    """What became of the series by their values, the paired figures of those that differ, and what is damaged."""
    both = {one.name: one for one in stated if one.state in ("equal", "differs")}
    sums = {one.name: Sums(len(steps)) for one in both.values() if one.shares}
    sides = {"a": a.ensemble, "b": b.ensemble}
    found: dict[str, First] = {}
    try:
        _compare(found, sums, a, b, block, steps, [*both, *_revealed(a, b)], progress)
    except Refused:
        raise
    except EnsembleError:
        damages = broken(sides, {}, progress)
        if not damages:
            raise
        return [replace(one, state="unread") if one.name in both else one for one in stated], [], damages
    strange = {
        name: first
        for name, first in found.items()
        if _same_digest(name, a, b) or (name in both and not both[name].moved)
    }
    series = [_as_seen(one, found) if one.name in both else one for one in stated]
    paired = [row for name, each in sums.items() if name in found for row in each.figures(name, steps)]
    return series, paired, broken(sides, strange, progress) if strange else ()


def _compare(
    found: dict[str, First],
    sums: Mapping[str, Sums],
    a: Side,
    b: Side,
    block: Block,
    steps: Sequence[int],
    names: Sequence[str],
    progress: Tick | None,
) -> None:
    """Read the columns of both; note the first differences in `found`, gather `sums`."""
    assert a.ensemble is not None and b.ensemble is not None
    done = 0
    for here, values in side_by_side(a.ensemble, b.ensemble, block, names) if names else ():
        note(found, here, values)
        columns = [i for i, step in enumerate(steps) if here.first_step <= step < here.end_step]
        _gather(sums, values, [steps[i] - here.first_step for i in columns], columns)
        done += here.rows
        if progress is not None:
            progress(done, block.rows)


def _revealed(a: Side, b: Side) -> list[str]:
    """Revealed columns of both whose recorded digests are the same, so that a difference is a damage."""
    columns = [] if a.ensemble is None else a.ensemble.columns
    return [column.name for column in columns if column.revealed and _same_digest(column.name, a, b)]


def _gather(sums: Mapping[str, Sums], values: Mapping[str, Any], here: list[int], columns: list[int]) -> None:
    if columns:
        for name, each in sums.items():
            x, y = values[name]
            each.add(x[:, here], y[:, here], columns)


def _as_seen(one: SeriesDifference, found: Mapping[str, First]) -> SeriesDifference:
    return replace(one, state="differs" if one.name in found else "equal", first=found.get(one.name))


def _same_digest(name: str, a: Side, b: Side) -> bool:
    manifests: list[Any] = [getattr(side.ensemble, "manifest", None) for side in (a, b)]
    if a.whole != b.whole or None in manifests:
        return False
    left, right = ({**manifest.stored, **manifest.revealed}.get(name) for manifest in manifests)
    return left is not None and left == right


def _steps(at: Sequence[int] | None, block: Block) -> list[int]:
    last = block.steps - 1
    if at is None:
        return sorted({last * k // (HANDFUL - 1) for k in range(HANDFUL)})
    if not isinstance(at, Iterable) or not all(isinstance(step, int | np.integer) for step in at):
        raise EnsembleError(f"expected at to be a list of steps, such as [0, {last}], got {at!r}")
    outside = [step for step in at if not 0 <= step <= last]
    if outside:
        raise EnsembleError(f"expected steps from 0 to {last}, which both have, got {outside[0]}")
    return sorted({int(step) for step in at})


def _side(given: Any) -> Side:
    """A side from whatever names it."""
    if isinstance(given, Ensemble):
        return Side(str(getattr(given, "path", "in memory")), given.spec, given)
    if isinstance(given, str | Path):
        path = place_of(given)
        if path.is_dir():
            found = open_ensemble(path)
            return Side(str(path), found.spec, found)
        if path.suffix == ".json":
            return _of_manifest(path)
        if isinstance(path, Remote):
            raise EnsembleError(f"there is no ensemble at {path}; give the URL of one, or a spec on this machine")
        if path.suffix.lower() in DATA:
            raise EnsembleError(
                f"{path} is a file of values, and these are compared with a spec: procgen validate {path} --spec SPEC; "
                "give a spec, the folder of an ensemble, or its manifest.json"
            )
        if not path.exists():
            raise EnsembleError(
                f"there is no file or folder {path}; give a spec, the folder of an ensemble, or its manifest.json"
            )
        return Side(str(path), spec_of(given), None)
    spec = spec_of(given)
    variant = spec.written.variant if spec.written is not None else ""
    name = spec.file or spec.title or "a spec"
    return Side(f"{name}, variant {variant}" if variant else name, spec, None)


def _of_manifest(path: Place) -> Side:
    """An old manifest: with its values where its files stand beside it, else its spec alone."""
    data = Folder(path.parent).read_json(path.name)
    if data is None:
        raise EnsembleError(f"there is no file {path}; give a spec, the folder of an ensemble, or its manifest.json")
    manifest = Manifest.read(data, str(path))
    refuse_changed(manifest, path)
    try:
        found = open_ensemble(path.parent) if path.name == MANIFEST else None
    except Refused:
        raise
    except EnsembleError:
        found = None
    return Side(str(path), read_spec(manifest.raw) if found is None else found.spec, found)
