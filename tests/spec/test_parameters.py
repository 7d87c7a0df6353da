"""Numbers that vary: how they are written, what they mean, and what is said of those that cannot be."""

import pytest

from procgen.chance.laws import LAWS
from procgen.spec.draws import BetaDraw, ChoiceDraw, LognormalDraw, NormalDraw, UniformDraw
from procgen.spec.model import SpecError
from procgen.spec.reader import read_raw, read_text
from procgen.spec.varying import Varying, fixed, varying_of
from procgen.terms import catalogue

UNIFORM = {"uniform": [0.3, 0.9]}


def read(body, **more):
    raw = {"seed": 7, "paths": 10, "time": {"steps": 50}, "series": {"x": body}, **more}
    return read_raw(raw, catalogue(), LAWS)


def faults(body, **more):
    with pytest.raises(SpecError) as error:
        read(body, **more)
    return [str(fault) for fault in error.value.faults]


def by_path(law, **more):
    return {"draw": law, "over": "path", **more}


def test_one_written_where_it_is_used():
    spec = read([{"ar": {"phi": by_path(UNIFORM), "sd": 1}}])
    assert spec.series["x"].of[0].values["phi"] == (Varying(UniformDraw((0.3, 0.9)), "path", label="ar.phi"),)


def test_one_draw_serves_several_places():
    k = {"parameter": "k"}
    spec = read(
        [{"constant": k}, {"ar": {"phi": k, "sd": k}, "times": k}],
        parameters={"k": by_path(UNIFORM), "other": by_path({"normal": {"mean": 0, "sd": 1}})},
    )
    assert [varying.key(owner) for owner, varying in varying_of(spec)] == ["k"] * 4
    assert list(spec.parameters) == ["k", "other"]


def test_laws():
    laws = [
        ({"uniform": [1, 2]}, UniformDraw((1.0, 2.0))),
        ({"uniform": {"between": [1, 2]}}, UniformDraw((1.0, 2.0))),
        ({"normal": {"mean": 0, "sd": 2}}, NormalDraw(0.0, 2.0)),
        ({"normal": {"mean": 0, "sd": 2, "within": [-1, 4]}}, NormalDraw(0.0, 2.0, (-1.0, 4.0))),
        ({"lognormal": {"median": 3, "sigma": 0.2}}, LognormalDraw(3.0, 0.2)),
        ({"beta": {"alpha": 2, "beta": 3}}, BetaDraw(2.0, 3.0)),
        ({"choice": [1, 2, 5]}, ChoiceDraw((1.0, 2.0, 5.0))),
        ({"choice": {"values": [1, 2], "weights": [3, 1]}}, ChoiceDraw((1.0, 2.0), (3.0, 1.0))),
    ]
    for written, law in laws:
        assert read([{"constant": by_path(written)}]).series["x"].of[0].values["level"].law == law


def test_a_rate_by_path_is_converted_as_a_number_would_be():
    time = {"steps": 50, "start": "2027-01-04", "every": "15min"}
    spec = read([{"trend": {"slope": {"value": by_path(UNIFORM), "per": "day"}}}], time=time)
    number = read([{"trend": {"slope": {"value": 0.7, "per": "day"}}}], time=time)
    assert fixed(spec, lambda _, varying: varying.number(0.7)).series == number.series


def test_raw_and_digest():
    spec = read([{"ar": {"phi": by_path(UNIFORM), "sd": 1}}])
    again = read_raw(spec.raw, catalogue(), LAWS)
    assert again == spec and again.digest() == spec.digest() and hash(again) == hash(spec)
    assert read([{"ar": {"phi": by_path({"uniform": [0.3, 0.8]}), "sd": 1}}]).digest() != spec.digest()


