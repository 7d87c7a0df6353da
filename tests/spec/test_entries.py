"""Bodies and entries: what is read, and every fault as it is printed."""

import pytest

from tests.spec.small import HEAD, StudentT, body, body_faults, faults, read

A_TERM = "a term such as {white_noise: {sd: 1}}, or a list of terms, which is their sum"


def entry(text):
    (found,) = body(text).series["x"].of
    return found


def test_an_entry_has_every_declared_parameter_and_its_place():
    found = entry("{ar: {phi: 0.5, sd: 2}, as: swing, times: 3}")
    assert (found.kind, found.label, found.times, found.shock) == ("ar", "swing", 3.0, None)
    values = dict(found.values)
    assert values.pop("law").name == "normal"
    assert values == {"phi": (0.5,), "sd": 2.0, "total_sd": None, "before": None}
    assert str(found.place) == "series.x (a.yaml, line 6, column 6)"
    assert str(found.places["phi"]) == "series.x.ar.phi (a.yaml, line 6, column 17)"
    assert str(found.places["as"]) == "series.x.as (a.yaml, line 6, column 34)"


def test_numbers_are_read_as_the_declared_type():
    values = entry("{lag: {of: {constant: 1}, steps: 2e0}}").values
    assert values["steps"] == 2 and type(values["steps"]) is int
    level = entry("{constant: 3}").values["level"]
    assert level == 3.0 and type(level) is float


def test_short_forms_mean_the_same_as_long_ones():
    assert entry("{constant: 3}") == entry("{constant: {level: 3}}")
    assert body("{constant: 3}").series == body("[{constant: 3}]").series == body("{of: {constant: 3}}").series
    long = entry("{exp: {of: [{white_noise: {sd: 1}}]}}")
    assert entry("{exp: {white_noise: {sd: 1}}}") == entry("{exp: [{white_noise: {sd: 1}}]}") == long
    assert entry("{ar: {phi: 0.5, sd: 1}}") == entry("{ar: {phi: [0.5], sd: 1}}")
    assert entry("{mix: {parts: {of: {constant: 1}, share: 1}}}") == entry(
        "{mix: {parts: [{of: [{constant: 1}], share: 1}]}}"
    )


def test_a_shock_takes_the_label_of_its_owner_unless_it_has_one():
    found = entry("{ar: {phi: 0.5, shock: {garch: {sd: 1, alpha: 0.1}}}, as: swing}")
    assert (found.shock.kind, found.shock.label) == ("garch", "swing")
    assert found.values["sd"] is found.values["total_sd"] is found.values["law"] is None
    named = entry("{ar: {phi: 0.5, shock: {garch: {sd: 1, alpha: 0.1}, as: noise}}, as: swing}")
    assert (named.label, named.shock.label) == ("swing", "noise")


def test_laws_are_read_with_their_parameters():
    assert entry("{white_noise: {sd: 1, law: {student_t: {df: 5}}}}").values["law"] == StudentT(df=5.0)
    assert entry("{white_noise: {sd: 1, law: normal}}") == entry("{white_noise: {sd: 1, law: {normal: {}}}}")


@pytest.mark.parametrize(
    ("time", "slope"),
    [("{steps: 9, every: 15min}", 6 / 96), ("{steps: 9, every: 1 month}", 6 * 365.2425 / 12)],
)
def test_a_rate_is_converted_by_the_grid(time, slope):
    text = HEAD.replace("{steps: 100}", time) + "series:\n  x: {trend: {slope: {value: 6, per: day}}}\n"
    assert read(text).series["x"].of[0].values["slope"] == pytest.approx(slope, rel=1e-15)


def test_the_spread_of_a_diffusion_is_converted_by_the_square_root():
    text = HEAD.replace("{steps: 100}", "{steps: 9, every: 15min}")
    spec = read(text + "series:\n  x: {random_walk: {sd: {value: 0.16, per: day}}}\n")
    assert spec.series["x"].of[0].values["sd"] == pytest.approx(0.16 / 96**0.5, rel=1e-15)


def test_per_step_needs_no_calendar():
    assert entry("{trend: {slope: {value: 0.5, per: step}}}") == entry("{trend: {slope: 0.5}}")


def test_bodies_within_records_are_read():
    (part,) = entry("{mix: {parts: {of: {ar: {phi: 0.1, sd: 1}}, share: 2}}}").values["parts"]
    assert [inner.label for inner in part["of"]] == ["ar"] and part["share"] == 2.0


