"""What a term is: declarations, and the questions that every term answers.

A term is a class with its declarations as class attributes and its configured values on the instance.
It answers, in this order in every family file: ``recurse`` (draws and inputs become values), ``invert``
(values become inputs again), ``ahead`` (mean and variance of what comes next, given a state) and
``moments`` (its exact theory, written on the axis that the theory room hands in). What has no answer
returns an :class:`Unknown` with the reason in words.

Arrays are tiles: rows are steps, columns are paths. A deterministic term returns one column, which
broadcasts. A state is a dict of named arrays; a recursion never changes the state that it was given.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import field
from typing import Any, ClassVar

import numpy as np

from procgen.chance.laws import Normal
from procgen.spec.declare import LawOf, Parameter, Real, Reals
from procgen.spec.records import dataclass
from procgen.terms.support import EVERYTHING, Support

LEAST_LOG = -708.0  # of what an exponential gives with all its digits

Array = np.ndarray
State = dict[str, Array]
Cell = tuple[Array, Array]
Issue = tuple[str, str]  # the parameter's name, and what is wrong with it in a sentence


@dataclass(frozen=True)
class Unknown:
    """An answer that does not exist in closed form, or at all, with the reason in words."""

    reason: str

    def __bool__(self) -> bool:
        return False


@dataclass(frozen=True)
class Ahead:
    """Forecast of a term from its state: mean and variance, each (steps, paths) or (steps, 1)."""

    mean: Array
    variance: Array


@dataclass(frozen=True)
class Draw:
    """A primary stream that a term asks for: its role in the address, and the law of its shocks."""

    role: str
    law: Any


@dataclass(frozen=True)
class Before:
    """What a term is handed to set up its state just before step 0.

    Attributes
    ----------
    head : int
        How many of its own values before step 0 somebody will read.
    inputs : tuple of arrays (n_i, paths)
        The inputs at steps -n_i .. -1, oldest first; n_i is at least ``reach(head)[i]``. A term that `burns_in`
        may get something that only has a length and slices, each drawn when it is asked for.
    peek : callable
        ``peek(i)`` gives input i at step 0, (1, paths).
    normals : callable
        ``normals(k)`` gives (k, paths) standard normals of the term's own role ``start``.
    joint : pair of arrays or None
        Past values and past shocks, newest first, where the term starts jointly with others.
    heads : array (paths,) or None
        ``head`` of each path, at most that, where paths are read from as far back as their own numbers ask for.
    """

    head: int
    inputs: tuple[Array, ...]
    peek: Callable[[int], Array]
    normals: Callable[[int], Array]
    joint: tuple[Array, Array] | None = None
    heads: Array | None = None


class Term:
    """One building block. Subclasses declare themselves in class attributes; see the module text."""

    kind: ClassVar[str] = ""
    family: ClassVar[str] = ""
    purpose: ClassVar[str] = ""
    source: ClassVar[str] = ""
    example: ClassVar[str] = ""
    knows: ClassVar[str] = ""
    parameters: ClassVar[tuple[Parameter, ...]] = ()
    short: ClassVar[str | None] = None
    takes_shock: ClassVar[bool] = False
    noise: ClassVar[bool] = False
    composition: ClassVar[bool] = False
    separate: ClassVar[bool] = False  # whether each entry of its body is an input of its own
    outputs: ClassVar[tuple[str, ...]] = ()
    correlates: ClassVar[bool] = False  # whether its first draw may be named in `correlation`, as those of a noise may
    together: ClassVar[str] = ""  # where its draws cannot be named in `correlation`: how two of it move together
    leaves_from_last: ClassVar[bool] = False  # whether its `before` is its value at step −1, of which all follows
    untold: ClassVar[str] = ""  # why a record does not say where it stands, and what to do; empty where nothing is said
    by_rows: ClassVar[tuple[str, ...]] = ()  # parameters that may be rows, one value a path, in `recurse`
    begins_by_rows: ClassVar[bool] = False  # whether `begin`, and what a graph asks before, take such rows too
    finer: ClassVar[str] = ""  # the parameter that says in how many parts its body cuts a step; empty where none does
    compiles: bool = False  # whether many paths side by side are drawn quicker where kernels are compiled
    burns_in: ClassVar[bool] = False  # whether `begin` reads its inputs from the first row on, a few rows at a time
    # "filter": where its shocks or its body lie on no grid, neither do its values, nor sums of such filters of the same
    # shocks; "bend": its values do not, yet in a sum with others of the same shocks they may cancel; empty: unknown
    smooth: ClassVar[str] = ""
    blurs: ClassVar[bool] = False  # whether `invert` gives back values of a lattice only up to rounding
    piles: ClassVar[tuple[float, ...]] = ()  # values with a chance of their own, of a term with ranks
    gaps: ClassVar[bool] = False  # whether some of its values are missing; nothing but a factor may follow then
    portable: ClassVar[bool] = True
    why_not_portable: ClassVar[str] = ""
    longest: ClassVar[int | None] = None  # the most steps it can be drawn for; None when any number
    fewer: ClassVar[str] = "ask for fewer"  # what to do where more are asked for
    no_past: ClassVar[str] = ""  # why there is less before step 0 than is read, and what to do; where not `before`

    told: tuple[float, float] = (-np.inf, np.inf)  # values of its body beyond which double precision tells no two apart

    address: str = ""  # series.label, set when the term takes its place in a graph
    arity: int = 0  # how many inputs it has there
    shock_scale: float = 1.0  # standard deviation of the shock that drives it

    def __init__(self, values: Mapping[str, Any]):
        self.values = values

    def __getattr__(self, name: str) -> Any:
        try:
            return self.__dict__["values"][name]
        except KeyError:
            raise AttributeError(f"{type(self).__name__} has no parameter or attribute {name!r}") from None

    @classmethod
    def check(cls, values: Mapping[str, Any]) -> Iterable[Issue]:
        """Faults that no single parameter shows, as (parameter, sentence)."""
        return ()

    @classmethod
    def outputs_of(cls, values: Mapping[str, Any]) -> tuple[str, ...]:
        """The hidden outputs of a term with these values, where they are not the same for all of its kind."""
        return cls.outputs

    @classmethod
    def draws_alone(cls) -> bool:
        """Whether it has draws of its own, beside any shock that drives it."""
        return cls.draws is not Term.draws

    def early(self) -> float:
        """Steps after which its state is likely to be, to the last bit, that of any other past; 0 where it has none.

        inf where that is never so, or where a state of another step would not do.
        """
        return np.inf

    def draws(self) -> tuple[Draw, ...]:
        """The primary streams that the term needs, in the order in which ``recurse`` receives them."""
        return ()

    def misfit(self, inputs: Sequence[Any]) -> str | None:
        """What is wrong with the nodes that it would read, in a sentence; None when they fit."""
        return None

    def equation(self, *inputs: str) -> str:
        """The term in the usual notation, with its numbers."""
        raise NotImplementedError

    def unfelt(self, steps: int) -> Iterable[str]:
        """What is stated for a time and shows in none of so many steps, as sentences that follow the term's name."""
        return ()

    def past(self) -> int | None:
        """How many values before step 0 the term can give at most; None when any number."""
        return None

    def reach(self, head: int) -> tuple[int, ...]:
        """How many steps before step 0 each input must give so that this term can give `head` of its own."""
        return ()

    def reach_by_path(self, head: int) -> tuple[Array, ...] | None:
        """``reach`` of each path, (paths,) an input, where it differs by path; None where it does not."""
        return None

    def begin(self, before: Before) -> tuple[Array | None, State]:
        """Values at steps -head .. -1 (None when head is 0) and the state just before step 0."""
        return None, {}

    def recurse(self, inputs: Sequence[Array], state: State, at: Array) -> tuple[Any, State]:
        """Values at the steps `at` from the inputs at those steps, and the state after them.

        A term with hidden outputs returns a dict: its values under ``""`` and each output by name.
        """
        raise NotImplementedError

    @property
    def undoes(self) -> bool:
        """Whether `invert` has an answer."""
        return type(self).invert is not Term.invert

    def invert(self, values: Array, known: Sequence[Array | None], state: State | None, at: Array):
        """The one unknown input (None in `known`) from the values; NaN where the unknown past matters."""
        return Unknown(f"{self.kind} cannot be inverted")

    def unranked(self) -> str:
        """Why `rank` has no answer; empty when it has."""
        return f"the law of {self.kind} given its past is not computed"

    def rank(self, values: Array, cell: Cell, known: Sequence[Array | None], state: State | None, at: Array):
        """P(X ≤ lower) and P(X ≤ upper) for the values X given their past, and the state after them; for checks.

        The cell (lower, upper] holds what is stored as the value. Needed only where ``unranked`` is empty; all inputs
        but the term's own draws are known then.
        """
        return Unknown(self.unranked())

    @property
    def watched(self) -> tuple[str, ...]:
        """What is special to the term: events whose chance given the past is known, beside ``rank``; for checks."""
        return ()

    def events(self, values: Array, cell: Cell, known: Sequence[Array | None], state: State | None, at: Array):
        """For each of ``watched`` whether it has happened, and its chance given the past: NaN where none was taken."""
        return ()

    def shown(self, output: str) -> Any:
        """What answers for a hidden output to ``unranked``, ``rank`` and ``events``, as a term would; None: nothing."""
        return None

    def chained(self, inputs: Sequence[Any]) -> Any:
        """The source that moves the term's own chain, and the chances of its stages: first, moves, owners; or None."""
        return None

    def in_state(self, parts: Sequence[Any], state: int | None) -> Any:
        """The value (`InState`) in a state of its own chain, from those of its inputs at the same step; for checks.

        None where it is not made of that step alone, or not known. The input that moves the chain is None.
        """
        return None

    def output_in_state(self, output: str, state: int | None) -> Any:
        """The same of a hidden output."""
        return None

    def ahead(self, steps: Array, state: State, *inputs: Ahead) -> Ahead | Unknown:
        """Mean and variance at the coming `steps`, given the state just before the first of them."""
        return Unknown(f"{self.kind} has no closed forecast")

    def support(self, *inputs: Support) -> Support:
        """The values that it can have, from those that its inputs can have; never fewer."""
        return EVERYTHING

    def support_of(self, output: str) -> Support:
        """The values that a hidden output can have."""
        return EVERYTHING

    def moments(self, axis: Any, *inputs: Any) -> Any:
        """The term's exact theory as an expression on the axis."""
        raise NotImplementedError