@pytest.mark.parametrize("entry, message", [
    ({"ar": {"phi": by_path({"uniform": [0.3, 1.2]}), "sd": 1}},
     "expected all roots of 1 − φ₁z − … outside the unit circle, got one at 0.8333 (modulus 0.8333); shrink phi, or "
     "put the term without that root inside `integrate`, or give the term its own `before: {x: …}` (one at the series "
     "does not do) to run it on purpose; this is at ar.phi = 1.2, which the draws reach; keep them below 1\n"
     "  at series.x[0].ar.phi"),
    ({"garch": {"omega": 1, "alpha": by_path({"uniform": [0.1, 0.3]}), "beta": by_path({"uniform": [0.5, 0.7]}),
                "law": {"student_t": {"df": 5}}}},
     "alpha + beta must be below 1 for a finite variance, got 1; lower one, or say `allow_infinite_variance: true` to "
     "run it on purpose; this is at garch.alpha = 0.3 and garch.beta = 0.7, which the draws reach\n"
     "  at series.x[0].garch.alpha"),
    ({"constant": {"draw": {"normal": {"mean": 0, "sd": 1, "within": [50, 60]}}, "over": "path"}},
     "expected `within` to reach where draws are, got an end 50 standard deviations from the mean at the nearest; "
     "move it\n  at series.x[0].constant.draw.normal"),
    ({"white_noise": {"sd": by_path({"normal": {"mean": 1, "sd": 0.1}})}},
     "expected a number above 0, got draws normal with mean 1 and sd 0.1, which have no end there; give "
     "`within: [low, high]` inside that range\n  at series.x[0].white_noise.sd"),
    ({"white_noise": {"sd": by_path({"uniform": [0, 3]})}},
     "expected a number above 0, got draws uniform on [0, 3], which reach 0; draw from a range inside\n"
     "  at series.x[0].white_noise.sd"),
    ({"white_noise": {"sd": {"parameter": "kk"}}},
     "there is no parameter named kk; expected k; did you mean k?\n  at series.x[0].white_noise.sd.parameter"),
    ({"white_noise": {"sd": {"column": "a"}}},
     "only a series of a group has a row of a table; use from_table, or put it under groups:\n"
     "  at series.x[0].white_noise.sd"),
    ({"white_noise": {"sd": 1, "law": {"student_t": {"df": {"parameter": "k"}}}}},
     "the numbers of a law cannot vary by path, for the shocks of a term have one law; write over: series, or a number "
     "above 2\n  at series.x[0].white_noise.law.student_t.df"),
    ({"seasonal": {"period": by_path(UNIFORM), "harmonics": [{"amplitude": 1}]}},
     "period cannot vary, only numbers can; write a length of time above 0: a number of steps, or a text such as "
     "15min, 1d, 2 weeks\n  at series.x[0].seasonal.period"),
    ({"constant": {"draw": {"uniform": [2, 1]}, "over": "path"}},
     "expected the low end below the high one, got [2, 1]; write [1, 2]\n"
     "  at series.x[0].constant.draw.uniform"),
    ({"constant": {"draw": {"uniforn": [1, 2]}, "over": "path"}},
     "expected one of uniform, normal, lognormal, beta, choice, got a mapping with the key uniforn; did you mean "
     "uniform? (draw: the law that it is drawn from)\n  at series.x[0].constant.draw"),
    ({"constant": {"draw": UNIFORM}},
     "expected the key over (whether each path or each series has a value of its own: path or series)\n"
     "  at series.x[0].constant"),
    ({"constant": {"draw": {"choice": {"values": [1, 2], "weights": [1]}}, "over": "path"}},
     "expected a weight for each of 2 values, got 1\n  at series.x[0].constant.draw.choice"),
    ({"constant": {"from_table": {"key": "path"}}},
     "expected a file or values, one of them, got a mapping with the key key\n  at series.x[0].constant.from_table"),
    ({"constant": {"from_table": {"key": "path", "values": {"a": 1}}}},
     "expected a list of numbers, for key: path, got a mapping with the key a\n"
     "  at series.x[0].constant.from_table.values"),
])  # fmt: skip
def test_faults(entry, message):
    assert faults([entry], parameters={"k": by_path(UNIFORM)}) == [message]


def test_what_is_no_number_of_a_term_cannot_vary():
    (told,) = faults(
        [{"white_noise": {"sd": 1}}, {"white_noise": {"sd": 1}, "as": "b"}],
        parameters={"k": by_path(UNIFORM)},
        correlation={"between": ["x.white_noise", "x.b"], "value": {"parameter": "k"}},
    )
    assert told.startswith("this number cannot vary, numbers of terms can; write a number in (-1, 1)")
    (told,) = faults([{"given": {"values": [1, {"parameter": "k"}]}}], parameters={"k": by_path(UNIFORM)})
    assert "cannot vary" in told


