"""Variants and settings: places found, values checked as in the file, digests and shocks left alone."""

import json
from collections import Counter
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from jsonschema import Draft202012Validator
from typer.testing import CliRunner

import procgen as pg
from procgen.app import app
from procgen.chance.laws import LAWS
from procgen.report.schema import schema
from procgen.spec.places import Nowhere, plain_at, put, steps_of
from procgen.spec.reader import settable
from procgen.spec.tree import from_data
from procgen.spec.variants import all_settings
from procgen.spec.yaml12 import from_text
from procgen.terms import catalogue
from tests.spec.strategies import wild

WILD = wild(catalogue(), LAWS)
GALLERY = sorted((Path(__file__).parents[2] / "specs").glob("*.yaml"))

SPEC = """procgen: 1
seed: 11
paths: 6
time: {steps: 20, start: 2027-01-04T00:00, every: 1h}
shared:
  wind: [{ar: {phi: 0.9, total_sd: 1}}]
series:
  load:
    unit: kW
    of:
      - constant: 80
      - seasonal: {period: 1d, harmonics: [{amplitude: 12, peak: 18:00}, {amplitude: 3}]}
      - use: wind
        times: 2
      - arma: {phi: [0.7, -0.1], theta: 0.3, shock: {garch: {sd: 6, alpha: 0.1, beta: 0.85}}}
        as: swing
  price:
    - exp: [{random_walk: {sd: 0.01, start: 3}}]
  mode: {regimes: {branches: {calm: {ar: {phi: 0.5, sd: 1}}, wild: [{white_noise: {sd: 4}}]},
    durations: {calm: 40, wild: 8}}}
groups:
  shops: {names: [a, b], of: [{white_noise: {sd: 1}}]}
correlation:
  - {between: [load.swing, price.random_walk], value: 0.35}
"""
VARIANTS = """variants:
  crisis: {series.load.swing.shock.garch.sd: 9, time.steps: 30}
  calm:
    correlation[0].value: 0
    series.price.random_walk.sd: 0.002
"""


def read(tmp_path, text, name="load.yaml"):
    file = tmp_path / name
    file.write_text(text, encoding="utf-8")
    return pg.load(file)


@pytest.fixture
def spec(tmp_path):
    return read(tmp_path, SPEC + VARIANTS)


@pytest.mark.parametrize(
    ("place", "value", "path"),
    [
        ("seed", 12, "seed"),
        ("paths", 7, "paths"),
        ("title", "a title", "title"),
        ("time.steps", 21, "time.steps"),
        ("time.zone", "Europe/Berlin", "time.zone"),
        ("shared.wind.ar.phi", 0.5, "shared.wind[0].ar.phi"),
        ("series.load.unit", "MW", "series.load.unit"),
        ("series.load.decimals", 1, "series.load.decimals"),
        ("series.load.constant", 70, "series.load[0].constant"),
        ("series.load.constant.level", 70, "series.load[0].constant.level"),
        ("series.load[0].constant", 70, "series.load[0].constant"),
        ("series.load.seasonal.harmonics[1].amplitude", 4, "series.load[1].seasonal.harmonics[1].amplitude"),
        ("series.load.seasonal.harmonics[1].peak", "06:00", "series.load[1].seasonal.harmonics[1].peak"),
        ("series.load.use.times", 3, "series.load[2].times"),
        ("series.load.swing.phi[1]", -0.2, "series.load[3].arma.phi[1]"),
        ("series.load.swing.theta[0]", 0.2, "series.load[3].arma.theta"),
        ("series.load.swing.times", 2, "series.load[3].times"),
        ("series.load.swing.shock.garch.sd", 9, "series.load[3].arma.shock.garch.sd"),
        ("series.load[3].arma.shock.garch.sd", 9, "series.load[3].arma.shock.garch.sd"),
        ("series.load.of[3].arma.phi[0]", 0.6, "series.load[3].arma.phi[0]"),
        ("series.price.random_walk.sd", 0.02, "series.price[0].exp[0].random_walk.sd"),
        ("series.price.random_walk.drift", 0.001, "series.price[0].exp[0].random_walk.drift"),
        ("series.price.decimals", 3, "series.price.decimals"),
        ("series.mode.ar.phi", 0.6, "series.mode.regimes.branches.calm.ar.phi"),
        ("series.mode.regimes.durations.calm", 20, "series.mode.regimes.durations.calm"),
        ("series.mode.white_noise.sd", 5, "series.mode.regimes.branches.wild[0].white_noise.sd"),
        ("groups.shops.white_noise.sd", 2, "groups.shops[0].white_noise.sd"),
        ("correlation[0].value", 0.5, "correlation[0].value"),
    ],
)
def test_a_place_is_found_by_label_and_by_what_faults_print(spec, place, value, path):
    changed = spec.set({place: value})
    assert plain_at(changed.written.tree, path) == value
    assert changed.digest() != spec.digest() or place in ("title",)
    # nothing else is other: put back what was there, and it is the spec again
    if not path.endswith("constant.level"):  # a short form, which has no such key to put back
        assert changed.set({path: plain_at(spec.written.tree, path)}) == pg.load(spec.raw)


