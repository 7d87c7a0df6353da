"""A few long paths as many short ones: spans of a path so far apart that the later has forgotten the earlier.

Where shocks cannot be recovered, behaviour is judged across paths, of which there must be a hundred. A series whose
deviations are strictly stationary, and forget, gives them from one path: spans of some steps with gaps between them, of
twice the steps after which neither values nor their squares are correlated any more. Each span is then a path of the
stated series, whatever the step that it began at: the stated mean there is taken away, and that of its own steps put
in its place. Bernstein (1927) cut dependent sequences so.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.blocks import GROUP
from procgen.checks.gather import Gather
from procgen.checks.judge import FEW_PATHS
from procgen.checks.judge_moments import moment_checks
from procgen.checks.lane import in_one_process
from procgen.checks.probes import SeriesPlan
from procgen.checks.rectangles import Blocks
from procgen.checks.verdict import Check
from procgen.ensemble.plan import Block
from procgen.spec.records import dataclass
from procgen.terms.combine import Sum
from procgen.terms.graph import Source
from procgen.terms.recover import sources_below
from procgen.terms.shape import Elementwise
from procgen.theory.series import SeriesTheory

FORGOTTEN = 1e-3  # a correlation after which, at twice the steps, spans count as independent: a millionth
FEWEST_STEPS, MOST_STEPS = 16, 64  # of a span
LONGEST_GAP = 4096
MOST_VALUES = 1 << 22  # of all spans together
FINE = 0.1  # grain over sd up to which a moving mean may be taken away: it moves the grid on which values lie


@dataclass(frozen=True)
class Cut:
    """Where spans of `steps` steps begin, on each path."""

    begins: NDArray[np.int64]
    steps: int

    def of(self, values: NDArray, first_step: int, out: NDArray) -> None:
        """Put what a block of one path (steps,) from `first_step` on holds of each span into out (spans, steps)."""
        end = first_step + len(values)
        for k in range(*np.searchsorted(self.begins, [first_step - self.steps + 1, end])):
            begin = int(self.begins[k])
            a, b = max(begin, first_step), min(begin + self.steps, end)
            out[k, a - begin : b - begin] = values[a - first_step : b - first_step]


def checks(origin: Any, gather: Gather, rows: Sequence[Check]) -> Iterator[Check]:
    """The moment checks of those series of few long paths that `rows` could not judge by shocks."""
    from procgen.checks.planning import plan_of
    from procgen.theory import theory

    steps = gather.plan.steps
    unseen = {row.series for row in rows if row.what == "recovered shocks" and row.outcome == "untestable"}
    if not unseen or gather.paths >= FEW_PATHS or any(row.outcome == "departs" and not row.series for row in rows):
        return  # what is damaged is not read twice
    stated = theory(origin.spec)
    candidates = [plan for plan in gather.plan.series if plan.name in unseen]
    gaps = {plan.name: gap for plan in candidates if (gap := forgets(plan, gather, stated))}
    cut = cut_of(max(gaps.values(), default=0), steps, gather.paths, len(gather.plan.series))
    if not gaps or cut is None:
        return
    spans = gather.paths * len(cut.begins)
    plan = plan_of(origin.spec.changed(paths=spans, steps=cut.steps), cut.steps, origin.same_draws)
    whole = Block(0, spans, 0, cut.steps)
    found = in_one_process(plan, _spans(gather, cut, origin.blocks()), whole)
    for column, series in enumerate(plan.series):
        if series.name in gaps:
            judged = [*moment_checks(found, column)]
            if series.name in found.squares:
                judged += found.squares[series.name].checks(series.name)
            for row in judged:
                if row.log_p is not None and row.kind != "dependence":  # between paths: spans of one are none
                    row.probe = f"{row.probe} of {spans} spans of {cut.steps} steps"
                    if row.finding is not None and row.what.startswith("slope"):  # where it departs, tails grow as well
                        row.finding = replace(row.finding, detect=lambda level: None)
                    yield row


def forgets(plan: SeriesPlan, gather: Gather, theory: Any) -> int | None:
    """Steps between two spans of a series; None where it cannot be cut into spans. `theory` is that of the spec."""
    own = plan.theory
    cannot = plan.unknown or plan.name in gather.plan.gaps or getattr(own, "mixture", None) is not None
    if cannot or not own.random or not own.stationarity.strict_deviations:
        return None
    if plan.grain > FINE * plan.variance[0] ** 0.5 and np.ptp(plan.mean) > 0:
        return None
    node, lags = theory.graph.series[plan.name], np.arange(min(LONGEST_GAP, gather.plan.steps))
    while (felt := _felt(own, lags)) is None:
        below = [part for part in node.inputs if sources_below(theory.graph, part)]
        if not isinstance(node.term, Elementwise | Sum) or len(below) != 1 or isinstance(below[0], Source):
            return None
        node = below[0]  # what one value makes of another is forgotten with it
        own = SeriesTheory(node.key, theory.written[id(node)])
    return None if felt >= len(lags) else 2 * felt


def _felt(theory: Any, lags: NDArray) -> int | None:
    """Steps after which values and squares are not correlated any more; None where that is not known."""
    levels, squares = theory.autocorrelation(lags), theory.autocorrelation_of_squares(lags)
    if levels is None or squares is None or not np.isfinite([levels, squares]).all():
        return None
    return int(np.flatnonzero(np.maximum(np.abs(levels), np.abs(squares)) > FORGOTTEN)[-1]) + 1


def cut_of(gap: int, steps: int, paths: int, series: int) -> Cut | None:
    """Spans over all of the steps with gaps between them, as long as leaves enough of them; None where none does."""
    for long in (MOST_STEPS, MOST_STEPS // 2, FEWEST_STEPS):
        count = (steps + gap) // (long + gap)
        if paths * count > 2 * FEW_PATHS or (long == FEWEST_STEPS and paths * count >= FEW_PATHS):
            count = min(count, max(MOST_VALUES // (long * paths * series), 1))
            return Cut((long + gap) * np.arange(count), long)
    return None


def _spans(gather: Gather, cut: Cut, blocks: Blocks) -> Iterator[tuple[int, int, Mapping[str, NDArray]]]:
    """All spans as blocks of whole lane groups: the spans of the first path, then those of the next."""
    plan, count = gather.plan, len(cut.begins)
    held = {name: np.full((gather.paths * count, cut.steps), np.nan) for name in plan.names}
    first = None
    for first_path, first_step, values in blocks:
        first = first_path if first is None else first
        for name, block in values.items():
            for k, path in enumerate(block):
                row = (first_path - first + k) * count
                cut.of(path, first_step, held[name][row : row + count])
    for series in plan.series:
        held[series.name] += _moved(series, cut, gather.paths)
    for begin in range(0, gather.paths * count, GROUP):
        yield begin, 0, {name: rows[begin : begin + GROUP] for name, rows in held.items()}


def _moved(series: SeriesPlan, cut: Cut, paths: int) -> NDArray:
    """What the mean of a span's own steps is above that of the steps it lies at, (spans, steps)."""
    own = np.arange(cut.steps)
    mean = series.theory.mean((cut.begins[:, None] + own).ravel())
    if mean is None:
        return np.zeros((1, cut.steps))
    return np.tile(np.asarray(series.theory.mean(own)) - np.reshape(mean, (-1, cut.steps)), (paths, 1))
