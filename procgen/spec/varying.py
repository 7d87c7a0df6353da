"""Numbers that vary within a spec: where they stand, and the spec that has numbers in their place."""

from __future__ import annotations

from collections.abc import Callable, Container, Iterable, Iterator, Mapping
from dataclasses import replace
from itertools import product
from typing import TYPE_CHECKING, Any

from procgen.spec.model import Entry, Frozen, Series, Shared, Spec
from procgen.spec.records import dataclass

if TYPE_CHECKING:
    from procgen.spec.draws import DrawLaw

PATH, SERIES = "path", "series"
MOST_TRIALS = 1024
Values = Mapping[str, Any]
Issue = tuple[str, str]  # the name of a parameter, and what is wrong with it


@dataclass(frozen=True)
class Varying:
    """What stands in place of a number that is drawn: its law, and the address that its draws are found by.

    `name` is that in `parameters`; one written where it is used has the `label` "term.parameter" instead.
    The number is the draw over `scale`.
    """

    law: DrawLaw
    over: str
    name: str = ""
    label: str = ""
    scale: float = 1.0

    def __truediv__(self, scale: float) -> Varying:
        return replace(self, scale=self.scale * scale)

    def key(self, owner: str) -> str:
        """Return the name of the draw, as used in the body `owner`."""
        shared = self.name and self.over == PATH
        return self.name if shared else f"{owner}.{self.name or self.label}"

    def number(self, drawn: float) -> float:
        return drawn / self.scale if self.scale != 1.0 else drawn

    def __str__(self) -> str:
        return f"{self.name or self.label} ({self.law}, by {self.over})"


@dataclass(frozen=True)
class VaryingLaw:
    """What stands in place of a law some of whose numbers vary by series: its class, and its values."""

    law: Any
    values: Values

    @property
    def needs_spread(self) -> bool:
        """Whether it has no variance."""
        return self.law.scaled_by == "spread"

    @property
    def name(self) -> str:
        return str(self.law.name)

    def __str__(self) -> str:
        return self.name


def replaced(value: Any, by: Callable[[Varying], Any]) -> Any:
    """Return a value with every Varying in it replaced; the same object where there is none."""
    if isinstance(value, Varying):
        return by(value)
    if isinstance(value, VaryingLaw):
        made = [by(varying) for varying in found_in(value.values)]
        if not made:
            return value
        values = replaced(value.values, by)
        whole = all(isinstance(number, int | float) for number in made)
        return value.law(**values) if whole else value if values is value.values else VaryingLaw(value.law, values)
    if isinstance(value, tuple):
        parts = tuple([replaced(part, by) for part in value])
        return value if all(a is b for a, b in zip(parts, value, strict=True)) else parts
    if isinstance(value, Mapping):
        items = {key: replaced(part, by) for key, part in value.items()}
        return value if all(items[key] is value[key] for key in items) else Frozen(items)
    return value


def found_in(value: Any) -> list[Varying]:
    """Return every Varying within a value, in order."""
    found: list[Varying] = []

    def note(varying: Varying) -> Varying:
        found.append(varying)
        return varying

    replaced(value, note)
    return found


def labelled(values: Mapping[str, Any], label: str) -> dict[str, Any]:
    """Return the values of a term with the numbers that vary there labelled "term.parameter[.place]"."""
    return {name: _labelled(value, f"{label}.{name}") for name, value in values.items()}


def _labelled(value: Any, label: str) -> Any:
    if isinstance(value, Varying):
        return value if value.name or value.label else replace(value, label=label)
    if isinstance(value, VaryingLaw):
        return replace(value, values=_labelled(value.values, label))
    if isinstance(value, tuple):  # the first place goes without a number: a list may grow
        parts = [_labelled(part, label if i == 0 else f"{label}.{i + 1}") for i, part in enumerate(value)]
        return value if all(a is b for a, b in zip(parts, value, strict=True)) else tuple(parts)
    if isinstance(value, Mapping):
        items = {key: _labelled(part, f"{label}.{key}") for key, part in value.items()}
        return value if all(items[key] is value[key] for key in items) else Frozen(items)
    return value


def varying_of(spec: Spec) -> Iterator[tuple[str, Varying]]:
    """Yield every Varying of a spec with the name of the body that it stands in, bodies in their order."""
    bodies: dict[str, Series | Shared] = {**spec.shared, **spec.series}
    for owner, one in bodies.items():
        yield from ((owner, varying) for entry in one.of for varying in varying_in(entry))