def test_a_whole_term_and_a_whole_list_can_be_put_and_nothing_takes_out(spec):
    other = spec.set({"series.load.swing": {"ar": {"phi": 0.2, "sd": 1}, "as": "swing"}})
    assert [entry.kind for entry in other.series["load"].of] == ["constant", "seasonal", "use", "ar"]
    less = spec.set({"series.load.seasonal": None, "series.load[2]": None})
    assert [entry.label for entry in less.series["load"].of] == ["constant", "swing"]
    swapped = spec.set({"shared.wind.ar.total_sd": None, "shared.wind.ar.sd": 0.4})
    assert swapped.shared["wind"].of[0].values["sd"] == 0.4
    assert spec.set({"correlation": None}).correlation.names == ()
    body = spec.set({"series.load": [{"white_noise": {"sd": 1}, "as": "swing"}]}).series["load"]
    assert (body.unit, [entry.kind for entry in body.of]) == ("kW", ["white_noise"])
    whole = spec.set({"series.load": {"of": {"white_noise": {"sd": 1}, "as": "swing"}, "unit": "MW"}}).series["load"]
    assert whole.unit == "MW"


def test_a_variant_is_the_spec_with_its_settings_and_the_spec_is_left_as_it_was(tmp_path, spec):
    plain = read(tmp_path, SPEC, "plain.yaml")
    assert spec.variants == ("crisis", "calm") and plain.variants == ()
    assert spec == plain and spec.digest() == plain.digest() and spec.raw == plain.raw
    by_hand = SPEC.replace("sd: 6, alpha", "sd: 9, alpha").replace("steps: 20", "steps: 30")
    crisis = spec.variant("crisis")
    hand = read(tmp_path, by_hand, "hand.yaml")
    assert crisis == hand and crisis.digest() == hand.digest()
    assert crisis.variants == () and spec.variant("base") is spec
    assert spec.changed(paths=3).variant("crisis").paths == 3
    with pytest.raises(pg.SpecError, match="no variant crysis; expected one of crisis, calm, base; did you mean"):
        spec.variant("crysis")


def test_variants_share_the_shocks_of_all_they_do_not_change(spec):
    base, crisis, calm = (pg.render(one) for one in (spec, spec.variant("crisis"), spec.variant("calm")))
    assert np.array_equal(base["price"], crisis["price"][:, :20])
    assert not np.array_equal(base["load"], crisis["load"][:, :20])
    assert np.array_equal(base["load"], calm["load"])  # it leads the correlation
    # a garch of another sd with the same shocks is the same noise on another scale: 9/6 of it
    swing = (pg.render(one, reveal="load.swing")["load.swing"] for one in (spec, spec.variant("crisis")))
    a, b = next(swing), next(swing)[:, :20]
    assert np.allclose(b, 1.5 * a, rtol=1e-12)


