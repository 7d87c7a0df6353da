"""Which departures are told first: of all that departs, what explains the most, before what follows from it.

The measure of a departure is its gain: the log-likelihood that is gained, in units of nats, when it alone is allowed
for. For one statistic that is close to −log p, but for products of shocks: a wrong level or spread makes those as
large as one likes, so that their gain is counted against the size which the shocks are seen to have.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

from procgen.checks.lifted import SCORE, Lifted
from procgen.checks.words import FARTHEST, FARTHEST_SHOCK, LED, SCATTER, START, is_signed, of_stays, sort_of

if TYPE_CHECKING:
    from procgen.checks.verdict import Check

_WHOLE_LAW = (
    "law", "shocks: distribution function", "shocks: within the law's ends", "share below", "share of", FARTHEST,
    FARTHEST_SHOCK,
)  # fmt: skip
_LEVEL = 0.001  # at which what copies make would be no departure
_SHAPE = "shocks: shape of the law"
_PRODUCTS = ("shocks: autocorrelation", "shocks: neighbouring paths", "shocks: correlation between series")
_SIZES = ("shocks: variance", "shocks: spread score")
_LIKE = 0.5  # share of the shocks' log variance that the values' must show to be called a matter of spread
_LED = 0.2  # share of the gain by the law and size of ranks that their memory must have, to be behind these
_FAR = 1.0  # a shift of the shocks, in their sd, that a bounded score of their spread sees as spread

Groups = list[list["Check"]]


def departures(rows: Sequence[Check]) -> list[Groups]:
    """What departs, by series and then by kind, in the order in which it is to be told.

    What is wrong with the structure comes before all, then the series with the largest gain; in each series the kind
    that explains most comes first, and the kinds that may follow from it after.
    """
    series: dict[str, list[Check]] = {}
    for row in rows:
        series.setdefault(row.series, []).append(row)
    sizes = {name: _size(mine) for name, mine in series.items()}
    copied = _of_copies(rows)
    found: list[Groups] = []
    for mine in series.values():
        facts = [row for row in mine if row.outcome == "departs" and sort_of(row) == "structure"]
        told = copied.keys() | {id(row) for row in facts}
        rest = [row for row in mine if id(row) not in told]
        found += [_by_kind(facts, sizes)] if facts else []
        found += [_of_series(rest, sizes)] if any(row.outcome == "departs" for row in rest) else []
    for groups in found:
        behind = next((row for row in groups[0] if row.copied is not None), None)
        groups += _by_kind([row for of, row in copied.values() if of is behind], sizes)
    return sorted(found, key=lambda groups: (groups[0][0].kind != "structure", -_largest(groups, sizes)))


def _largest(groups: Groups, sizes: Mapping[str, float]) -> float:
    return max(_gain(group[0], sizes) for group in groups)


def _of_copies(rows: Sequence[Check]) -> dict[int, tuple[Check, Check]]:
    """What follows from paths that are copies of each other: id of a row -> the row that tells of them, and it.

    A kind of departure in a series does, or does not, as a whole.
    """
    tells = {row.series: row for row in rows if row.copied is not None and row.outcome == "departs"}
    if not tells:
        return {}
    needed = math.log(sum(row.log_p is not None for row in rows) or 1) - math.log(_LEVEL)
    found, others = {}, set()
    for row in rows:
        behind = [tells[name] for name in row.series.split(" ~ ") if name in tells]
        both = len(behind) == len(row.series.split(" ~ "))
        if both and all(one.copied is not None and one.copied.explains(row, needed) for one in behind):
            found[id(row)] = behind[0], row
        elif row.outcome == "departs":
            others.add((row.series, sort_of(row)))
    mine = {key: pair for key, pair in found.items() if (pair[1].series, sort_of(pair[1])) not in others}
    return {key: (behind, row) for key, (behind, row) in mine.items() if row.outcome == "departs"}


def _by_kind(rows: Sequence[Check], sizes: Mapping[str, float]) -> Groups:
    kinds: dict[tuple[str, str], list[Check]] = {}
    for row in sorted(rows, key=lambda row: -_gain(row, sizes)):
        kinds.setdefault((row.series, sort_of(row)), []).append(row)
    return list(kinds.values())


def _of_series(rows: Sequence[Check], sizes: Mapping[str, float]) -> Groups:
    kinds: dict[str, list[Check]] = {}
    for row in sorted(rows, key=lambda row: -_gain(row, sizes)):
        if row.outcome == "departs":
            kinds.setdefault(sort_of(row), []).append(row)
    stays = [row for row in kinds.get("memory", ()) if of_stays(row)]
    if stays:  # a series of states is judged by them: all else that is off about it follows
        kinds["memory"] = stays + [row for row in kinds["memory"] if not of_stays(row)]
        return [kinds[kind] for kind in sorted(kinds, key=lambda kind: (kind != FARTHEST, kind != "memory"))]
    follows = _following(rows, kinds) | _lifted(rows, kinds, sizes) | _led(kinds)
    order = sorted(kinds, key=lambda kind: (kind != FARTHEST, kind in follows, -_gain(kinds[kind][0], sizes)))
    if order:
        behind = _BEHIND.get(order[0], _nothing)(rows, kinds)
        order = [kind for kind in (behind, *(kind for kind in order if kind != behind)) if kind]
    return [_plainest_first(kinds[kind], sizes) for kind in order]


def _plainest_first(group: list[Check], sizes: Mapping[str, float]) -> list[Check]:
    """What is off at all steps alike is told before what is off step by step, if it is most of it.

    A value that is absurd by itself is told before the shock that it is, and how large the start is before its scatter.
    """
    if sort_of(group[0]) == FARTHEST:
        return sorted(group, key=lambda row: row.what != FARTHEST)
    if group[0].what == SCATTER:
        return sorted(group, key=lambda row: row.what != START)
    if not group[0].what.endswith((" by step", " by phase")):
        return group
    alike = [row for row in group if is_signed(row) and _gain(row, sizes) >= _LIKE * _gain(group[0], sizes)]
    return [*alike[:1], *(row for row in group if row not in alike[:1])]


def _gain(row: Check, sizes: Mapping[str, float]) -> float:
    if row.log_p is None:
        return 0.0 if row.what in _WHOLE_LAW else math.inf
    if row.what in _PRODUCTS:
        return -row.log_p / math.prod(max(1.0, sizes.get(name, 1.0)) for name in row.series.split(" ~ "))
    return -row.log_p


def _size(rows: Sequence[Check]) -> float:
    """Mean square of the shocks of a series, 1 when it is as stated."""
    seen = {row.what: row.estimate or 0.0 for row in rows if row.what in ("shocks: variance", "shocks: mean")}
    return seen.get("shocks: variance", 1.0) + seen.get("shocks: mean", 0.0) ** 2


def _following(rows: Sequence[Check], kinds: Mapping[str, list[Check]]) -> set[str]:
    """Kinds that say nothing of their own, for a level or spread that is found wrong makes them.

    A test of the whole law sees a wrong mean or variance too. The shape of the law, and the scores of spread, are
    blind to small ones only: they follow from a shift, or a scale, that alone would make half of what is seen.
    """
    simple = kinds.keys() & {"level", "spread"}
    if not simple or not kinds.keys() & {"law", "spread"}:
        return set()
    from procgen.checks.shape import moved

    found, follows = moved({row.what: row for row in rows}), set()
    law = [row for row in kinds.get("law", ()) if not row.what.startswith(_WHOLE_LAW)]
    if all(row.what == _SHAPE and _LIKE * (row.estimate or 0.0) <= found.shape for row in law):
        follows.add("law")
    scores = [row for row in kinds.get("spread", ()) if row.what == "shocks: spread score"]
    if "level" in simple and scores and abs(found.shift) >= _FAR:
        if all(_LIKE * abs(row.estimate or 0.0) <= found.spread_score for row in scores):
            follows.add("spread")
    return follows


def _lifted(rows: Sequence[Check], kinds: Mapping[str, list[Check]], sizes: Mapping[str, float]) -> set[str]:
    """Kinds of which the level explains all that weighs more than itself: squares and products about a mean."""
    if "level" not in kinds:
        return set()
    lifted, level = Lifted(rows), _gain(kinds["level"][0], sizes)
    more = {kind: [row for row in group if _gain(row, sizes) > level] for kind, group in kinds.items()}
    return {kind for kind, group in more.items() if group and all(lifted.explains(row) for row in group)}


def _led(kinds: Mapping[str, list[Check]]) -> set[str]:
    """Kinds of ranks alone that a memory explains: where it is off, ranks given the past have other sizes, too."""
    led = max((-(row.log_p or 0.0) for row in kinds.get("memory", ()) if row.what == LED), default=0.0)
    return {
        kind
        for kind in kinds.keys() & {"law", "spread", "clustering"}
        if all(row.what.startswith("shocks: ") and _LED * -(row.log_p or 0.0) <= led for row in kinds[kind])
    }


def _nothing(rows: Sequence[Check], kinds: Mapping[str, list[Check]]) -> str | None:
    return None


def _behind_spread(rows: Sequence[Check], kinds: Mapping[str, list[Check]]) -> str | None:
    """What is behind shocks of another size in a series whose own variance is as stated.

    The shocks are what is left when memory, or the conditional variance, is taken away. Where too much or too little
    is left of values that spread as they should, it is memory or clustering that is not as stated, or their law.
    """
    shocks = [row for row in rows if row.what in _SIZES and row.outcome == "departs"]
    stated = {row.theory for row in rows if row.what == "variance"}
    behind = max(("memory", "clustering", "law"), key=lambda kind: _top(kinds, kind))
    moved = _moved(rows, "variance over steps")
    in_values = not kinds["spread"][0].what.startswith("shocks: ")
    if in_values or not shocks or moved is None or not _one_value(stated) or not _top(kinds, behind):
        return None
    return behind if abs(moved) < _LIKE * _log_variance(shocks[0]) else None


def _behind_memory(rows: Sequence[Check], kinds: Mapping[str, list[Check]]) -> str | None:
    """Spread, where the slope on earlier steps has changed only because more, or less, of the variance is noise."""
    variance, slope = _moved(rows, "variance over steps"), _moved(rows, "slope over steps")
    if "spread" not in kinds or variance is None or slope is None or _turned(rows) or "spread" in _led(kinds):
        return None
    return "spread" if abs(slope + variance) < _LIKE * abs(variance) else None


def _turned(rows: Sequence[Check]) -> bool:
    """Whether the steepest slope on earlier steps has the other sign: noise takes from a slope, but turns none."""
    known = [(row.theory, row.estimate) for row in rows if row.what == "slope over steps" and row.theory]
    theory, estimate = max(known, key=lambda pair: abs(pair[0]), default=(1.0, 1.0))
    return estimate is not None and estimate / theory < -_LIKE


_BEHIND = {"spread": _behind_spread, "memory": _behind_memory}


def _moved(rows: Sequence[Check], what: str) -> float | None:
    """Logarithm of estimate over theory of the first check of this name."""
    for row in rows:
        if row.what == what and row.theory and row.estimate and row.estimate / row.theory > 0:
            return math.log(row.estimate / row.theory)
    return None


def _one_value(numbers: set[float | None]) -> bool:
    known = [x for x in numbers if x is not None]
    return bool(known) and max(known) - min(known) <= 1e-6 * max(known)


def _top(kinds: Mapping[str, list[Check]], kind: str) -> float:
    """The largest −log p of a kind among the tests that answer to it alone."""
    return max((-(row.log_p or 0.0) for row in kinds.get(kind, ()) if not row.what.startswith(_WHOLE_LAW)), default=0.0)


def _log_variance(row: Check) -> float:
    """How far the shocks' variance is from the stated one, as a logarithm."""
    if row.what == "shocks: variance":
        return abs(math.log(max(row.estimate or 0.0, 1e-300)))
    return SCORE * abs(row.estimate or 0.0)
