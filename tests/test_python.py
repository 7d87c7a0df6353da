"""The first ten minutes with the Python calls: what is shown on a prompt, what is offered, what a slip is answered."""

from __future__ import annotations

import ast
import inspect
import re
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import procgen as pg
from tests.test_documents import ROOT


@pytest.fixture(scope="module")
def spec():
    return pg.load(ROOT / "specs" / "cold-store.yaml").changed(paths=8, steps=48)


@pytest.fixture(scope="module")
def ens(spec):
    return pg.render(spec)


def test_what_a_prompt_shows_fits_in_a_few_lines(spec, ens):
    assert repr(spec) == (
        "<Spec Cold store, quarter-hourly load and price: load_kw, price; 8 paths × 48 steps, seed 271828, "
        "variants heatwave, dear_power>"
    )
    assert repr(ens) == "<Ensemble of load_kw, price: 8 paths × 48 steps, 6.14 kB of values>"
    assert repr(ens.paths(3, 5)) == "<Ensemble of load_kw, price: 2 paths × 48 steps from path 3, 1.54 kB of values>"
    theory = pg.theory(spec)
    assert repr(theory) == "<Theory of load_kw, price>"
    assert repr(theory["price"]) == "<SeriesTheory of price>"
    assert repr(spec.time).startswith("Grid(steps=48")


def test_print_gives_what_the_commands_print(spec, ens):
    difference, verdict = pg.difference(spec, spec.variant("dear_power")), pg.validate(ens)
    assert str(difference) == difference.text() and len(repr(difference)) < 200
    assert str(verdict) == verdict.text() and len(repr(verdict)) < 200


def test_digests_print_as_the_command_does(spec, tmp_path):
    pg.render(spec, tmp_path / "a")
    found = pg.check_digest(tmp_path / "a")
    assert str(found) == f"{found.digest}  as recorded"


def test_an_ensemble_is_walked_by_names_and_by_paths(ens):
    assert [*ens] == ["load_kw", "price"] == ens._ipython_key_completions_() and len(ens) == 2
    assert "price" in ens and "pric" not in ens
    frames = dict(ens.each_path())
    assert [*frames] == [*range(8)]
    for name in ens:
        assert np.array_equal(np.stack([frame[name] for frame in frames.values()]), ens[name])
        assert np.array_equal(ens.wide(name).to_numpy().T, ens[name])


def test_pandas_finds_again_in_every_shape_what_the_arrays_hold(ens):
    """Reshaped by pandas itself: pivot, explode, groupby."""
    panel, nested = ens.panel(), ens.nested()
    pivoted = panel.pivot(index=["path", "time"], columns="id", values="value")
    assert np.array_equal(pivoted["load_kw"].to_numpy().reshape(8, 48), ens["load_kw"])
    assert np.array_equal(nested["price"].explode().to_numpy(float).reshape(8, 48), ens["price"])
    long = ens.to_pandas()
    assert long.groupby("path")["price"].mean().to_numpy() == pytest.approx(ens["price"].mean(axis=1))
    assert isinstance(panel["time"].dtype, pd.DatetimeTZDtype)


@pytest.mark.parametrize(
    ("slip", "kind", "answer"),
    [
        (lambda spec, ens: ens["load_kv"], KeyError, r"one of load_kw, price, got 'load_kv'; did you mean load_kw\?"),
        (lambda spec, ens: ens[3], KeyError, r"got 3; path 3 alone: \.paths\(3, 4\)"),
        (lambda spec, ens: ens.wide("pric"), KeyError, r"got 'pric'; did you mean price\?"),
        (lambda spec, ens: pg.theory(spec)["prise"], KeyError, r"got 'prise'; did you mean price\?"),
        (lambda spec, ens: spec.variant("heat"), pg.SpecError, r"there is no variant heat; .* did you mean heatwave\?"),
        (
            lambda spec, ens: spec.set({"series.load_kw.trend.lvel": 3}),
            pg.SpecError,
            r"did you mean .*level\?",
        ),
        (lambda spec, ens: pg.load("specs/none.yaml"), pg.SpecError, "cannot read the spec: No such file"),
        (lambda spec, ens: pg.render(7), TypeError, "expected a Spec, the path of a YAML file, or a mapping"),
        (lambda spec, ens: pg.open_ensemble(ROOT), pg.EnsembleError, r"has no manifest\.json"),
        (lambda spec, ens: ens.paths(5, 9), pg.EnsembleError, "expected paths within 0 to 8"),
        (
            lambda spec, ens: ens.panel("load_kw"),
            pg.EnsembleError,
            r'roles and their names, as in {"time": "week"}, got',
        ),
        (lambda spec, ens: spec.set("paths=3"), pg.SpecError, r"expected values by place, as in .*, got str"),
        (
            lambda spec, ens: pg.difference(ens, ens, at=3),
            pg.EnsembleError,
            r"a list of steps, such as \[0, 47\], got 3",
        ),
        (lambda spec, ens: pg.difference(ens, ens, at=[0.5]), pg.EnsembleError, r"a list of steps, .* got \[0\.5\]"),
        (lambda spec, ens: pg.difference(ens, "no"), pg.EnsembleError, "there is no file or folder no; give a spec"),
        (lambda spec, ens: pg.open_ensemble("specs/no"), pg.EnsembleError, "there is no folder specs/no; expected"),
        (lambda spec, ens: pg.check_digest("specs/no"), pg.EnsembleError, "there is no folder specs/no; expected"),
        (lambda spec, ens: pg.render(spec, reveal="price.random_wlak"), pg.EnsembleError, "did you mean random_walk?"),
        (lambda spec, ens: [*ens.each_path("lod_kw")], pg.EnsembleError, r"got 'lod_kw'; did you mean load_kw\?"),
    ],
)
def test_a_slip_is_answered_with_what_was_expected(spec, ens, slip, kind, answer):
    with pytest.raises(kind, match=answer):
        slip(spec, ens)


