"""`validate`: does an ensemble have the behaviour that its spec states?"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from functools import partial
from numbers import Real
from typing import Any

from procgen.checks import spans
from procgen.checks.extremes import MARK
from procgen.checks.filled import FILLED
from procgen.checks.gather import Gather
from procgen.checks.judgement import judged
from procgen.checks.verdict import Check, Verdict

_PATH = re.compile(r"\b(paths? )(\d+(?: and \d+)?)\b")
_WORST = "worst: path "

Tick = Callable[[int, int], None]


def validate(
    data: Any,
    spec: Any = None,
    false_alarm: float = 0.001,
    columns: Mapping[str, str] | None = None,
    progress: Tick | None = None,
    workers: int | None = None,
    scheduler: str | None = None,
) -> Verdict:
    """A verdict on whether `data` behaves as the spec states.

    Parameters
    ----------
    data : Ensemble, DataFrame, or path
        An ensemble (or its folder), or anyone's table: a DataFrame, a CSV or a Parquet file, with a column a series
        (long), a row an observation (panel) or, for one series, a column a path (wide).
    spec : Spec or path, optional
        What the data should follow; an ensemble knows its own.
    false_alarm : float in (0, 1)
        Probability, at most, with which data of exactly the stated behaviour are said to depart.
    columns : mapping, optional
        For a table: where "path", "step" or "time", and each series are found, e.g. {"path": "run", "x": "load"}; of
        a panel also "id" and "value", and which id a series is.
    progress : callable, optional
        Called with (rows done, rows in all).
    workers : int, optional
        Processes that read an ensemble's parts; None is what the size repays, up to the processors there are. The
        verdict is the same for any number. A table, or an ensemble in memory, is read by this process.
    scheduler : str, optional
        Address of a Dask scheduler whose workers read an ensemble's parts (extra `cluster`), or "local" to start
        `workers` of them on this machine.

    Raises
    ------
    ValueError
        When the data cannot be read, or there is no spec to compare them with; EnsembleError, too, when a worker
        process died.
    """
    from procgen.checks import source

    _refuse(false_alarm, columns, workers)
    origin = source.origin(data, spec, columns)
    gather = origin.gathered(workers, progress, scheduler)
    rows = [*origin.checks(), *origin.faults, *judged(gather)]
    rows += spans.checks(origin, gather, rows)
    rows = _told_once(rows, gather, getattr(origin, "absent", 0))
    for row in rows:
        _as_known(row, origin)
    verdict = Verdict(rows, false_alarm, origin.about(), origin)
    if verdict.agrees is False and hasattr(origin, "causes"):
        verdict.explain(_causes(rows, origin))
    return verdict


def _refuse(false_alarm: float, columns: Mapping[str, str] | None, workers: int | None) -> None:
    if isinstance(false_alarm, bool) or not isinstance(false_alarm, Real) or not 0 < false_alarm < 1:
        raise ValueError(f"expected false_alarm to be a probability between 0 and 1, got {false_alarm!r}")
    if columns is not None and not isinstance(columns, Mapping):
        raise TypeError(f'expected columns to be a mapping such as {{"path": "run", "x": "value"}}, got {columns!r}')
    if workers is not None and (isinstance(workers, bool) or not isinstance(workers, int) or workers < 1):
        raise ValueError(f"expected workers to be a whole number of at least 1, got {workers!r}")


def _told_once(rows: list[Check], gather: Gather, absent: int) -> list[Check]:
    """Rows without what others tell: of `absent` rows of a table, and of a number that marks what is missing."""
    if absent:
        rows = [row for row in rows if not _only_absent(row, gather, absent)]
    marked = {row.series for row in rows if row.note.endswith(MARK)}
    return [row for row in rows if not (row.what == FILLED and row.series in marked)]


def _only_absent(row: Check, gather: Gather, absent: int) -> bool:
    """Whether all values of a series that are not finite are those of rows that are not there."""
    return row.what == "finite values" and gather.structure.not_finite.get(row.series, [0])[0] == absent


def _causes(rows: Sequence[Check], origin: Any) -> list[Check]:
    """What was done to a table whose series depart, where it shows."""
    ours = {known: name for name, known in origin.columns.items()}
    departing = [name for row in rows if row.outcome == "departs" for name in row.series.split(" ~ ")]
    found = list(origin.causes([ours.get(name, name) for name in departing]))
    for row in found:
        _as_known(row, origin)
    return found


def _as_known(row: Check, origin: Any) -> None:
    """Put the names that the reader knows in the place of ours: of series, and of the paths of a table."""
    labels = getattr(origin, "labels", None)
    if labels is not None and row.series and (row.kind in ("structure", "law") or row.probe.startswith(_WORST)):
        row.note, row.probe = (_PATH.sub(partial(_labelled, labels), text) for text in (row.note, row.probe))
    row.series = " ~ ".join(origin.columns.get(name, name) for name in row.series.split(" ~ "))
    for name in sorted(origin.columns, key=len, reverse=True):
        if name != origin.columns[name]:
            row.note = row.note.replace(name, origin.columns[name])


def _labelled(labels: Sequence[Any], match: re.Match[str]) -> str:
    numbers = [int(number) for number in match[2].split(" and ")]
    return match[1] + " and ".join(str(labels[k]) if k < len(labels) else str(k) for k in numbers)