def varying_in(entry: Entry) -> Iterator[Varying]:
    """Yield every Varying of an entry, of its shock and of its bodies."""
    yield from found_in((entry.times, entry.values))
    if entry.shock is not None:
        yield from varying_in(entry.shock)
    for body in entry.bodies.values():
        for inner in body:
            yield from varying_in(inner)


def fixed(spec: Spec, number: Callable[[str, Varying], Any], only: Container[str] | None = None) -> Spec:
    """Return a spec with `number(owner, varying)` in place of every Varying; the same one where there is none.

    `only`: the bodies that any of them stands in, where that is known.
    """

    def entry(old: Entry, owner: str) -> Entry:
        times, values = replaced((old.times, old.values), lambda varying: number(owner, varying))
        shock = None if old.shock is None else entry(old.shock, owner)
        bodies = {name: body(inner, owner) for name, inner in old.bodies.items()}
        same = times is old.times and values is old.values and shock is old.shock
        if same and all(bodies[name] is old.bodies[name] for name in bodies):
            return old
        return replace(old, times=times, values=values, shock=shock, bodies=Frozen(bodies))

    def body(old: tuple[Entry, ...], owner: str) -> tuple[Entry, ...]:
        new = tuple([entry(one, owner) for one in old])
        return old if all(a is b for a, b in zip(new, old, strict=True)) else new

    def owners(old: Mapping[str, Any]) -> Mapping[str, Any]:
        kept = {name: (one, one.of) for name, one in old.items()} if only is not None else {}
        new = kept | {name: (one, body(one.of, name)) for name, one in old.items() if only is None or name in only}
        if all(of is one.of for one, of in new.values()):
            return old
        return Frozen({name: one if of is one.of else replace(one, of=of) for name, (one, of) in new.items()})

    series, shared = owners(spec.series), owners(spec.shared)
    if series is spec.series and shared is spec.shared:
        return spec
    return replace(spec, series=series, shared=shared)


def tried(values: Any) -> Iterator[tuple[Any, dict[Varying, float]]]:
    """Yield values with numbers of their draws in place of what varies: the corners first, then between them."""
    found = list(dict.fromkeys(found_in(values)))
    for choice in _choices([varying.law.trials() for varying in found]):
        numbers = dict(zip(found, choice, strict=True))
        yield replaced(values, _numbers(numbers)), numbers


def _numbers(draws: Mapping[Varying, float]) -> Callable[[Varying], float]:
    return lambda varying: varying.number(draws[varying])


def _choices(trials: list[tuple[float, ...]]) -> Iterator[tuple[float, ...]]:
    """Corners and points between them, as many in each direction as keep the whole number small."""
    for count in (9, 5, 3, 2):
        if count == 2 or count ** len(trials) <= MOST_TRIALS:
            grids = [_grid(each, count) for each in trials]
            break
    if 2 ** len(trials) > MOST_TRIALS:  # one at a time at its other end
        low = [each[0] for each in trials]
        yield tuple(low)
        yield tuple(each[-1] for each in trials)
        for i, each in enumerate(trials):
            yield (*low[:i], each[-1], *low[i + 1 :])
        return
    yield from product(*([grid[0], grid[-1]] for grid in grids))
    yield from product(*grids)


def _grid(trials: tuple[float, ...], count: int) -> list[float]:
    if len(trials) != 2:
        return list(trials)
    low, high = trials
    return [low + (high - low) * k / (count - 1) for k in range(count)]


def joint_issues(check: Callable[[Values], Iterable[Issue]], values: Values) -> Iterator[Issue]:
    """Yield what a kind says of its parameters together; of ones that vary, at the first of their draws it refuses."""
    if not found_in(values):
        yield from check(values)
        return
    for numbers_in, numbers in tried(values):
        issues = list(check(numbers_in))
        if issues:
            told = _told(check, values, numbers)
            yield from ((name, f"{message}; {told}") for name, message in issues)
            return


def _told(check: Callable[[Values], Iterable[Issue]], values: Values, numbers: Mapping[Varying, float]) -> str:
    """Which draws are refused, and how far they may go."""
    at = " and ".join(f"{varying.name or varying.label} = {number:.6g}" for varying, number in numbers.items())
    told = f"this is at {at}, which the draws reach"
    if len(numbers) > 1:
        return told
    ((varying, bad),) = numbers.items()

    def sound(number: float) -> bool:
        return not list(check(replaced(values, lambda each: each.number(number))))

    good = next((x for x in sorted(_grid(varying.law.trials(), 9), key=lambda x: abs(x - bad)) if sound(x)), None)
    if good is None:
        return told
    low, high = good, bad
    for _ in range(60):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if sound(middle) else (low, middle)
    side = "below" if bad > good else "above"
    return f"{told}; keep them {side} {high:.6g}"
