"""Labels, uses and circles."""

import numpy as np
import pytest

import procgen as pg
from tests.spec.small import HEAD, faults, read

NEED = "needs a label of its own, by which it and its draws are found; write as: some_name beside"


def series(text):
    return HEAD + "series:\n" + "".join(f"  {line}\n" for line in text.split("\n"))


def test_everything_that_can_be_used():
    spec = read(
        HEAD
        + """shared:
  w: [{ar: {phi: 0.5, shock: {garch: {sd: 1, alpha: 0.1}}}, as: swing}, {use: calm, as: inner}]
  calm: {constant: 1}
series:
  whole: {use: w}
  term: {use: w.swing, times: -1}
  output: {exp: {use: w.swing.variance}}
  column: [{use: term}, {use: column.noise.variance}, {garch: {sd: 1, alpha: 0.1}, as: noise}]
  alias: {use: w.inner}
"""
    )
    uses = [[e.values.get("name") for e in s.of] for s in spec.series.values()]
    assert uses == [["w"], ["w.swing"], [None], ["term", "column.noise.variance", None], ["w.inner"]]
    assert list(spec.shared) == ["w", "calm"]


def test_compositions_and_uses_need_no_labels():
    read(
        series(
            "x: [{exp: {ar: {phi: 0.1, sd: 1}}}, {exp: {white_noise: {sd: 1}}}, {use: y}, {use: y}]\ny: {constant: 1}"
        )
    )


@pytest.mark.parametrize(
    ("text", "found"),
    [
        (
            "x: [{ar: {phi: 0.1, sd: 1}}, {ar: {phi: 0.1, sd: 1}}]",
            f"a second ar in x (the first is in line 6) {NEED} ar\n  at series.x[1] (a.yaml, line 6, column 32)",
        ),
        (
            "x: [{exp: {ar: {phi: 0.1, sd: 1}}}, {lag: {of: {ar: {phi: 0.1, sd: 1}}, steps: 1}}]",
            f"a second ar in x (the first is in line 6) {NEED} ar\n  at series.x[1].lag (a.yaml, line 6, column 50)",
        ),
        (
            "x: {mix: {parts: [{of: {constant: 1}, share: 1}, {of: {constant: 2}, share: 1}]}}",
            f"a second constant in x (the first is in line 6) {NEED} constant\n"
            "  at series.x.mix.parts[1] (a.yaml, line 6, column 57)",
        ),
        (
            "x: [{ar: {phi: 0.1, sd: 1}, as: a}, {constant: 1, as: a}]",
            "the label a is taken in x in line 6; choose another\n  at series.x[1].as (a.yaml, line 6, column 57)",
        ),
        (
            "x: [{ar: {phi: 0.1, sd: 1}, as: constant}, {constant: 1}]",
            f"the label constant is taken in x in line 6, so this constant {NEED} constant\n"
            "  at series.x[1] (a.yaml, line 6, column 46)",
        ),
        (
            "x: [{ar: {phi: 0.1, shock: {white_noise: {sd: 1}, as: noise}}}, {white_noise: {sd: 1}, as: noise}]",
            "the label noise is taken in x in line 6; choose another\n  at series.x[1].as (a.yaml, line 6, column 94)",
        ),
    ],
)
def test_labels_stand_once(text, found):
    assert faults(series(text)) == [found]


@pytest.mark.parametrize(
    ("name", "message"),
    [
        ("z", "there is no series or shared body named z; expected w or x"),
        ("w.sving", "there is no term of w named sving; expected swing or constant; did you mean swing?"),
        ("w.swing.varianc", "there is no hidden output of w.swing named varianc; expected variance; "
         "did you mean variance?"),
        ("w.constant.level", "expected a hidden output of w.constant, got level; there is none"),
        ("w.swing.variance.x", "there is no hidden output of w.swing named variance.x; expected variance; "
         "did you mean variance?"),
        ("''", "there is no series or shared body named ; expected w or x"),
    ],
)  # fmt: skip
def test_uses_of_what_is_not_there(name, message):
    shared = "shared: {w: [{garch: {sd: 1, alpha: 0.1}, as: swing}, {constant: 1}]}\n"
    assert faults(HEAD + shared + f"series:\n  x: {{use: {name}}}\n") == [
        f"{message}\n  at series.x.use (a.yaml, line 7, column 12)"
    ]


W = "shared: {w: [{exp: {garch: {sd: 1, alpha: 0.1}}}, {lag: {of: {constant: 1}, steps: 1}}]}\n"


