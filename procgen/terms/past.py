"""Series that leave from their recorded past: a spec is rewritten into one whose terms start where the past left them.

Done once, when a graph is built: all that follows (values, theory, checks, reports) sees ordinary terms with an
explicit `before` or `start`, and where the past leaves something open, a part `open_start` that is drawn once a path.
"""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import replace
from typing import Any, NoReturn

import numpy as np

from procgen.spec.entries import walk
from procgen.spec.model import Entry, Fault, Frozen, Place, Series, Spec, SpecError
from procgen.spec.records import dataclass
from procgen.spec.varying import varying_of
from procgen.terms.base import Array, Node, Unknown
from procgen.terms.combine import Exp
from procgen.terms.open_start import OPEN
from procgen.terms.past_filter import StateSpace, Through, factor, filtered
from procgen.terms.past_parts import Part, part_of, recursion_of, unscaled
from procgen.terms.past_single import single
from procgen.terms.shape import Logit, Sigmoid

KEPT = 32  # series whose conditioning is kept, for the graphs that are built again
_kept: OrderedDict[int, tuple[Series, Series, Left]] = OrderedDict()


@dataclass(frozen=True)
class Left:
    """What a series leaves from: how many values, the last, what could not be conditioned, what is not used."""

    count: int
    last: float
    unconditioned: tuple[str, ...] = ()
    replaced: tuple[str, ...] = ()


def leaving(spec: Spec) -> tuple[Spec, Mapping[str, Left]]:
    """The spec with every series that has a past rewritten, and what each leaves from.

    SpecError where a past cannot be told to the terms, or they are used in a way that would not know of it.
    """
    past = {name: one for name, one in spec.series.items() if one.before is not None}
    if not past:
        return spec, {}
    plain = replace(spec, series=Frozen({name: replace(one, before=None) for name, one in spec.series.items()}))
    found, lefts = dict(plain.series), {}
    for name, one in past.items():
        found[name], lefts[name] = _conditioned(plain, name, one)
    for name, left in lefts.items():
        said = (*left.unconditioned, *_tied(spec, name), *_alone(spec, name, found[name]))
        lefts[name] = replace(left, unconditioned=said)
    return replace(plain, series=Frozen(found)), lefts


def refuse_varying(spec: Spec) -> None:
    """SpecError where a number that is drawn by path stands in a series that leaves from its past."""
    for owner, varying in varying_of(spec):
        if owner in spec.series and spec.series[owner].before is not None:
            what = f"{varying.name or varying.label} is drawn by path in {owner}, which leaves from its recorded past"
            _refuse(spec.series[owner].place, f"{what}: expected numbers there; write one, or remove before")


def _conditioned(plain: Spec, name: str, one: Series) -> tuple[Series, Left]:
    if id(one) in _kept and _kept[id(one)][0] is one:
        return _kept[id(one)][1:]
    made = _Departure(plain, name, one).made()
    if not any(entry.kind == "use" for entry, _ in walk(one.of)):  # else it follows from other bodies too
        _kept[id(one)] = (one, *made)
        while len(_kept) > KEPT:
            _kept.popitem(last=False)
    return made


