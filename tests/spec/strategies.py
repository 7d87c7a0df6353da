"""Hypothesis strategies for specs: values from declarations, and structures that nearly are specs."""

import json

from hypothesis import strategies as st

from procgen.spec.columns import Column, Undated
from procgen.spec.declare import (
    REQUIRED,
    Body,
    Choice,
    Flag,
    LawOf,
    Moment,
    Real,
    Reals,
    Record,
    Records,
    Span,
    Text,
    Whole,
)
from procgen.spec.local import CalendarDays, EveryYear
from procgen.spec.named import Matrices, Named, Names, Rows
from procgen.spec.sample import Sample, Smoothing
from procgen.terms.markov import Stays

NOISE = {"white_noise": {"sd": 1}}


def valid(domain, laws):
    """Return a strategy of values, as written in a spec, that a domain takes."""
    if isinstance(domain, Real):
        return reals(domain)
    if isinstance(domain, Whole):
        low = domain.at_least if domain.at_least is not None else -50
        return st.integers(low, low + 50 if domain.at_most is None else min(domain.at_most, low + 50))
    if isinstance(domain, Reals):
        return st.lists(reals(domain.each), min_size=max(1, domain.min_length), max_size=4)
    if isinstance(domain, Choice):
        return st.sampled_from(domain.words)
    if isinstance(domain, LawOf):
        return st.sampled_from(sorted(laws)).flatmap(lambda name: law(name, laws))
    if isinstance(domain, Record):
        return mapping(domain.parameters, laws)
    if isinstance(domain, Records):
        return st.lists(mapping(domain.parameters, laws), min_size=1, max_size=2)
    if isinstance(domain, Named):
        return st.dictionaries(st.sampled_from(["a", "b", "c"]), valid(domain.each, laws), min_size=1)
    if isinstance(domain, Rows):
        return st.lists(valid(domain.each, laws), min_size=1, max_size=3) | st.just([[0.5, 0.5], [0.2, 0.8]])
    simple = {
        Names: st.just(["a", "b"]),
        Text: st.just("x"),
        Flag: st.booleans(),
        Span: st.integers(1, 50) | st.just("3 steps"),
        Stays: st.integers(1, 50) | st.just({"mean": 6, "stages": 2}),
        Moment: st.integers(-9, 9),
        Body: st.just([NOISE]),
        CalendarDays: st.just(["2027-12-24", "02-29"]),
        EveryYear: st.just("07-15"),
        Column: st.just([3, 5, 4]) | st.just({"first": -1, "numbers": [1, 2.5, 3]}),
        Undated: st.just([3, 5, 4]),
        Sample: st.just([3, 5, 4]) | st.just({"numbers": [1, 2.5, 3]}),
        Smoothing: st.booleans() | st.just(0.3),
        Matrices: st.just([[0.5, 0.1], [0, 0.3]]) | st.just([[[0.5, 0], [0, 0.3]], [[0.1, 0], [0, 0.2]]]),
    }
    return simple[type(domain)]


def reals(domain):
    low = next((b for b in (domain.above, domain.at_least) if b is not None), -100.0)
    high = next((b for b in (domain.below, domain.at_most) if b is not None), max(low, 0.0) + 100.0)
    extreme = st.sampled_from([1e-300, 1e300, -1e300, 1e-16, 0.0, -0.0])
    usual = st.floats(low, high, allow_subnormal=False) | st.integers(-3, 9)
    return (usual | usual | usual | extreme).filter(domain.holds)


def law(name, laws):
    return mapping(laws[name].parameters, laws).map(lambda values: {name: values})


def mapping(parameters, laws):
    """Return a strategy of mappings with every required parameter and some of the others."""
    required = {p.name: valid(p.domain, laws) for p in parameters if p.default is REQUIRED}
    optional = {p.name: valid(p.domain, laws) for p in parameters if p.default is not REQUIRED}
    return st.fixed_dictionaries(required, optional=optional)


def entries(catalogue, laws):
    """Return a strategy of entries of any kind, of which joint rules may still refuse some."""
    return st.sampled_from(sorted(catalogue)).flatmap(
        lambda kind: mapping(catalogue[kind].parameters, laws).map(lambda values: {kind: values})
    )


def specs(body):
    """Return a strategy of specs with one series."""
    return body.map(lambda b: {"procgen": 1, "seed": 7, "paths": 3, "time": {"steps": 9}, "series": {"x": b}})


def wild(catalogue, laws):
    """Return a strategy of structures of the words of the language, in all the wrong places."""
    words = {"procgen", "title", "seed", "paths", "time", "reuse", "shared", "series", "correlation"}
    words |= {"of", "unit", "type", "decimals", "stream", "note", "as", "times", "shock", "value", "per", "x", "y"}
    words |= {"steps", "start", "every", "zone", "stamp", "holidays", "between", "within", "names", "matrix", "<<", ""}
    words |= set(catalogue) | set(laws) | {p.name for kind in catalogue.values() for p in kind.parameters}
    special = ["x.ar", "x.garch.variance", "15min", "1 month", "18:00", "2027-01-04", "2027-10-31T02:30+01:00", "day"]
    texts = st.sampled_from(sorted(words)) | st.sampled_from([*special, "9" * 500])
    scalars = (
        st.none()
        | st.booleans()
        | st.integers(-3, 10)
        | st.integers()
        | st.floats()
        | texts
        | st.text(max_size=5)
        | st.dates()
    )
    return st.recursive(
        scalars,
        lambda inner: st.lists(inner, max_size=4) | st.dictionaries(texts, inner, max_size=5),
        max_leaves=30,
    )


def as_yaml(data):
    """Return plain data as YAML; JSON is a part of YAML 1.2, but for its infinities."""
    text = json.dumps(data, default=str, ensure_ascii=False)
    return text.replace("NaN", ".nan").replace("-Infinity", "-.inf").replace("Infinity", ".inf")