def test_a_composition_without_a_label_goes_by_its_kind():
    """As in the graph: E exp of N(0, 1) is the square root of e; E max(N(0, 1), 0) is 1/√(2π)."""
    read(HEAD + W + "series: {x: [{use: w.exp}, {use: w.lag}]}\n")
    body = [{"exp": [{"white_noise": {"sd": 1}}]}, {"hinge": {"of": [{"use": "w.white_noise"}], "above": 0}}]
    head = {"procgen": 1, "seed": 1, "paths": 1, "time": {"steps": 3}, "shared": {"w": body}}
    theory = pg.theory(pg.load(head | {"series": {"x": {"use": "w.exp"}, "y": {"use": "w.hinge"}}}))
    assert theory["x"].mean([0])[0] == pytest.approx(np.exp(0.5))
    assert theory["y"].mean([0])[0] == pytest.approx(1 / np.sqrt(2 * np.pi))


@pytest.mark.parametrize(
    ("body", "name", "message"),
    [
        ("[{exp: {constant: 1}}, {exp: {trend: {level: 1}}}]", "w.exp",
         "w has 2 terms of kind exp: write as: some_name beside the one that is meant, and name w.some_name"),
        ("{ar: {phi: 0.1, shock: {garch: {sd: 1, alpha: 0.1}}}}", "w.garch.variance",
         "a shock goes by the name of the term that it drives: expected w.ar.variance, got w.garch.variance"),
        ("{exp: {constant: 1}}", "w.epx", "there is no term of w named epx; expected constant or exp; did you mean "
         "exp?"),
        ("[{exp: {constant: 1}}, {use: z, as: u}]", "w.use", "there is no term of w named use; expected one of "
         "constant, u, exp"),
    ],
)  # fmt: skip
def test_what_goes_by_another_name_is_said(body, name, message):
    text = HEAD + f"shared:\n  w: {body}\n  z: {{constant: 1}}\nseries:\n  x: {{use: {name}}}\n"
    assert faults(text) == [f"{message}\n  at series.x.use (a.yaml, line 9, column 12)"]


def test_a_label_is_no_kind_of_a_composition_beside_it():
    text = series("x: [{exp: {ar: {phi: 0.1, sd: 1}}}, {constant: 5, as: exp}]")
    assert faults(text) == [
        "the label exp is taken in x in line 6; choose another\n  at series.x[1].as (a.yaml, line 6, column 57)"
    ]


@pytest.mark.parametrize(
    ("text", "names", "place"),
    [
        ("x: {use: x}", "x → x", "series.x.use (a.yaml, line 6, column 12)"),
        ("x: {use: y}\ny: {exp: {use: x}}", "y → x → y", "series.y.exp.use (a.yaml, line 7, column 18)"),
        ("x: {exp: {use: x.inner}, as: inner}", "x.inner → x.inner", "series.x.exp.use (a.yaml, line 6, column 18)"),
        ("x: {use: y}\ny: [{use: z}, {constant: 1}]\nz: {use: y}", "z → y → z",
         "series.z.use (a.yaml, line 8, column 12)"),
    ],
)  # fmt: skip
def test_circles_are_refused(text, names, place):
    message = f"these uses go in a circle, {names}; remove one of them"
    assert faults(series(text)) == [f"{message}\n  at {place}"]


def test_a_series_may_use_another_term_of_its_own():
    read(series("x: [{garch: {sd: 1, alpha: 0.1}}, {exp: {use: x.garch.variance}}]"))


def chain(length):
    lines = ["s0: {constant: 1}"] + [f"s{i}: {{use: s{i - 1}}}" for i in range(1, length + 1)]
    return series("\n".join(reversed(lines)))


def test_chains_of_uses_have_a_limit():
    read(chain(50))
    message = "expected at most 50 uses of uses, got more; take the middle of the chain out"
    for length in (51, 3000):
        (found,) = faults(chain(length))
        assert found.startswith(f"{message}\n  at series.s51.use ")


def test_two_things_of_one_name():
    text = HEAD + "shared: {w: {constant: 1}}\nseries:\n  w: {constant: 2}\n"
    assert faults(text) == ["the name w is a shared body already; rename one\n  at series.w (a.yaml, line 7, column 3)"]


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("w: {of: {constant: 1}, stream: x}\nx: {constant: 1}", "the stream x belongs to the series w; two would draw "
         "the same values; choose another\n  at series.x (a.yaml, line 8, column 3)"),
        ("x: {of: {constant: 1}, stream: s}", "the stream s belongs to the shared body s; two would draw the same "
         "values; choose another\n  at series.x.stream (a.yaml, line 7, column 34)"),
        ("x: {of: {constant: 1}, stream: a-b}", "expected a name of at most 100 letters a–z, digits and _, not "
         'beginning with a digit, got "a-b"\n  at series.x.stream (a.yaml, line 7, column 34)'),
    ],
)  # fmt: skip
def test_streams_stand_once(text, message):
    assert faults(series(text).replace("series:", "shared: {s: {constant: 1}}\nseries:")) == [message]
