"""A small catalogue for the tests of the reader: a few kinds and laws that only declare themselves."""

from dataclasses import dataclass

from procgen.spec.declare import (
    Body,
    Choice,
    Flag,
    LawOf,
    Moment,
    Parameter,
    Real,
    Reals,
    Record,
    Records,
    Span,
    Text,
    Whole,
)
from procgen.spec.model import Spec, SpecError
from procgen.spec.reader import read_text


@dataclass(frozen=True)
class Normal:
    name = "normal"
    parameters = ()


@dataclass(frozen=True)
class StudentT:
    df: float
    name = "student_t"
    parameters = (Parameter("df", "ν", Real(above=2), "degrees of freedom"),)

    def __post_init__(self):
        if self.df == 13:
            raise ValueError("df must not be 13; choose 12 or 14")


LAWS = {"normal": Normal, "student_t": StudentT}


class Kind:
    kind = ""
    family = "test"
    purpose = "test"
    parameters: tuple[Parameter, ...] = ()
    short: str | None = None
    takes_shock = False
    noise = False
    composition = False
    outputs: tuple[str, ...] = ()

    @classmethod
    def check(cls, values):
        return ()

    @classmethod
    def outputs_of(cls, values):
        return cls.outputs


SD = Parameter("sd", "σ", Real(above=0), "standard deviation of the shock", default=None, per="diffusion")
TOTAL_SD = Parameter("total_sd", "σ", Real(above=0), "standard deviation of the term", default=None)
LAW = Parameter("law", "", LawOf(), "law of the shock", default="normal")


class Constant(Kind):
    kind = "constant"
    short = "level"
    parameters = (Parameter("level", "c", Real(), "the value"),)


class Trend(Kind):
    kind = "trend"
    parameters = (
        Parameter("level", "c", Real(), "value at step 0", default=0.0),
        Parameter("slope", "b", Real(), "change a step", default=0.0, per="rate"),
        Parameter(
            "bends",
            "",
            Records(
                Parameter("at", "τ", Moment(), "where the slope changes"),
                Parameter("slope", "b", Real(), "the slope from there on", per="rate"),
            ),
            "points where the slope changes",
            default=(),
        ),
    )


class Seasonal(Kind):
    kind = "seasonal"
    parameters = (
        Parameter("period", "P", Span(), "length of one cycle"),
        Parameter("amplitude", "A", Real(), "half the height", default=1.0),
        Parameter("peak", "τ", Moment(), "where it is highest", default=0.0),
        Parameter("centre", "", Choice("sum", "mean", "none"), "what is kept at 0", default="sum"),
    )


class WhiteNoise(Kind):
    kind = "white_noise"
    noise = True
    parameters = (Parameter("sd", "σ", Real(above=0), "standard deviation", per="diffusion"), LAW)


class RandomWalk(Kind):
    kind = "random_walk"
    takes_shock = True
    parameters = (SD, LAW, Parameter("start", "x₀", Real(), "value at step 0", default=0.0))


class Ar(Kind):
    kind = "ar"
    takes_shock = True
    parameters = (
        Parameter("phi", "φ", Reals(), "coefficients", no_per="AR coefficients cannot be rescaled to another step"),
        SD,
        TOTAL_SD,
        LAW,
        Parameter(
            "before",
            "",
            Record(
                Parameter("x", "x", Reals(), "values before step 0, oldest first"),
                Parameter("shocks", "a", Reals(), "shocks before step 0, oldest first", default=None),
            ),
            "what came before step 0",
            default=None,
        ),
    )


class Garch(Kind):
    kind = "garch"
    noise = True
    outputs = ("variance",)
    parameters = (
        Parameter("omega", "ω", Real(above=0), "constant of the variance", default=None),
        Parameter("sd", "σ", Real(above=0), "unconditional standard deviation", default=None),
        Parameter("alpha", "α", Reals(at_least=0), "weights of past squares"),
        Parameter("beta", "β", Reals(at_least=0), "weights of past variances", default=()),
        LAW,
        Parameter("allow_infinite_variance", "", Flag(), "whether that is meant", default=False),
    )

    @classmethod
    def check(cls, values):
        total = sum(values["alpha"]) + sum(values["beta"])
        if total >= 1 and not values["allow_infinite_variance"]:
            yield "alpha", f"alpha + beta must be below 1 for a finite variance, got {total:g}; lower one"


class Exp(Kind):
    kind = "exp"
    composition = True
    parameters = (Parameter("of", "", Body(), "the terms"),)


class Lag(Kind):
    kind = "lag"
    composition = True
    parameters = (Parameter("of", "", Body(), "the terms"), Parameter("steps", "k", Whole(at_least=1), "how far back"))


class Mix(Kind):
    kind = "mix"
    composition = True
    parameters = (
        Parameter(
            "parts",
            "",
            Records(
                Parameter("of", "", Body(), "the terms of a part"), Parameter("share", "w", Real(above=0), "its share")
            ),
            "what is mixed",
        ),
    )


class Use(Kind):
    kind = "use"
    composition = True
    short = "name"
    parameters = (Parameter("name", "", Text(), "what is used"),)


KINDS = (Constant, Trend, Seasonal, WhiteNoise, RandomWalk, Ar, Garch, Exp, Lag, Mix, Use)
CATALOGUE = {kind.kind: kind for kind in KINDS}

HEAD = "procgen: 1\nseed: 7\npaths: 10\ntime: {steps: 100}\n"


def read(text: str) -> Spec:
    return read_text(text, CATALOGUE, LAWS, "a.yaml")


def body(text: str) -> Spec:
    """Read a spec whose one series `x` is `text`, in line 6 from column 3 on."""
    return read(f"{HEAD}series:\n  x: {text}\n")


def faults(text: str) -> list[str]:
    """Return every fault of a spec, as printed."""
    try:
        spec = read(text)
    except SpecError as error:
        return [str(fault) for fault in error.faults]
    raise AssertionError(f"no fault was found in {spec.raw}")


def body_faults(text: str) -> list[str]:
    return faults(f"{HEAD}series:\n  x: {text}\n")