class _Departure:
    """Conditions one series on its past."""

    def __init__(self, plain: Spec, name: str, one: Series):
        from procgen.terms.graph import Graph

        self.plain, self.name, self.one = plain, name, one
        self.past = np.array(one.before)
        self.graph = Graph(plain)
        nodes = [self.graph._entry(entry, name) for entry in one.of]
        self.random = [(e, unscaled(n)) for e, n in zip(one.of, nodes, strict=True) if self._moves(n)]
        self.known = [e for e in one.of if not any(e is other for other, _ in self.random)]

    def made(self) -> tuple[Series, Left]:
        self._refuse_misfits()
        rest = self.past - self._known_values()
        entry, node = self.random[0]
        if len(self.random) == 1 and isinstance(node.term, Exp | Sigmoid | Logit):
            return self._within(entry, node, rest / entry.times)
        parts = [part_of(entry, node) for entry, node in self.random]
        recursion = recursion_of(node.term)
        exact = node.term.noise or (recursion is not None and not recursion.theta)
        said: tuple[str, ...] = ()
        extra: tuple[Entry, ...] = ()
        if len(parts) == 1 and (parts[0] is None or (exact and len(rest) >= self._lags(recursion))):
            told = single(entry, node, rest / entry.times)
            if isinstance(told, Unknown):
                _refuse(entry.place, f"{node.name} cannot leave from the past of {self.name}: {told.reason}")
            new, said = [told[0]], told[1]
            extra = (self._open(None),) if node.term.kind == "white_noise" else ()
        else:
            new, extra = self._filtered([part for part in parts if part is not None], rest)
        by_id = {id(e): changed for (e, _), changed in zip(self.random, new, strict=True)}
        body = tuple([by_id.get(id(e), e) for e in self.one.of])
        left = Left(len(self.past), float(self.past[-1]), said, tuple(self._replaced(new)))
        return replace(self.one, of=(*body, *extra), before=None), left

    def _within(self, entry: Entry, node: Node, values: Array) -> tuple[Series, Left]:
        """The series whose only random part is an exponential or an S-curve: its body leaves from what that undoes."""
        if isinstance(node.term, Exp) and not np.all(values > 0.0):
            worst = int(np.argmin(values))
            _refuse(
                entry.place,
                f"the past of {self.name} is not one of {node.name}: expected values above 0, as an exponential has, "
                f"got {float(values[worst])!r} at step {worst - len(values)} when what is known beside it is taken off",
            )
        undone = node.term.invert(values[:, None], [None], None, np.arange(-len(values), 0))
        if isinstance(undone, Unknown):
            _refuse(
                entry.place,
                f"the past of {self.name} is not one of {node.name}: {undone.reason}, when what is known beside it is "
                "taken off",
            )
        inner = replace(self.one, of=entry.bodies["of"], before=tuple(undone[0][:, 0].tolist()))
        told, left = _Departure(self.plain, self.name, inner).made()
        new = replace(entry, bodies=Frozen({**entry.bodies, "of": told.of}))
        body = tuple([new if e is entry else e for e in self.one.of])
        return replace(self.one, of=body, before=None), replace(left, last=float(self.past[-1]))

    def _replaced(self, new: Sequence[Entry]) -> Iterator[str]:
        """The numbers that stand in the spec for where a term begins, and give way to the record."""
        for (entry, node), changed in zip(self.random, new, strict=True):
            for p in node.term.parameters:
                if p.name in ("start", "slope") and changed is not entry and entry.values[p.name] != p.default:
                    yield f"{p.name} of {node.name}"

    def _moves(self, node: Node) -> bool:
        from procgen.terms.graph import Source

        return any(isinstance(part, Source) for part in self.graph.order([node]))

    def _lags(self, recursion: Any) -> int:
        return 0 if recursion is None else len(recursion.phi) + len(recursion.delta)

    def _refuse_misfits(self) -> None:
        if not self.random:
            _refuse(self.one.place, f"nothing in {self.name} is random, so its past changes nothing; remove before")
        for entry, node in self.random:
            where = f"{node.name} ({entry.kind})"
            for inner, _ in walk((entry,)):
                if inner.values.get("before") is not None:
                    _refuse(inner.place, f"{where} has a `before` of its own, and so has the series; remove one")
            if entry.kind == "use":
                _refuse(
                    entry.place,
                    f"what {self.name} uses has a state that others may see; write its terms here, or leave before out "
                    f"at {self.name}",
                )
            if entry.times == 0.0:
                _refuse(entry.place, f"{where} is multiplied by 0, and its past is lost; take it out")
        apart = [(e, n) for e, n in self.random if part_of(e, n) is None]
        if apart and len(self.random) > 1:
            entry, node = apart[0]
            _refuse(
                entry.place,
                f"the past of {self.name} does not tell its parts apart: expected normal shocks and linear terms where "
                f"there are several, got {node.name} ({entry.kind}); leave before out at the series and give single "
                "terms their own, or take the term out",
            )

    def _known_values(self) -> Array:
        """The terms without chance at the steps of the past: lagged by its length, they are run from step 0."""
        from procgen.terms.graph import Graph
        from procgen.terms.run import Run

        count = len(self.past)
        if not self.known:
            return np.zeros(count)
        values, bodies = Frozen({"by": count}), Frozen({"of": tuple(self.known)})
        lagged = Entry("lag", "lag", 1.0, values, bodies, None, self.one.place)
        recorded = f"what is known of {self.name}"
        series = Frozen({**self.plain.series, recorded: replace(self.one, of=(lagged,), before=None)})
        graph = Graph(replace(self.plain, series=series))
        graph.series = {recorded: graph.series[recorded]}
        return Run(graph, 0, 1).tile(count)[recorded][:, 0]

    def _filtered(self, parts: Sequence[Part], values: Array) -> tuple[list[Entry], tuple[Entry, ...]]:
        steps = np.arange(-len(values), 0)
        for part in parts:
            values = values - part.entry.times * part.path(steps)
        space = _joined([part.space for part in parts])
        if not len(space.row):
            return [part.entry for part in parts], (self._open(None),)
        if len(values) < space.free.shape[1]:
            self._too_short(space.free.shape[1], len(values))
        state = filtered(space, values)
        if state is None:
            _refuse(self.one.place, f"the values of {self.name} are told by those before them, without any chance")
        if state.untold and len(values) < len(space.row):
            self._too_short(len(space.row), len(values))
        through, told, end = Through(space.transition), [], 0
        at_zero, shocked = through(state.mean), np.zeros(len(space.row), bool)
        for part in parts:
            own, end = slice(end, end + len(part.space.row)), end + len(part.space.row)
            told.append(part.told((at_zero if part.at_zero else state.mean)[own]))
            shocked[own] = part.at_zero
        covariance = through.around(state.covariance)
        covariance = covariance + np.where(shocked[:, None] & shocked[None, :], space.added, 0.0)
        return told, (self._open(space, factor(covariance, np.diagonal(covariance))),)

    def _too_short(self, needs: int, got: int) -> NoReturn:
        _refuse(
            self.one.place,
            f"expected at least {needs} values before step 0 to tell where the parts of {self.name} stand, got {got}; "
            "add earlier ones",
        )

    def _open(self, space: StateSpace | None, loading: Array | None = None) -> Entry:
        """The part that is what the past leaves open; without any, it only says that there is nothing before step 0."""
        values: dict[str, Any] = {"row": (), "transition": (), "loading": ()}
        if space is not None and loading is not None and loading.shape[1]:
            a = space.transition
            triples = [(int(i), int(j), float(a[i, j])) for i, j in np.argwhere(a)]
            values = {"row": tuple(space.row.tolist()), "transition": tuple(triples)}
            values["loading"] = tuple([tuple(row) for row in loading.tolist()])
        labels = {entry.label for entry, _ in walk(self.one.of)}
        label = OPEN
        while label in labels:
            label += "_"
        return Entry(OPEN, label, 1.0, Frozen(values), Frozen(), None, self.one.place)