MOST_SHOWN = 6  # stated values in an equation

SD = Parameter(
    "sd", "σ", Real(above=0), "standard deviation of the shock", default=None, unit="series", per="diffusion"
)
TOTAL_SD = Parameter(
    "total_sd",
    "σₓ",
    Real(above=0),
    "standard deviation of the stationary term itself, instead of `sd`",
    default=None,
    unit="series",
)
PAST_VALUES = Parameter("x", "x", Reals(), "values before step 0, oldest first", unit="series")
LAW = Parameter("law", "", LawOf(), "law of the shock, standardised to mean 0 and variance 1", default=Normal())


@dataclass(eq=False)
class Node:
    """A configured term in its place in the graph.

    ``name`` is the address ``series.label`` that people see; ``key`` is unique and names the state. ``head`` is how
    many values before step 0 are read of it, ``heads`` how many on each path where that differs.
    """

    key: str
    name: str
    term: Term
    inputs: tuple[Any, ...] = ()
    head: int = 0
    heads: Array | None = None
    place: Any = None
    entry: Any = None
    joint: Any = None
    pace: int = 1  # its steps in one step of the spec
    hidden: frozenset[str] = field(default_factory=frozenset)


def rows(values: Sequence[float]) -> Array:
    """A sequence of numbers as one deterministic column."""
    return np.array(values, dtype=np.float64).reshape(-1, 1)