FAULTY = {
    "series.load.swng.shock.garch.sd: 9": "there is no place series.load.swng.shock.garch.sd in this spec; did you "
    "mean series.load.swing.shock.garch.sd?",
    "load.swing.theta: 9": "there is no place load.swing.theta in this spec; did you mean series.load.swing.theta?",
    "tim.steps: 9": "there is no place tim.steps in this spec; did you mean time.steps?",
    "steps: 9": "there is no place steps in this spec; did you mean time.steps?",
    "series.load.swing.phi[2]: 9": "there is no place series.load.swing.phi[2] in this spec; series.load[3].arma.phi "
    "has 2, counted from [0]",
    "series.load.swing.zeta.q: 1": "there is no place series.load.swing.zeta.q in this spec; series.load[3].arma has "
    "one of phi, theta, shock, sd, total_sd, law, before",
    "series.load.nope.phi: 1": "there is no place series.load.nope.phi in this spec; did you mean "
    "series.load.swing.phi?",
    "series.shops.white_noise.sd: 1": "there is no place series.shops.white_noise.sd in this spec; did you mean "
    "groups.shops.white_noise.sd?",
    "groups.shops.a.white_noise.sd: 1": "there is no place groups.shops.a.white_noise.sd in this spec; did you mean "
    "groups.shops.white_noise.sd?",
    "series.third: [{white_noise: {sd: 1}}]": "there is no place series.third in this spec; series has one of load, "
    "price, mode; a setting changes what is there and adds no series: write third in the spec, and take it out (null) "
    "where it is not wanted",
    "series.load.swing.phi[1]: 0.4": None,
    "reuse: 1": "there is no place reuse in this spec; a spec has one of procgen, seed, paths, time, shared, series, "
    "groups, correlation, title, parameters",
    "series.price.random_walk.sd: -1": "expected a number above 0, got -1 (sd: standard deviation of the shock)",
    "series.load.constant: high": 'expected a number, got "high" (level: the value)',
    "time.steps: 1e99": None,
    "time.start: tomorrow": 'expected a date, with or without a time, such as 2027-01-04 or 2027-01-04T06:00, got '
    '"tomorrow" (start: local date and time at which step 0 begins; of two, the first)',
}


@pytest.mark.parametrize(("setting", "message"), FAULTY.items())
def test_what_is_wrong_in_a_variant_is_said_with_its_line(tmp_path, setting, message):
    with pytest.raises(pg.SpecError) as raised:
        read(tmp_path, SPEC + f"variants:\n  worse:\n    {setting}\n")
    fault = raised.value.faults[0]
    lines = SPEC.count("\n")
    assert fault.place.line == lines + 3 and "worse" in fault.place.path
    assert message is None or fault.message == message


@pytest.mark.parametrize(("setting", "message"), FAULTY.items())
def test_the_same_is_said_of_a_setting_with_the_option_named(spec, setting, message):
    place, _, value = setting.partition(": ")
    result = CliRunner().invoke(app, ["theory", spec.file, "--set", f"{place}={value}"])
    assert result.exit_code == 2 and result.stdout == ""
    assert message is None or result.stderr.startswith(f"procgen: {message}\n  at ")
    assert result.stderr.rstrip().endswith("(--set)")


@pytest.mark.parametrize(
    ("written", "wrong", "setting"),
    [
        ("period: 1d", "period: 1 moon", "series.load.seasonal.period: 1 moon"),
        ("phi: 0.9", "phi: 1.1", "shared.wind.ar.phi: 1.1"),
        ("phi: [0.7, -0.1]", "phi: [0.7, 0.4]", "series.load.swing.phi: [0.7, 0.4]"),
        ("sd: 0.01", "sd: {value: 0.01, per: moon}", "series.price.random_walk.sd: {value: 0.01, per: moon}"),
        ("alpha: 0.1", "alpha: 0.2", "series.load.swing.shock.garch.alpha: 0.2"),
        ("value: 0.35", "value: 1", "correlation[0].value: 1"),
        ("paths: 6", "paths: 0", "paths: 0"),
        ("unit: kW", "unit: 3", "series.load.unit: 3"),
    ],
)
def test_a_value_is_judged_as_in_the_file(tmp_path, written, wrong, setting):
    def messages(text):
        with pytest.raises(pg.SpecError) as raised:
            read(tmp_path, text)
        return [fault.message for fault in raised.value.faults]

    assert SPEC.count(written) == 1
    in_file = messages(SPEC.replace(written, wrong))
    assert messages(f"{SPEC}variants:\n  worse:\n    {setting}\n") == in_file


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("variants: 3", "expected variants by name"),
        ("variants: {}", "expected variants by name"),
        ("variants: {a: {}}", "expected places, each with what is to stand there"),
        ("variants: {base: {seed: 1}}", "the name base stands for the spec itself or for all; choose another"),
        ("variants: {all: {seed: 1}}", "the name all stands for the spec itself or for all; choose another"),
        ("variants: {a b: {seed: 1}}", "expected a name of at most 100 letters"),
        ("variants: {a: {seed: 1, seed: 2}}", "the key seed is written twice"),
        ("variants: {a: {series.load.swing.phi[0]: 0.1}}", "this is not valid YAML"),  # a bracket in a flow mapping
        (
            "variants: {a: {series.load.swing.theta: 0.1, 'series.load[3].arma.theta': 0.2}}",
            "series.load[3].arma.theta is set twice, first as series.load.swing.theta; keep one of them",
        ),
    ],
)
def test_faults_of_the_section(tmp_path, text, message):
    with pytest.raises(pg.SpecError) as raised:
        read(tmp_path, f"{SPEC}{text}\n")
    assert message in raised.value.faults[0].message