def _joined(spaces: Sequence[StateSpace]) -> StateSpace:
    """The sum of independent parts."""

    def beside(blocks: Sequence[Array]) -> Array:
        out = np.zeros((0, 0))
        for block in blocks:
            i, j = out.shape
            out = np.pad(out, ((0, block.shape[0]), (0, block.shape[1])))
            out[i:, j:] = block
        return out

    measured = 0.0
    for space in spaces:
        measured = measured + space.measured
    return StateSpace(
        beside([s.transition for s in spaces]),
        beside([s.added for s in spaces]),
        np.concatenate([s.row for s in spaces]),
        measured,
        beside([s.initial for s in spaces]),
        beside([s.free for s in spaces]),
    )


def _alone(spec: Spec, name: str, one: Series) -> Iterator[str]:
    """What is to be said of parts that are used by themselves, where the past tells only their sum."""
    opened = any(entry.kind == OPEN and entry.values["row"] for entry, _ in walk(one.of))
    bodies = [*(other.of for other in spec.series.values()), *(other.of for other in spec.shared.values())]
    named = [entry.values["name"] for body in bodies for entry, _ in walk(body) if entry.kind == "use"]
    parts = [full for full in dict.fromkeys(named) if full.startswith(f"{name}.")]
    if opened and parts:
        yield (
            f"{', '.join(parts)} by itself: a part runs from the mean of where it may stand, and what is open of all "
            f"parts together is {name}.{OPEN}"
        )


def _tied(spec: Spec, name: str) -> Iterator[str]:
    """What the past of other series would have told."""
    names, matrix = spec.correlation.names, spec.correlation.matrix
    own = [i for i, full in enumerate(names) if full.partition(".")[0] == name]
    others = [names[j] for i in own for j in range(len(names)) if j not in own and matrix[i][j] != 0.0]
    if others:
        yield (
            f"on the pasts of {', '.join(dict.fromkeys(others))}, whose shocks are correlated with its own: each "
            "series is conditioned on its own past alone, and shocks are correlated from step 0 on"
        )


def _refuse(place: Place, message: str) -> NoReturn:
    raise SpecError((Fault(place, message),))
