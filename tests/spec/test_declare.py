"""What domains say of themselves, and the constants of declarations."""

import pickle

import pytest

from procgen.spec.declare import (
    INVALID,
    REQUIRED,
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
from procgen.spec.words import did_you_mean, one_of

SD = Parameter("sd", "σ", Real(above=0), "spread")


@pytest.mark.parametrize(
    ("domain", "words"),
    [
        (Real(), "a number"),
        (Real(above=0), "a number above 0"),
        (Real(at_most=1), "a number of at most 1"),
        (Real(above=0, below=1), "a number in (0, 1)"),
        (Real(at_least=-1, below=0.5), "a number in [-1, 0.5)"),
        (Real(above=0, at_most=1), "a number in (0, 1]"),
        (Real(below=1e6), "a number below 1e+06"),
        (Whole(), "a whole number"),
        (Whole(at_least=1), "a whole number of at least 1"),
        (Whole(at_least=1, at_most=1), "a whole number equal to 1"),
        (Whole(at_least=0, at_most=2**128 - 1), "a whole number in [0, 2^128 − 1]"),
        (Reals(at_least=0), "a number of at least 0, or a list of such numbers"),
        (Reals(min_length=2), "a list of at least 2 numbers, each a number"),
        (Text(), "a text"),
        (Flag(), "true or false"),
        (Choice("sum", "mean"), "sum or mean"),
        (Choice("sum", "mean", "none"), "one of sum, mean, none"),
        (Span(), "a length of time above 0: a number of steps, or a text such as 15min, 1d, 2 weeks"),
        (Moment(), "a point in time: a number of steps from step 0, a clock time such as 18:00, or a date"),
        (LawOf(), "a law: a name such as normal, or a name with its parameters such as {student_t: {df: 5}}"),
        (Record(SD), "a mapping with the keys sd"),
        (Records(SD), "a list of mappings with the keys sd"),
    ],
)
def test_domains_describe_themselves(domain, words):
    assert domain.describe() == words


def test_constants_are_themselves_in_another_process():
    assert pickle.loads(pickle.dumps(REQUIRED)) is REQUIRED
    assert pickle.loads(pickle.dumps(INVALID)) is INVALID
    assert SD.required and pickle.loads(pickle.dumps(SD)) == SD


@pytest.mark.parametrize(
    ("given", "names", "hint"),
    [
        ("garhc", ["ar", "garch"], "did you mean garch?"),
        ("ds", ["sd", "law"], "did you mean sd?"),
        ("xyz", ["sd", "law"], ""),
        (5, ["sd"], ""),
        ("s" * 101, ["s" * 100], ""),
    ],
)
def test_nearest_names(given, names, hint):
    assert did_you_mean(given, names) == hint


def test_lists_of_choices():
    assert [one_of(words) for words in ([], ["a"], ["a", "b"], ["a", "b", "c"])] == [
        "no key",
        "a",
        "a or b",
        "one of a, b, c",
    ]