def test_settings_of_python_and_of_the_command_line():
    assert [s.value.plain() for s in all_settings(["a.b=1e-3", "c=[no, 0x10]", "d=2027-01-01", "e=x=y", "f=null"])] == [
        1e-3, ["no", 16], "2027-01-01", "x=y", None,
    ]  # fmt: skip
    with pytest.raises(pg.SpecError) as raised:
        all_settings(["a", "=1", "b=", "c=[", "d={x: 1, x: 2}", "e=!tag 1"])
    assert [str(f.place) for f in raised.value.faults] == [
        "a (--set)", "the spec (--set)", "b (--set)", "c (--set)", "d (--set)", "e (--set)",
    ]  # fmt: skip
    spec = pg.load({"seed": 1, "paths": 2, "time": {"steps": 3}, "series": {"x": {"white_noise": {"sd": 1}}}})
    with pytest.raises(pg.SpecError, match="expected a number above 0, got -1") as refused:
        spec.set({"series.x.white_noise.sd": -1})
    assert refused.value.faults[0].place.path == "series.x.white_noise.sd"
    with pytest.raises(pg.SpecError, match="expected places that are texts, got int"):
        spec.set({3: 1})
    with pytest.raises(pg.SpecError, match="got object; convert it"):
        spec.set({"series.x.white_noise.sd": object()})


@pytest.mark.parametrize("place", ["", ".", "a..b", "a.", ".a", "a[", "a[-1]", "a[1", "a b", "é", "a[1]b", "x" * 600])
def test_what_is_no_place(place):
    with pytest.raises(Nowhere):
        steps_of(place)


def test_render_writes_a_variant_or_all_of_them_and_validate_reads_its_own_spec(tmp_path, spec):
    run = lambda *args: CliRunner().invoke(app, [str(arg) for arg in args])  # noqa: E731
    one = run("render", spec.file, "--variant", "crisis", "-o", tmp_path / "one")
    assert one.exit_code == 0 and pg.open_ensemble(tmp_path / "one").spec == spec.variant("crisis")
    every = run("render", spec.file, "--variant", "all", "-o", tmp_path / "all", "--set", "series.load.constant=7")
    assert every.exit_code == 0, every.stderr
    assert sorted(f.name for f in (tmp_path / "all").iterdir()) == ["base", "calm", "crisis"]
    assert f"procgen difference {tmp_path / 'all' / 'base'} " in every.stdout
    calm = pg.open_ensemble(tmp_path / "all" / "calm")
    assert calm.spec.digest() == spec.variant("calm").set({"series.load.constant": 7}).digest()
    manifest = json.loads((tmp_path / "all" / "calm" / "manifest.json").read_text())
    assert manifest["spec"]["raw"]["correlation"][0]["value"] == 0
    assert "variants" not in json.dumps(manifest["spec"])
    for folder in ("base", "crisis"):
        assert run("validate", tmp_path / "all" / folder).exit_code in (0, 2)  # few paths: never departing


def test_all_variants_of_a_spec_without_any_are_remarked_on(tmp_path):
    (tmp_path / "a.yaml").write_text("{procgen: 1, seed: 1, paths: 2, time: {steps: 2}, series: {x: [{constant: 1}]}}")
    out = tmp_path / "out"
    made = CliRunner().invoke(app, ["render", str(tmp_path / "a.yaml"), "--variant", "all", "-o", str(out)])
    assert made.exit_code == 0 and (out / "base" / "manifest.json").exists()
    assert f"the spec has no variants; {out / 'base'} has it as written" in made.stderr