def without_gap(values: Array, fill: float) -> tuple[Array, int]:
    """Values with their unknown first rows (NaN) filled, and how many rows those are; for inversions.

    Paths with parameters of their own may have gaps of their own: the longest counts, but for paths that are all gap.
    """
    if not len(values) or not np.isnan(values[0]).any():
        return values, 0
    absent = np.isnan(values)
    leading = np.argmin(absent, axis=0)  # 0 for a path that is all gap, too
    gap = int(leading.max()) or len(values) * bool(absent.all())
    values = values.copy()
    values[:gap] = fill
    return values, gap


def number(x: float) -> str:
    """A coefficient as it is written in an equation: shortest digits, a true minus sign."""
    return f"{x + 0.0:.6g}".replace("-", "−")  # a negative zero is a zero


def signed(x: float, what: str) -> str:
    """`+ 0.5 x` or `− 0.5 x`, for the next summand of an equation."""
    size = "" if abs(x) == 1 and what else number(abs(x))
    if size == "1" and abs(x) != 1:
        size = repr(float(abs(x)))  # a root near 1 is not a unit root
    return f"{'−' if x < 0 else '+'} {size}{' ' if size and what else ''}{what}"


def after_last(x: float, steps: int) -> str:
    """`at step 80, after the last step 49`; empty for a time that is not."""
    return f"at step {number(x)}, after the last step {number(steps - 1)}" if x > steps - 1 else ""


def steps_long(x: float) -> str:
    """`1 step` or `4 steps`, in a sentence."""
    return f"{number(x)} step{'' if x == 1 else 's'}"


def steps_since(x: float) -> str:
    """`t`, `(t − 5)` or `(t + 5)`: the steps since x, in an equation."""
    return f"(t {signed(-x, '')})" if x else "t"


def stated(name: str, past: Sequence[float], last: int = -1) -> str:
    """`x[−2] = 4, x[−1] = 5` for values stated up to step `last`, oldest first; for the end of an equation."""
    shown = [f"{name}[{number(last + 1 - len(past) + i)}] = {number(value)}" for i, value in enumerate(past)]
    return ", ".join(shown if len(shown) <= MOST_SHOWN else [*shown[:2], "…", shown[-1]])
