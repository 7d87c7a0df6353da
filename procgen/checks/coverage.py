"""What of each series a verdict has judged, and what it has not, with the reasons."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import TYPE_CHECKING, Any

from procgen.checks.words import SCATTER, START, alike, joined
from procgen.spec.records import dataclass

if TYPE_CHECKING:
    from procgen.checks.verdict import Check

SIDES = ("level", "spread", "memory", "clustering", "law", "dependence")
_NO_CHECK = "no check of it could be made"
_MOST = 3  # series or groups that a headline names
_OF_START = (START, SCATTER)  # which say nothing of what comes after


@dataclass(frozen=True)
class Coverage:
    """What was judged of one series, or of a pair of them.

    Attributes
    ----------
    series : str
    judged : tuple of str
        The sides of its behaviour, of SIDES, about which at least one check could decide.
    missing : dict
        Side that no check could decide -> why.
    still : bool
        Whether it has no chance in it: then its values themselves were compared.
    """

    series: str
    judged: tuple[str, ...]
    missing: Mapping[str, str]
    still: bool = False

    @property
    def blind(self) -> bool:
        """Whether its spread may be anything. A revealed term (its name has a dot) is a part, and hides nothing."""
        return not self.still and "spread" in self.missing and "." not in self.series

    def to_dict(self) -> dict[str, Any]:
        """Plain data; where there is no chance in a series its values were compared, and nothing is left."""
        return {
            "series": self.series,
            "all": not self.missing,
            "judged": ["values"] if self.still else list(self.judged),
            "not_judged": dict(self.missing),
        }


def blind(found: Sequence[Coverage]) -> bool:
    """Whether the spread of some series may be anything, and that of no other was judged."""
    unseen = [each for each in found if each.blind]
    seen = [each for each in found if "spread" in each.judged and " ~ " not in each.series]
    return bool(unseen) and not seen


def coverage(rows: Sequence[Check], about: Mapping[str, Any]) -> list[Coverage]:
    """Of every series and pair with checks of its behaviour, in the order of their names' first rows."""
    groups: dict[str, list[Check]] = {}
    for row in rows:
        if row.series and row.kind != "structure":
            groups.setdefault(row.series, []).append(row)
    return [_of(series, groups[series], about) for series in sorted(groups, key=lambda s: (" ~ " in s, s))]


def _of(series: str, rows: Sequence[Check], about: Mapping[str, Any]) -> Coverage:
    if all(_known(row) for row in rows):
        return Coverage(series, (), {}, still=any(row.outcome != "untestable" for row in rows))
    # a start beside its end says nothing of the size of either
    told = (row for row in rows if row.outcome in ("agrees", "departs") and row.what not in _OF_START)
    seen = {row.kind for row in told if not _known(row)}
    if any(row.what == "law" and row.outcome in ("agrees", "departs") for row in rows):
        seen |= {"level", "spread"}  # the whole law is stated, its mean and variance with it
    missing = {side: _why(side, rows) for side in _wanted(series, about) if side not in seen}
    return Coverage(series, tuple(side for side in SIDES if side in seen), missing)


def _known(row: Check) -> bool:
    """Whether a row is about what chance does not move."""
    return row.what in ("values", "constant") or row.note == "nothing is left to chance"


def _wanted(series: str, about: Mapping[str, Any]) -> Iterator[str]:
    """The sides that a series of this size has: one step has no memory, one path no neighbour."""
    if " ~ " in series:
        yield "dependence"
        return
    for side in SIDES:
        alone = about.get("steps") == 1 if side in ("memory", "clustering") else about.get("paths") == 1
        if not (alone and side in ("memory", "clustering", "dependence")):
            yield side


def _why(side: str, rows: Sequence[Check]) -> str:
    left = [row for row in rows if row.outcome in ("untestable", "reported") and row.note]
    mine = [row.note for row in left if row.kind == side]
    shocks = [row.note for row in left if row.what == "recovered shocks"]
    every = [row.note for row in left if row.what == "moments"]
    return (mine or shocks or every or [_NO_CHECK])[0]


def lines(found: Sequence[Coverage]) -> Iterator[str]:
    """A line for each sort of coverage, with the series that share it."""
    groups: dict[str, list[str]] = {}
    for each in found:
        groups.setdefault(_line(each), []).append(each.series)
    for text, series in groups.items():
        yield f"{', '.join(series)}: {text}"


def _line(each: Coverage) -> str:
    if each.still:
        return "every value, for nothing in it is left to chance"
    reasons: dict[str, list[str]] = {}
    said = alike(each.missing.values())
    for side, why in each.missing.items():
        reasons.setdefault(said[why], []).append(side)
    missing = "; ".join(f"{', '.join(sides)}, because: {why}" for why, sides in reasons.items())
    judged = ", ".join(each.judged) or "nothing"
    return judged + (f"; not judged: {missing}" if missing else "")


def title(verdict: str, found: Sequence[Coverage]) -> str:
    """The first line of a verdict: what it says, and of what it says nothing."""
    if verdict == "departs":
        return "DEPARTS from what the spec states"
    if verdict == "untestable":
        blind = [each for each in found if each.blind]
        if not any(each.judged or each.still for each in found) or not blind:
            return "CANNOT BE JUDGED: no check of the behaviour could be made"
        rest = [side for side in SIDES if any(side in each.judged for each in blind)]
        agreed = f"; only {joined(rest)} could be, and agree{'s' if len(rest) == 1 else ''}" if rest else ""
        names = _some([each.series for each in blind])
        return f"CANNOT BE JUDGED: nothing about the spread of {names} could be judged{agreed}"
    lacking: dict[tuple[str, ...], list[str]] = {}
    for each in sorted(found, key=lambda each: not each.blind):  # what may have any spread is named, however many
        if each.missing:
            lacking.setdefault(tuple(each.missing), []).append(each.series)
    if not lacking:
        return "AGREES: nothing departs from what the spec states"
    unseen = {each.series for each in found if each.blind}
    named = [sum(name in unseen for name in series) for series in lacking.values()]
    groups = zip(lacking.items(), named, strict=True)
    parts = [f"{joined(sides)} of {_some(series, most=many)}" for (sides, series), many in groups]
    moving = [each for each in found if not each.still and " ~ " not in each.series]
    common = [side for side in SIDES if all(side in each.judged for each in moving)]
    left = _some(parts, "; ", sum(map(bool, named)))
    return f"AGREES on {joined(common) or 'a part'} only: {left} could not be judged"


def _some(words: Sequence[str], between: str = ", ", most: int = 0) -> str:
    most = max(most, _MOST)
    more = f" and {len(words) - most} more" if len(words) > most else ""
    return between.join(words[:most]) + more