@pytest.mark.parametrize(
    ("text", "path", "column", "message"),
    [
        # not a term at all
        ("5", "x", 6, f"expected {A_TERM}, got 5"),
        ("", "x", 5, f"expected {A_TERM}, got nothing"),
        ("[]", "x", 6, f"expected {A_TERM}, got an empty list"),
        ("{}", "x", 6, f"expected {A_TERM}, got an empty mapping"),
        ("[[{constant: 1}]]", "x[0]", 7, f"expected {A_TERM}, got a list of 1"),
        ("[garch]", "x[0]", 7, f'expected {A_TERM}, got "garch"; write {{garch: {{…}}}} with its parameters'),
        ("[{as: a}]", "x[0]", 7, f"expected {A_TERM}, got a mapping with the key as"),
        ("{arr: {phi: 0.5}}", "x.arr", 7, "unknown term arr; did you mean ar? `procgen terms` lists them all"),
        ("{zzz: 1}", "x.zzz", 7, "unknown term zzz; `procgen terms` lists them all"),
        ("{constant: 1, trend: {}}", "x", 6,
         "expected one term, got constant, trend; give each a list item of its own, with a dash"),
        # beside the kind
        ("{constant: 1, time: 2}", "x.time", 20,
         "unknown key time; expected one of constant, as, times; did you mean times?"),
        ("{white_noise: {sd: 1}, law: normal}", "x.law", 29,
         "law stands beside white_noise, not in it; indent it under white_noise"),
        ("{constant: 1, unit: kW}", "x.unit", 20,
         "unit belongs to a series, not to a term; put the terms under of: and unit: beside it"),
        ("{constant: 1, of: []}", "x", 20,
         "of takes all the terms; put constant in it, as in of: [{constant: {…}}]"),
        ("{constant: 1, times: two}", "x.times", 27, 'expected a number, got "two"'),
        ("{constant: 1, as: 2nd}", "x.as", 24, "expected a name of at most 100 letters a–z, digits and _, not "
         'beginning with a digit, got "2nd"'),
        ("{constant: 1, as: a.b}", "x.as", 24, "expected a name of at most 100 letters a–z, digits and _, not "
         'beginning with a digit, got "a.b"'),
        # parameters
        ("{white_noise: }", "x.white_noise", 19, "expected a mapping with the keys sd, law, got nothing"),
        ("{white_noise: {}}", "x.white_noise", 20, "expected the key sd (standard deviation: a number above 0)"),
        ("{white_noise: {ds: 1}}", "x.white_noise.ds", 21, "unknown key ds; expected sd or law; did you mean sd?"),
        ("{white_noise: {sd: 0}}", "x.white_noise.sd", 25,
         "expected a number above 0, got 0 (sd: standard deviation)"),
        ("{white_noise: {sd: .inf}}", "x.white_noise.sd", 25,
         "expected a number above 0, got .inf; the number must be finite (sd: standard deviation)"),
        ("{white_noise: {sd: '1'}}", "x.white_noise.sd", 25, 'expected a number above 0, got "1"; this is a text; '
         "write the number plainly, without quotes, spaces or underscores (sd: standard deviation)"),
        ("{white_noise: {sigma: 1}}", "x.white_noise.sigma", 21,
         "unknown key sigma; expected sd or law; did you mean sd?"),
        ("{sine: {period: 3}}", "x.sine", 7,
         "unknown term sine; did you mean seasonal? `procgen terms` lists them all"),
        ("{log: {sd: 3}}", "x.log", 7, "unknown term log; `procgen terms` lists them all"),
        ("{white_noise: {sd: 1,5}}", "x.white_noise", 27, "expected a key that is a text, got 5; write a decimal sign "
         "as a point, and no comma within a number"),
        ("{white_noise: {sd: 5%}}", "x.white_noise.sd", 25, 'expected a number above 0, got "5%"; write a share, such '
         "as 0.05 for 5 % (sd: standard deviation)"),
        ("{white_noise: {sd: '0,5'}}", "x.white_noise.sd", 25,
         'expected a number above 0, got "0,5"; write the decimal sign as a point (sd: standard deviation)'),
        ("{white_noise: {sd: true}}", "x.white_noise.sd", 25,
         "expected a number above 0, got true (sd: standard deviation)"),
        ("{white_noise: {sd: [1]}}", "x.white_noise.sd", 25,
         "expected a number above 0, got a list of 1 (sd: standard deviation)"),
        ("{lag: {of: {constant: 1}, steps: 1.5}}", "x.lag.steps", 39,
         "expected a whole number of at least 1, got 1.5 (steps: how far back)"),
        ("{ar: {phi: [0.5, x], sd: 1}}", "x.ar.phi[1]", 23, 'expected a number, got "x" (phi: coefficients)'),
        ("{ar: {phi: [], sd: 1}}", "x.ar.phi", 17,
         "expected a number, or a list of such numbers, got an empty list (phi: coefficients)"),
        ("{seasonal: {period: 9, centre: median}}", "x.seasonal.centre", 37,
         'expected one of sum, mean, none, got "median"; did you mean mean? (centre: what is kept at 0)'),
        ("{seasonal: {period: -9}}", "x.seasonal.period", 26, "expected a length of time above 0: a number of steps, "
         "or a text such as 15min, 1d, 2 weeks, got -9 (period: length of one cycle)"),
        ("{seasonal: {period: 1d}}", "x.seasonal.period", 26,
         '"1d" needs the length of a step; give time: {every: 1h, …}, or write a number of steps'),
        ("{seasonal: {period: 9, peak: [1]}}", "x.seasonal.peak", 35, "expected a point in time: a number of steps "
         "from step 0, a clock time such as 18:00, or a date, got a list of 1 (peak: where it is highest)"),
        ("{use: 5}", "x.use", 12, "expected a text, got 5; put it in quotes (name: what is used)"),
        ("{garch: {alpha: 0.1, sd: 1, allow_infinite_variance: yes}}", "x.garch.allow_infinite_variance", 59,
         'expected true or false, got "yes" (allow_infinite_variance: whether that is meant)'),
        ("{trend: {bends: 5}}", "x.trend.bends", 22,
         "expected a list of mappings with the keys at, slope, got 5 (bends: points where the slope changes)"),
        ("{trend: {bends: {at: 5, slop: 1}}}", "x.trend.bends.slop", 30,
         "unknown key slop; expected at or slope; did you mean slope?"),
        ("{ar: {phi: 0.5, sd: 1, before: 3}}", "x.ar.before", 37,
         "expected a mapping with the keys x, shocks, got 3 (before: what came before step 0)"),
        # joint rules
        ("{garch: {sd: 1, alpha: 0.5, beta: 0.6}}", "x.garch.alpha", 29,
         "alpha + beta must be below 1 for a finite variance, got 1.1; lower one"),
        ("{ar: {phi: 0.5}}", "x.ar", 11, "expected sd (of the shock) or total_sd (of the term itself) or a shock, got "
         "none of them; give exactly one"),
        ("{ar: {phi: 0.5, sd: 1, total_sd: 2}}", "x.ar.total_sd", 29,
         "expected sd or total_sd, got both; keep one of them"),
        # laws
        ("{white_noise: {sd: 1, law: studnt}}", "x.white_noise.law", 33,
         'expected normal or student_t, got "studnt"; did you mean student_t? (law: law of the shock)'),
        ("{white_noise: {sd: 1, law: student_t}}", "x.white_noise.law", 33,
         'expected the law student_t with its parameters df, got "student_t" (law: law of the shock)'),
        ("{white_noise: {sd: 1, law: {student_t: {df: 2}}}}", "x.white_noise.law.student_t.df", 50,
         "expected a number above 2, got 2 (df: degrees of freedom)"),
        ("{white_noise: {sd: 1, law: {student_t: {df: 13}}}}", "x.white_noise.law.student_t", 45,
         "df must not be 13; choose 12 or 14"),
        ("{white_noise: {sd: 1, law: [normal]}}", "x.white_noise.law", 33,
         "expected a law: a name such as normal, or a name with its parameters such as {student_t: {df: 5}}, "
         "got a list of 1 (law: law of the shock)"),
        # shocks
        ("{ar: {phi: 0.1, shock: {ar: {phi: 0.1, sd: 1}}}}", "x.ar.shock", 29,
         "expected a noise as shock (white_noise, garch), got ar; use one of those"),
        ("{ar: {phi: 0.1, law: normal, shock: {white_noise: {sd: 1}}}}", "x.ar.law", 22,
         "the shock says its own spread and law; remove law, or remove shock"),
        ("{garch: {sd: 1, alpha: 0.1, shock: {white_noise: {sd: 1}}}}", "x.garch.shock", 34, "unknown key shock; "
         "expected one of omega, sd, alpha, beta, law, allow_infinite_variance"),
        # per
        ("{ar: {phi: {value: 0.3, per: day}, sd: 1}}", "x.ar.phi", 17, "phi cannot be written with per: AR "
         "coefficients cannot be rescaled to another step; write its value per step"),
        ("{constant: {value: 1, per: day}}", "x.constant", 17, "level cannot be written with per: only rates and the "
         "spread of a diffusion scale with the length of a step; write its value per step"),
        ("{constant: {level: {value: 1, per: day}}}", "x.constant.level", 25, "level cannot be written with per: only "
         "rates and the spread of a diffusion scale with the length of a step; write its value per step"),
        ("{trend: {slope: {value: 1, per: day}}}", "x.trend.slope.per", 38,
         "per: day needs the length of a step; give time: {every: 1h, …}, or write per: step"),
        ("{trend: {slope: {value: 1, per: 5}}}", "x.trend.slope.per", 38,
         "expected a unit of time such as day, got 5 (slope: change a step)"),
        ("{trend: {slope: {per: day}}}", "x.trend.slope", 22, "expected exactly the keys value and per, as in "
         "{value: 0.16, per: year}, got a mapping with the key per (slope: change a step)"),
        ("{trend: {slope: {value: x, per: step}}}", "x.trend.slope.value", 30,
         'expected a number, got "x" (slope: change a step)'),
        # compositions
        ("{exp: 5}", "x.exp", 12, f"expected {A_TERM}, got 5"),
        ("{exp: {}}", "x.exp", 12, f"expected the key of (the terms: {A_TERM})"),
        ("{lag: {white_noise: {sd: 1}}}", "x.lag", 12,
         "expected the key steps (how far back: a whole number of at least 1)"),
        ("{exp: [{constant: x}]}", "x.exp[0].constant", 24, 'expected a number, got "x" (level: the value)'),
        ("{mix: {parts: [{of: {constant: x}, share: 1}]}}", "x.mix.parts[0].constant", 37,
         'expected a number, got "x" (level: the value)'),
    ],
)  # fmt: skip
def test_faults(text, path, column, message):
    assert body_faults(text) == [f"{message}\n  at series.{path} (a.yaml, line 6, column {column})"]