def test_the_ensembles_in_a_folder_are_offered(spec, tmp_path):
    for name in ("base", "heatwave"):
        pg.render(spec.variant(name), tmp_path / "store" / name)
    offered = r"there are ensembles in it \(base, heatwave\): give one of them, such as .*store.base$"
    with pytest.raises(pg.EnsembleError, match=offered):
        pg.open_ensemble(tmp_path / "store")
    with pytest.raises(pg.EnsembleError, match=r"there is no folder .*; did you mean heatwave\?$"):
        pg.check_digest(tmp_path / "store" / "heatwav")


def test_every_public_name_says_what_it_is_and_what_it_takes():
    for name in pg.__all__:
        if name != "__version__":
            called = getattr(pg, name)
            assert len(inspect.getdoc(called) or "") > 30, name
    assert "spec" in inspect.signature(pg.theory).parameters
    assert inspect.getdoc(type(pg.theory).__call__).startswith("The theory of every series of a spec")
    for shape in ("panel", "wide", "nested", "each_path", "export", "to_pandas", "paths", "blocks"):
        assert len(inspect.getdoc(getattr(pg.Ensemble, shape))) > 30, shape


def test_a_type_checker_knows_what_the_calls_give():
    """What is public is annotated, and `py.typed` (PEP 561) tells checkers so."""
    assert Path(pg.__file__).with_name("py.typed").exists()
    calls = [pg.load, pg.render, pg.difference, pg.validate, pg.open_ensemble, pg.check_digest]
    for kind in (pg.Ensemble, pg.Spec, pg.Difference, pg.Verdict):
        calls += [call for name, call in inspect.getmembers(kind, inspect.isfunction) if not name.startswith("_")]
    for call in [*calls, type(pg.theory).__call__]:
        assert inspect.signature(call).return_annotation is not inspect.Signature.empty, call


def messages(file):
    """The texts of a source file, each in one piece; `{}` stands for what is put in. No docstrings."""
    tree = ast.parse(file.read_text(encoding="utf-8"))
    inner = {id(node.value) for node in ast.walk(tree) if isinstance(node, ast.Expr)}
    for node in ast.walk(tree):  # outer ones come first
        if id(node) in inner:
            continue
        if isinstance(node, ast.JoinedStr):
            inner |= {id(part) for part in ast.walk(node)}
            yield "".join(part.value if isinstance(part, ast.Constant) else "{}" for part in node.values)
        elif isinstance(node, ast.Constant) and isinstance(node.value, str):
            yield node.value


def test_a_message_that_names_an_option_names_the_argument_too():
    """Sentences of `ensemble` and `checks` reach both those who type commands and those who call from Python."""
    alone, seen = [], 0
    for room in ("ensemble", "checks"):
        for file in sorted((ROOT / "procgen" / room).glob("*.py")):
            for text in messages(file):
                for option in re.findall(r"--([a-z{}][a-z{}-]*)", text):
                    seen += 1
                    argument = "columns" if option.endswith("-col") else option.replace("-", "_")
                    command = "procgen " in text.partition(f"--{option}")[0]  # shown whole
                    pair = text.startswith("--")  # `checks.roles` puts both together
                    if f"{argument}=" not in text and not command and not pair:
                        alone.append(f"{file.name}: --{option} in {text!r}")
    assert seen > 30 and not alone, "\n".join(alone)
