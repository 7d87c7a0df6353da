"""Ensembles of real specs: time, units, correlation, hidden outputs, states carried between parts."""

import json

import numpy as np
import pandas as pd
import pytest

from procgen.chance.laws import LAWS
from procgen.ensemble import EnsembleError, check_digest, digest, open_ensemble, plan, render
from procgen.ensemble.seal import seal
from procgen.spec.reader import read_text
from procgen.terms import catalogue

COLD_STORE = """
procgen: 1
title: Cold store
seed: 271828
paths: 40
time: {start: 2027-03-27T00:00, every: 15min, steps: 288, zone: Europe/Berlin}
shared:
  weather: [{ar: {phi: 0.97, total_sd: 1}}]
series:
  load_kw:
    unit: kW
    decimals: 2
    of:
      - trend: {level: 310, slope: {value: 0.9, per: day}}
      - seasonal: {period: 1d, harmonics: [{amplitude: 42, peak: 18:00}, {amplitude: 9}]}
      - use: weather
        times: 6.5
      - arma: {phi: [0.7, -0.1], theta: 0.3, shock: {garch: {sd: 6.3, alpha: 0.1, beta: 0.85}}}
        as: swing
  price:
    - exp: [{random_walk: {sd: 0.01, drift: -0.00005, start: 3.9}}]
correlation:
  - {between: [load_kw.swing, price.random_walk], value: 0.35}
"""


def read(text):
    return read_text(text, catalogue(), LAWS)


@pytest.fixture(scope="module")
def spec():
    return read(COLD_STORE)


def test_parts_on_disk_and_arrays_in_memory_agree(tmp_path, monkeypatch, spec):
    memory = render(spec)
    monkeypatch.setattr(plan, "PART_BYTES", 1 << 16)
    ens = render(spec, tmp_path, workers=2)
    assert len(ens.manifest.parts) > 1
    assert ens.digest == memory.digest
    assert check_digest(tmp_path, redraw=True).ok
    again = open_ensemble(tmp_path)
    assert again.spec == spec
    assert again.to_pandas().equals(memory.to_pandas())
    assert np.array_equal(again.paths(17, 19)["price"], memory["price"][17:19])


def test_stamps_are_utc_of_the_zone_across_the_change_of_clocks(tmp_path, spec):
    frame = render(spec, tmp_path, paths=2).to_pandas()
    wanted = pd.date_range("2027-03-27", periods=288, freq="15min", tz="Europe/Berlin").tz_convert("UTC")
    assert (frame["time"].to_numpy() == np.tile(wanted.to_numpy(), 2)).all()
    found = json.loads((tmp_path / "manifest.json").read_text())["time"]
    assert found["zone"] == "Europe/Berlin" and found["first"].startswith("2027-03-26T23:00:00")


def test_hidden_outputs_stand_beside_the_series_and_change_no_digest(tmp_path, spec):
    plain = render(spec)
    ens = render(spec, tmp_path, reveal="load_kw.swing, load_kw.swing.variance")
    assert ens.names == ("load_kw", "price", "load_kw.swing", "load_kw.swing.variance")
    assert ens.digest == plain.digest
    assert set(ens.manifest.revealed) == {"load_kw.swing", "load_kw.swing.variance"}
    assert (ens["load_kw.swing.variance"] > 0).all()
    assert check_digest(tmp_path, redraw=True).ok
    everything = render(spec, reveal="all")
    parts = ["load_kw.trend", "load_kw.seasonal", "load_kw.use", "load_kw.swing"]
    assert np.allclose(sum(everything[name] for name in parts), everything["load_kw"], atol=0.0051)
    with pytest.raises(EnsembleError, match=r"cannot reveal: expected one of .*swing in load_kw, got 'swong'"):
        render(spec, reveal=["load_kw.swong"])


@pytest.mark.parametrize(
    "term",
    [
        "random_walk: {sd: 1}",
        "ar: {phi: [0.5, 0.2], sd: 1}",
        "arma: {phi: 0.5, theta: 0.4, shock: {garch: {omega: 0.1, alpha: 0.1, beta: 0.8}}}",
        "integrate: {of: [{ma: {theta: 0.4, sd: 1}}], start: 2}",
        "lag: {of: [{random_walk: {sd: 1}}], by: 3}",
    ],
)
def test_states_carry_over_parts_of_steps_and_over_a_resume(tmp_path, monkeypatch, term):
    for module in (plan, digest):  # leaves of fewer steps, so that few steps make several parts
        monkeypatch.setattr(module, "STEPS", 512)
    spec = read(f"{{procgen: 1, seed: 5, paths: 3, time: {{steps: 1033}}, series: {{x: [{{{term}}}]}}}}")
    whole = render(spec)
    monkeypatch.setattr(plan, "PART_BYTES", 1 << 10)
    monkeypatch.setattr(plan, "TILE", 1 << 9)
    ens = render(spec, tmp_path)
    assert len(ens.manifest.parts) == 3
    assert ens.digest == whole.digest
    (tmp_path / ens.manifest.parts[1].file).unlink()
    assert render(spec, tmp_path, resume=True).digest == whole.digest


def test_a_spec_changed_in_the_manifest_is_refused(tmp_path, spec):
    render(spec, tmp_path)
    path = tmp_path / "manifest.json"
    path.write_text(path.read_text().replace('"sd": 6.3', '"sd": 6.4'))
    assert "the spec in it is not the one that was drawn" in check_digest(tmp_path).text()
    with pytest.raises(EnsembleError, match=r"was changed after it was written \(spec.raw, spec.canonical\)"):
        open_ensemble(tmp_path)
    data = json.loads(path.read_text())
    path.write_text(json.dumps(data | {"seal": seal(data)}))
    assert not check_digest(tmp_path, redraw=True).ok
    with pytest.raises(EnsembleError, match="is not the one that was drawn"):
        open_ensemble(tmp_path)


def test_an_explosive_value_is_named_before_it_is_written(tmp_path):
    text = "{procgen: 1, seed: 1, paths: 2, time: {steps: 2000}, series: {x: [{exp: [{trend: {level: 0, slope: 1}}]}]}}"
    with pytest.raises(EnsembleError, match="series x: the value at path 0, step 710 is inf"):
        render(read(text), tmp_path)
    assert not list(tmp_path.glob("*.parquet"))