def test_a_table_by_path(tmp_path):
    (tmp_path / "k.csv").write_text("path,phi,extra\n2,0.5,a\n0,0.1,b\n1,0.3,c\n")
    text = (
        "seed: 1\npaths: 3\ntime: {steps: 5}\n"
        "series: {x: [{ar: {phi: {from_table: {file: k.csv, key: path}}, sd: 1}}]}\n"
    )
    spec = read_text(text, catalogue(), LAWS, str(tmp_path / "spec.yaml"))
    assert spec.series["x"].of[0].values["phi"][0].law.values == (0.1, 0.3, 0.5)
    (tmp_path / "k.csv").unlink()  # the values are in the spec now
    assert read_raw(spec.raw, catalogue(), LAWS) == spec
    with pytest.raises(SpecError, match=r"there is no file .*k\.csv"):
        read_text(text, catalogue(), LAWS, str(tmp_path / "spec.yaml"))


@pytest.mark.parametrize("table, message", [
    ("path,psi\n0,0.1\n", "the table has no column phi; it has path or psi; did you mean psi?"),
    ("path,phi\n0,0.1\n2,0.2\n", "expected the paths 0 to 1 in column path, each once, in any order"),
    ("path,phi\n0,0.1\n1,high\n", 'expected a number, or a list of such numbers, got "high"'),
    ("path,phi\n0\n", "cannot read the table"),
    ("path,phi\n", "cannot read the table"),
    ("path,phi\n0,0.1\n1,1.5\n", "expected all roots"),
])  # fmt: skip
def test_faults_of_tables(tmp_path, table, message):
    (tmp_path / "k.csv").write_text(table)
    text = (
        "seed: 1\npaths: 2\ntime: {steps: 5}\n"
        "series: {x: [{ar: {phi: {from_table: {file: k.csv, key: path}}, sd: 1}}]}\n"
    )
    with pytest.raises(SpecError) as error:
        read_text(text, catalogue(), LAWS, str(tmp_path / "spec.yaml"))
    assert message in str(error.value) or message.split(",")[0] in str(error.value)


def test_a_table_must_have_every_path_and_series():
    table = {"from_table": {"key": "path", "values": [0.1, 0.2, 0.3]}}
    (told,) = faults([{"constant": table}])
    assert told == (
        "the table of x.constant.level has values of 3 paths, and there are 10; add rows, or ask for fewer paths\n"
        "  at paths"
    )
    spec = read([{"constant": table}], paths=3)
    with pytest.raises(SpecError, match="has values of 3 paths, and there are 4"):
        spec.changed(paths=4)
    (told,) = faults([{"constant": {"from_table": {"key": "series", "values": {"y": 1}}}}])
    assert told == "the table of x.constant.level has no value for x; add a row, or take it out of there\n  at the spec"


DECLARED = """procgen: 1
seed: 7
paths: 10
time: {steps: 50}
parameters:
  pull: {draw: {uniform: [0.3, 0.9]}, over: path}
  size: {draw: {uniform: [1, 2]}, over: path}
series:
  x: {ar: {phi: {parameter: %s}, sd: 1}}
"""


def test_a_parameter_that_nothing_uses_is_told():
    with pytest.raises(SpecError) as error:
        read_text(DECLARED % "pull", catalogue(), LAWS)
    assert [str(fault) for fault in error.value.faults] == [
        "nothing uses the parameter size; write {parameter: size} in the place of a number, or remove it\n"
        "  at parameters.size (line 7, column 3)"
    ]
    read_text((DECLARED % "pull").replace("sd: 1", "sd: {parameter: size}"), catalogue(), LAWS)
    with pytest.raises(SpecError) as error:  # a misspelt name is told once, as what it is
        read_text(DECLARED % "pul", catalogue(), LAWS)
    assert len(error.value.faults) == 1 and "did you mean pull?" in str(error.value)


def test_numbers_of_a_list_that_are_not_finite_are_one_fault():
    body = {"seasonal": {"period": 24, "profile": [float("nan")] * 20 + [1.0] * 4}}
    (fault,) = faults(body)
    assert "got .nan; 20 numbers of the list are not finite" in fault
    assert fault.endswith("at series.x.seasonal.profile[0]")
