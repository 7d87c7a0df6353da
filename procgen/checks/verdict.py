"""Checks become a verdict: Holm's procedure over the family, outcomes, and who departs from what in plain words."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping, Sequence
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from procgen.checks.coverage import Coverage, blind, coverage, title
from procgen.checks.judge import Finding
from procgen.spec.records import dataclass

if TYPE_CHECKING:
    from procgen.checks.common import Told
    from procgen.checks.copied import Copied

USUAL = 0.001  # chance of a false alarm
KINDS = ("structure", "level", "spread", "memory", "clustering", "law", "dependence")
COLUMNS = (
    "series", "what", "probe", "theory", "estimate", "standard_error", "p", "detectable", "outcome", "note",
)  # fmt: skip


@dataclass
class Check:
    """One row of a verdict.

    Attributes
    ----------
    series, what, probe : str
        Which series (two joined by " ~ "), what is compared, and where.
    kind : str
        One of KINDS: the sort of departure that it would show.
    theory, estimate, standard_error : float or None
    log_p : float or None
        Natural logarithm of p; None for exact facts and for what is not judged.
    outcome : str
        "agrees", "departs", "untestable" or "reported"; "" until Holm has spoken.
    """

    series: str
    what: str
    probe: str
    kind: str
    theory: float | None = None
    estimate: float | None = None
    standard_error: float | None = None
    log_p: float | None = None
    outcome: str = ""
    note: str = ""
    finding: Finding | None = None
    detectable: float | None = None
    copied: Copied | None = None  # of paths that are copies of each other: what they make of all else

    @classmethod
    def of(cls, series: str, what: str, probe: str, kind: str, finding: Finding, note: str = "") -> Check:
        """A check to be judged."""
        return cls(
            series, what, probe, kind, finding.theory, finding.estimate, finding.standard_error, finding.log_p,
            note=note, finding=finding,
        )  # fmt: skip

    @classmethod
    def fact(cls, series: str, what: str, probe: str, fault: str, note: str = "") -> Check:
        """A fact that holds or not, without chance: `fault` is empty when it holds."""
        outcome = "departs" if fault else "agrees"
        return cls(series, what, probe, "structure", outcome=outcome, note=fault or note)

    @property
    def p(self) -> float | None:
        return None if self.log_p is None else math.exp(self.log_p)

    def row(self) -> dict[str, Any]:
        """The check as plain data: the keys of COLUMNS, None for what is not known."""
        values = {name: getattr(self, name) for name in COLUMNS}
        return {k: _plain(v) for k, v in values.items()}


def _plain(value: Any) -> Any:
    if isinstance(value, float | np.floating):
        return float(value) if math.isfinite(value) else None
    return value


def holm(p: ArrayLike) -> NDArray[np.float64]:
    """Adjusted p-values: the family-wise level at which each would be rejected.

    Holm (1979), A simple sequentially rejective multiple test procedure.
    """
    p = np.asarray(p, dtype=float)
    order = np.argsort(p, kind="stable")
    scaled = p[order] * np.arange(p.size, 0, -1)
    adjusted = np.empty_like(p)
    adjusted[order] = np.minimum(1.0, np.maximum.accumulate(scaled)) if p.size else scaled
    return adjusted


class Verdict:
    """Whether an ensemble has the behaviour that its spec states.

    Attributes
    ----------
    agrees : bool or None
        True: no check departs. False: at least one does. None: nothing could be judged, or nothing about the spread
        of some series that has chance in it.
    checks : pandas.DataFrame
        One row a check, in the columns of `validate --json`, departures first.
    counts : dict
        Outcome -> number of checks.
    coverage : list of Coverage
        What of each series was judged, and what was not, with the reasons.
    title : str
        The verdict in one line, with what it does not cover.
    headline : list of str
        The departures in plain words, the largest disagreement first.
    false_alarm : float
        Probability that a true ensemble is said to depart, at most.
    """

    def __init__(
        self, rows: Sequence[Check], false_alarm: float, about: dict[str, Any] | None = None, origin: Any = None
    ):
        self.false_alarm = false_alarm
        self.about = about or {}
        self.origin = origin  # where the values came from: a report reads some of them again for its pictures
        self.rows = list(rows)
        _judge(self.rows, false_alarm)
        self.explain([])

    def explain(self, causes: Sequence[Check]) -> None:
        """Put facts that say why something departs before all that departs."""
        self.rows = sorted([*causes, *self.rows], key=_rank)
        self.counts = dict(Counter(row.outcome for row in self.rows))

    @property
    def agrees(self) -> bool | None:
        if self.counts.get("departs"):
            return False
        if blind(self.coverage):
            return None
        return True if any(row.outcome == "agrees" and row.kind != "structure" for row in self.rows) else None

    @property
    def verdict(self) -> str:
        """ "agrees", "departs" or "untestable"."""
        return {True: "agrees", False: "departs", None: "untestable"}[self.agrees]

    @cached_property
    def coverage(self) -> list[Coverage]:
        return coverage(self.rows, self.about)

    @property
    def complete(self) -> bool:
        """Whether of every series each side of its behaviour that can be asked for was judged."""
        return bool(self.coverage) and not any(each.missing for each in self.coverage)

    @property
    def title(self) -> str:
        part = self.about.get("judged_on")
        return title(self.verdict, self.coverage) + (f" ({part})" if part else "")

    @property
    def checks(self) -> Any:
        import pandas as pd

        return pd.DataFrame([row.row() for row in self.rows], columns=list(COLUMNS))

    @property
    def told(self) -> list[Told]:
        """The departures in plain words, each with what may follow from it, the largest disagreement first."""
        from procgen.checks.common import users

        spec = getattr(self.origin, "spec", None)
        return _told(self.rows, {} if spec is None else users(spec))

    @property
    def headline(self) -> list[str]:
        return [each.line for each in self.told]

    def to_dict(self) -> dict[str, Any]:
        """The verdict as plain data, in the shape of `validate --json`.

        `judged` has a record for each series and pair: `all` tells whether every side of it was judged.
        """
        return {
            "verdict": self.verdict,
            "title": self.title,
            "headline": self.headline,
            "judged": [each.to_dict() for each in self.coverage],
            "false_alarm": self.false_alarm,
            "checks": [row.row() for row in self.rows],
        }

    def to_json(self) -> str:
        """The verdict as JSON text."""
        import json

        return json.dumps(self.to_dict(), ensure_ascii=False, allow_nan=False)

    def text(self, rows: int = 8) -> str:
        """The verdict for a terminal, with the `rows` smallest p."""
        from procgen.report.text import verdict_text

        return verdict_text(self, rows)

    def to_html(self, path: str | Path, overwrite: bool = False) -> Path:
        """Write the verdict, with pictures of what it saw, as one self-contained page; returns its path.

        A file that is there is replaced where procgen wrote it, any other one with `overwrite`. Raises PictureError
        when it cannot be written.
        """
        from procgen.report.html import write_verdict

        return write_verdict(self, Path(path), overwrite)

    def __str__(self) -> str:
        return self.text()

    def __repr__(self) -> str:
        return f"Verdict({self.verdict}, {', '.join(f'{n} {what}' for what, n in self.counts.items())})"


def _judge(rows: list[Check], false_alarm: float) -> None:
    """Outcomes and detectable sizes. What cannot be trusted down to the level needed leaves the family first."""
    judged = [row for row in rows if row.log_p is not None and not row.outcome]
    for _ in range(2):
        # The same checks are judged at every level but the strictest: what would be untestable at one is no finding at
        # another, which asks for less.
        level = min(false_alarm, USUAL) / max(1, len(judged))
        for row in judged:
            reason = row.finding.doubt(level) if row.finding else None
            if reason:
                row.outcome, row.note, row.log_p = "untestable", _join(reason, row.note), None
        judged = [row for row in judged if not row.outcome]
    level = false_alarm / max(1, len(judged))
    adjusted = holm([math.exp(row.log_p or 0.0) for row in judged])
    for row, p in zip(judged, adjusted, strict=True):
        row.outcome = "departs" if p <= false_alarm else "agrees"
        row.detectable = row.finding.detect(level) if row.finding else None


def _join(*parts: str) -> str:
    return "; ".join(part for part in parts if part)


def _rank(row: Check) -> tuple[int, float]:
    order = {"departs": 0, "agrees": 1, "untestable": 2, "reported": 3}
    if row.outcome == "departs" and row.log_p is None:
        return 0, -math.inf
    return order[row.outcome], row.log_p if row.log_p is not None else 0.0


def _told(rows: Sequence[Check], shared: Mapping[str, Sequence[str]], most: int = 8) -> list[Told]:
    """What departs, once a series, what explains most first; what is wrong with the structure before all.

    `shared`: bodies that several series use, and these; they stand for series that depart alike.
    """
    from procgen.checks import common
    from procgen.checks.attribution import departures

    told, more = common.tell(departures(rows), shared), "and {} more series, see the table"
    return told[:most] + ([common.Told(more.format(len(told) - most))] if len(told) > most else [])