def test_start_moves_the_dates_and_no_deterministic_step_of_the_clock(spec, tmp_path):
    out = tmp_path / "later"
    result = CliRunner().invoke(app, ["render", spec.file, "--start", "2028-02-01T12:00", "-o", str(out)])
    assert result.exit_code == 0
    assert str(pg.open_ensemble(out).times()[0]).startswith("2028-02-01T12:00")
    bad = CliRunner().invoke(app, ["render", spec.file, "--start", "soon", "-o", str(tmp_path / "no")])
    assert bad.exit_code == 2 and "time.start (--start)" in bad.stderr and not (tmp_path / "no").exists()


def test_theory_and_picture_take_the_variant(spec, tmp_path):
    crisis = CliRunner().invoke(app, ["theory", spec.file, "--variant", "crisis"]).stdout
    assert "6 paths × 30 steps" in crisis.replace("1 h from", "")
    page = tmp_path / "crisis.svg"
    assert CliRunner().invoke(app, ["picture", spec.file, "--variant", "crisis", "-o", str(page)]).exit_code == 0
    assert page.exists()


def test_the_schema_knows_variants():
    judge = Draft202012Validator(schema())
    raw = from_text(SPEC + VARIANTS, None, []).plain()
    assert judge.is_valid(raw)
    assert not judge.is_valid({**raw, "variants": {}}) and not judge.is_valid({**raw, "variants": {"a": {}}})
    assert not judge.is_valid({**raw, "variants": {"a b": {"seed": 1}}})


# every place of the gallery


def places(tree):
    """Every place in a tree as faults print it, with what stands there."""
    inner = tree.value.values() if tree.is_map else tree.value if tree.is_list else ()
    for one in inner:
        if one.place.path and not one.place.path.startswith(("reuse", "variants", "procgen")):
            yield one.place.path, one.plain()
            yield from places(one)


@pytest.mark.parametrize("file", GALLERY, ids=lambda file: file.stem)
def test_every_place_of_the_gallery_can_be_put_and_what_stands_there_changes_nothing(file):
    spec = pg.load(file)
    tree = spec.written.tree
    found = list(places(tree))
    twice = Counter(path for path, _ in found)  # `of` is left out: a series and its body are one place
    kept = {path: value for path, value in found if value is not None and '["' not in path and twice[path] == 1}
    assert len(kept) > 5
    declared = settable(spec.written.catalogue)
    for path, value in kept.items():
        other, where = put(tree, path, from_data(value, None, []), declared)
        assert (other.plain(), where) == (tree.plain(), path)


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.data())
def test_whatever_is_set_it_is_a_spec_or_a_spec_error(data):
    spec = pg.load(from_text(SPEC, None, []).plain())
    known = sorted(dict(places(spec.written.tree)))
    place = data.draw(st.sampled_from(known) | st.text(max_size=20))
    cut = data.draw(st.integers(0, len(place)))
    more = data.draw(st.sampled_from(["", "", ".", "[0]", "[9]", "x", ".of", ".value", ".ar.phi"]))
    mangled = place[:cut] + more + place[cut:]
    try:
        assert isinstance(spec.set({mangled: data.draw(WILD)}), pg.Spec)
    except pg.SpecError as error:
        assert str(error)


@pytest.mark.parametrize(
    "members",
    [{"names": ["s1", "s2"]}, {"names": {"prefix": "s", "count": 2}}, {"table": {"s1": {"a": 1}, "s2": {"a": 2}}}],
)
def test_a_series_of_a_group_is_set_for_all_of_it(members):
    import procgen as pg

    body = {"of": [{"ar": {"phi": 0.5, "sd": 1}}]}
    spec = pg.load({"seed": 1, "paths": 1, "time": {"steps": 3}, "groups": {"shops": {**members, **body}}})
    with pytest.raises(pg.SpecError) as error:
        spec.set({"series.s2.ar.sd": 2})
    said = "s2 is one of the group shops, whose series are written once; set groups.shops.ar.sd for all"
    assert said in str(error.value)
    assert spec.set({"groups.shops.ar.sd": 2}).series["s2"].of[0].values["sd"] == 2
    with pytest.raises(pg.SpecError) as error:
        spec.set({"series.s3.ar.sd": 2})
    assert "one of the group" not in str(error.value)