def test_every_fault_of_a_spec_is_found_in_one_go():
    text = """procgen: 2
paths: 0
time: {steps: 10, every: 15 minuets}
series:
  load:
    - ar: {phi: [0.5, x], sd: -1}
    - garch: {alpha: 0.7, beta: 0.7, sd: 1}
    - ar: {phi: 0.2, sd: 1}
    - use: waether
shared:
  weather: [{white_noise: {}}]
correlation: {between: [load.ar, load.garhc], value: 2}
"""
    assert faults(text) == [
        "expected the key seed (the number all draws follow from: a whole number in [0, 2^128 − 1])\n"
        "  at the spec (a.yaml, line 1, column 1)",
        "expected a whole number equal to 1, got 2 (procgen: version of the spec language)\n"
        "  at procgen (a.yaml, line 1, column 10)",
        "expected a whole number in [1, 1e+12], got 0 (paths: number of paths)\n  at paths (a.yaml, line 2, column 8)",
        "unknown unit of time minuets; expected ms, s, min, h, day, week, month, quarter, year, business day or step; "
        "did you mean minutes?\n  at time.every (a.yaml, line 3, column 26)",
        'expected a number, got "x" (phi: coefficients)\n  at series.load[0].ar.phi[1] (a.yaml, line 6, column 23)',
        "expected a number above 0, got -1 (sd: standard deviation of the shock)\n"
        "  at series.load[0].ar.sd (a.yaml, line 6, column 31)",
        "alpha + beta must be below 1 for a finite variance, got 1.4; lower one\n"
        "  at series.load[1].garch.alpha (a.yaml, line 7, column 22)",
        "a second ar in load (the first is in line 6) needs a label of its own, by which it and its draws are found; "
        "write as: some_name beside ar\n  at series.load[2] (a.yaml, line 8, column 7)",
        "there is no series or shared body named waether; expected weather or load; did you mean weather?\n"
        "  at series.load[3].use (a.yaml, line 9, column 12)",
        "expected the key sd (standard deviation: a number above 0)\n"
        "  at shared.weather[0].white_noise (a.yaml, line 11, column 27)",
        "there is no term of load named garhc; expected ar or garch; did you mean garch?\n"
        "  at correlation.between[1] (a.yaml, line 12, column 34)",
        "expected a number in (-1, 1), got 2 (value: correlation of the primary normals)\n"
        "  at correlation.value (a.yaml, line 12, column 54)",
    ]


def test_a_fault_behind_an_anchor_is_told_once():
    text = HEAD + "series:\n  x: [&a {white_noise: {sd: 0}, as: one}]\n  y: [*a]\n"
    assert faults(text) == [
        "expected a number above 0, got 0 (sd: standard deviation)\n"
        "  at series.x[0].white_noise.sd (a.yaml, line 6, column 29)"
    ]


def test_no_more_than_two_hundred_faults_are_told():
    found = body_faults("[" + "{white_noise: 5}, " * 1000 + "]")
    assert len(found) == 201
    assert found[-1] == "more than 200 faults; these are the first\n  at the spec (a.yaml)"
