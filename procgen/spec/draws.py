"""Laws that a parameter is drawn from: what may be written, and between which values the draws lie."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any, ClassVar

from procgen.spec.declare import INVALID, Domain, Parameter, Real, Reals, Schema, mapping, mapping_of, read_parameters
from procgen.spec.domains import Reading
from procgen.spec.model import Frozen
from procgen.spec.records import dataclass
from procgen.spec.tree import Tree
from procgen.spec.words import did_you_mean, one_of

MOST_TRIALS = 50
MOST_AWAY = 30.0  # standard deviations: an area of 1e-197, which has all its digits
FAR = 40.0  # standard deviations: where the rules of a parameter are tried when its law has no bounds


@dataclass(frozen=True)
class Interval(Domain):
    """Two numbers, the lower one first; read as a tuple of floats."""

    def describe(self) -> str:
        return "two numbers, the lower one first, as in [0.3, 0.9]"

    def read(self, tree: Tree, reader: Reading) -> Any:
        if not tree.is_list or len(tree.value) != 2:
            return reader.expected(tree, self.describe())
        ends = tuple([Real().read(end, reader) for end in tree.value])
        if INVALID in ends:
            return INVALID
        if ends[0] < ends[1]:
            return ends
        low, high = sorted(ends)
        mend = f"write [{low:g}, {high:g}]" if low < high else "give two, or write the number itself"
        reader.fault(tree, f"expected the low end below the high one, got [{ends[0]:g}, {ends[1]:g}]; {mend}")
        return INVALID

    def schema(self) -> Schema:
        return {"type": "array", "items": {"type": "number"}, "minItems": 2, "maxItems": 2}


class DrawLaw:
    """The law of a drawn parameter."""

    name: ClassVar[str]
    purpose: ClassVar[str]
    parameters: ClassVar[tuple[Parameter, ...]]
    listed: ClassVar[str | None] = None  # the parameter that a list alone stands for

    @property
    def ends(self) -> tuple[float, float]:
        """Return the bounds of the draws."""
        raise NotImplementedError

    @property
    def closed(self) -> bool:
        """Return whether a draw can meet the bounds."""
        return True

    @property
    def low(self) -> float:
        return self.ends[0]

    @property
    def high(self) -> float:
        return self.ends[1]

    def trials(self) -> tuple[float, ...]:
        """Values at which the rules of a parameter are tried: the ends of the draws, or what is far enough out."""
        return self.ends

    def fits(self, domain: Real) -> bool:
        """Return whether every draw lies in a domain."""
        if self.closed:
            return domain.holds(self.low) and domain.holds(self.high)
        inside = Real(at_least=_bound(domain.above, domain.at_least), at_most=_bound(domain.below, domain.at_most))
        return inside.holds(self.low) and inside.holds(self.high)


def _bound(strict: float | None, loose: float | None) -> float | None:
    return loose if strict is None else strict


_BETWEEN = Parameter("within", "", Interval(), "draws are held between these two (truncated)", default=None)


class _Cut(DrawLaw):
    """A law of normals whose draws may be held between two ends, `within`."""

    everywhere: ClassVar[tuple[float, float]]  # the ends where nothing is cut off
    within: tuple[float, float] | None

    def away(self, end: float) -> float:
        """How far an end is from the middle of the normal law, in its standard deviations."""
        raise NotImplementedError

    def far(self) -> tuple[float, float]:
        """What is far enough out where nothing is cut off."""
        raise NotImplementedError

    @property
    def ends(self) -> tuple[float, float]:
        return self.everywhere if self.within is None else self.within

    @property
    def closed(self) -> bool:
        return self.within is not None

    def trials(self) -> tuple[float, ...]:
        return self.far() if self.within is None else self.within

    def __post_init__(self) -> None:
        """ValueError where the law hardly ever lies between its ends."""
        if self.within is None:
            return
        low, high = map(self.away, self.within)
        nearest = max(low, -high)
        if nearest > MOST_AWAY:
            raise ValueError(
                f"expected `within` to reach where draws are, got an end {nearest:g} standard deviations from the mean "
                "at the nearest; move it"
            )

    def _said(self) -> str:
        return f" within [{self.low:g}, {self.high:g}]" if self.within else ""


@dataclass(frozen=True)
class UniformDraw(DrawLaw):
    name = "uniform"
    purpose = "any value between two ends alike"
    parameters = (Parameter("between", "", Interval(), "the ends"),)
    listed = "between"
    between: tuple[float, float]

    @property
    def ends(self) -> tuple[float, float]:
        return self.between

    def __str__(self) -> str:
        return f"uniform on [{self.low:g}, {self.high:g}]"


@dataclass(frozen=True)
class NormalDraw(_Cut):
    name = "normal"
    everywhere = (-math.inf, math.inf)
    purpose = "the normal law, cut off outside `within` where that is given"
    parameters = (
        Parameter("mean", "m", Real(), "mean (before any cut)"),
        Parameter("sd", "s", Real(above=0), "standard deviation (before any cut)"),
        _BETWEEN,
    )
    mean: float
    sd: float
    within: tuple[float, float] | None = None

    @property
    def location(self) -> float:
        return self.mean

    def away(self, end: float) -> float:
        return (end - self.mean) / self.sd

    def far(self) -> tuple[float, float]:
        return self.mean - FAR * self.sd, self.mean + FAR * self.sd

    def __str__(self) -> str:
        return f"normal with mean {self.mean:g} and sd {self.sd:g}{self._said()}"


@dataclass(frozen=True)
class LognormalDraw(_Cut):
    name = "lognormal"
    everywhere = (0.0, math.inf)
    purpose = "a value above 0 whose logarithm is normal, cut off outside `within` where that is given"
    parameters = (
        Parameter("median", "m", Real(above=0), "median (before any cut)"),
        Parameter("sigma", "s", Real(above=0, at_most=5), "standard deviation of its logarithm (before any cut)"),
        _BETWEEN,
    )
    median: float
    sigma: float
    within: tuple[float, float] | None = None

    def __post_init__(self) -> None:
        if self.within is not None and self.within[0] <= 0:
            raise ValueError(f"expected `within` above 0 for a lognormal, got {self.within[0]:g}")
        super().__post_init__()

    def away(self, end: float) -> float:
        return math.log(end / self.median) / self.sigma

    def far(self) -> tuple[float, float]:
        factor = math.exp(FAR * self.sigma)
        return self.median / factor, self.median * factor

    def __str__(self) -> str:
        return f"lognormal with median {self.median:g} and sigma {self.sigma:g}{self._said()}"


@dataclass(frozen=True)
class BetaDraw(DrawLaw):
    name = "beta"
    purpose = "the beta law on (0, 1), or stretched over `between`"
    parameters = (
        Parameter("alpha", "α", Real(at_least=0.1, at_most=1000), "first shape: large values pull to the upper end"),
        Parameter("beta", "β", Real(at_least=0.1, at_most=1000), "second shape: large values pull to the lower end"),
        Parameter("between", "", Interval(), "the ends", default=(0.0, 1.0)),
    )
    alpha: float
    beta: float
    between: tuple[float, float] = (0.0, 1.0)

    @property
    def closed(self) -> bool:
        return False

    def trials(self) -> tuple[float, ...]:
        margin = 1e-9 * (self.high - self.low)
        return (self.low + margin, self.high - margin)

    @property
    def ends(self) -> tuple[float, float]:
        return self.between

    def __str__(self) -> str:
        return f"beta({self.alpha:g}, {self.beta:g}) on ({self.low:g}, {self.high:g})"


@dataclass(frozen=True)
class ChoiceDraw(DrawLaw):
    name = "choice"
    purpose = "one of a few values, alike or by weights"
    parameters = (
        Parameter("values", "", Reals(), "the values"),
        Parameter("weights", "", Reals(above=0), "how often each is chosen, in proportion; alike when absent", None),
    )
    listed = "values"
    values: tuple[float, ...]
    weights: tuple[float, ...] | None = None

    def __post_init__(self) -> None:
        if self.weights is not None and len(self.weights) != len(self.values):
            raise ValueError(f"expected a weight for each of {len(self.values)} values, got {len(self.weights)}")

    @property
    def ends(self) -> tuple[float, float]:
        return (min(self.values), max(self.values))

    def trials(self) -> tuple[float, ...]:
        return tuple(sorted(set(self.values)))

    def __str__(self) -> str:
        few = ", ".join(f"{value:g}" for value in self.values[:6])
        return f"one of {few}{', …' if len(self.values) > 6 else ''}"


@dataclass(frozen=True)
class TableDraw(DrawLaw):
    """The values of a table, one a path (a tuple) or one a series (a mapping of names): nothing is drawn."""

    values: tuple[float, ...] | Frozen

    @property
    def by_series(self) -> bool:
        return not isinstance(self.values, tuple)

    @property
    def numbers(self) -> tuple[float, ...]:
        return self.values if isinstance(self.values, tuple) else tuple(self.values.values())

    @property
    def ends(self) -> tuple[float, float]:
        return min(self.numbers), max(self.numbers)

    def trials(self) -> tuple[float, ...]:
        return tuple(sorted(set(self.numbers)))[:: max(1, len(self.numbers) // MOST_TRIALS)] + self.ends

    def __str__(self) -> str:
        kind = "series" if self.by_series else "paths"
        return f"from a table of {len(self.values):,} {kind}, {self.low:g} to {self.high:g}"


DRAWS: Mapping[str, type[Any]] = {
    law.name: law for law in (UniformDraw, NormalDraw, LognormalDraw, BetaDraw, ChoiceDraw)
}


class DrawOf(Domain):
    """The law of a draw, by name with its parameters; read as a DrawLaw."""

    structured = True

    def describe(self) -> str:
        return f"a law to draw from ({', '.join(DRAWS)}), as in {{uniform: [0.3, 0.9]}}"

    def read(self, tree: Tree, reader: Reading) -> Any:
        if not tree.is_map or len(tree.value) != 1:
            return reader.expected(tree, self.describe())
        name, inner = next(iter(tree.value.items()))
        if name not in DRAWS:
            return reader.expected(tree, one_of(DRAWS), did_you_mean(name, DRAWS))
        law = DRAWS[name]
        if law.listed and inner.is_list:
            inner = Tree({law.listed: inner}, inner.place, {law.listed: inner})
        values = read_parameters(inner, law.parameters, reader)
        if values is INVALID:
            return INVALID
        try:
            return law(**values)
        except ValueError as error:
            reader.fault(inner, str(error))
            return INVALID

    def schema(self) -> Schema:
        ways = []
        for name, law in DRAWS.items():
            long = mapping_of(law.parameters)
            brief = [p.domain.schema() for p in law.parameters if p.name == law.listed]
            ways.append(mapping({name: {"anyOf": [long, *brief], "description": law.purpose}}, [name]))
        return {"anyOf": ways}
