"""The calls of the package: a spec in any form, and a sentence for what is none."""

from pathlib import Path

import numpy as np
import pytest

import procgen as pg

PUMP = Path(__file__).parent.parent / "specs" / "pump-flow.yaml"


@pytest.fixture(scope="module")
def spec():
    return pg.load(PUMP)


@pytest.fixture(params=["spec", "path", "text", "mapping"])
def given(request, spec):
    return {"spec": spec, "path": PUMP, "text": str(PUMP), "mapping": dict(spec.raw)}[request.param]


def test_every_call_takes_a_spec_in_any_form(given, spec):
    assert pg.load(given).digest() == spec.digest()
    # AR(1): 3²/(1 − 0.8²) (Box & Jenkins 1970, ch. 3).
    assert pg.theory(given)["flow"].variance([0]) == pytest.approx([25.0])
    drawn = pg.render(given, paths=20, steps=48)
    assert np.array_equal(drawn["flow"], pg.render(spec)["flow"][:20, :48])
    # False-alarm probability 1e-9 of the suite's 1e-6.
    assert pg.validate(drawn.to_pandas(), given, false_alarm=1e-9).agrees is True


@pytest.mark.parametrize("wrong", [3, None, [1], b"specs/pump-flow.yaml"])
def test_what_is_no_spec_is_said_to_be_none(wrong):
    sentence = "expected a Spec, the path of a YAML file, or a mapping in the spec language, got "
    for call in (pg.load, pg.theory, pg.render):
        with pytest.raises(TypeError, match=sentence + type(wrong).__name__):
            call(wrong)


def test_faults_of_a_mapping_are_those_of_a_file():
    with pytest.raises(pg.SpecError, match="seed"):
        pg.render({"procgen": 1, "paths": 1, "time": {"steps": 1}, "series": {"x": [{"constant": 1}]}})


def test_validate_says_what_it_expects(spec):
    with pytest.raises(TypeError, match="expected an ensemble, a DataFrame, or the path of one, got list"):
        pg.validate([1.0], spec)
    with pytest.raises(TypeError, match="expected a Spec, the path of a YAML file, or a mapping"):
        pg.validate(PUMP, 7)
