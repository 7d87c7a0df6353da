"""Missing values: how many and how long, what is known of the rest, files and digests, and what is refused."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest
from scipy.stats import binom, geom
from statsmodels.tsa.arima_process import arma_acovf

import procgen as pg
from procgen.ensemble.errors import EnsembleError

DERIVED = {"missing": "test_values_that_are_present_are_those_of_the_body"}

HEAD = {"procgen": 1, "seed": 19, "paths": 300, "time": {"steps": 200}}
BODY = [{"arma": {"phi": 0.6, "theta": 0.3, "sd": 2}}, {"constant": 5}]


def spec(share=0.2, gap=None, body=BODY, **attributes):
    term = {"missing": {"of": body, "share": share} | ({} if gap is None else {"gap": gap})}
    series = {"of": [term], **attributes} if attributes else [term]
    return HEAD | {"series": {"x": series}}


@pytest.mark.parametrize("gap", [None, 5])
def test_values_that_are_present_are_those_of_the_body(gap):
    """Bit by bit; and theory is that of the body, by statsmodels, with a chain of two states for what is missing."""
    ens = pg.render(spec(gap=gap), reveal=["x.missing.missing"])
    x, missing, plain = ens["x"], ens["x.missing.missing"], pg.render(HEAD | {"series": {"x": BODY}})["x"]
    assert np.array_equal(np.isnan(x), missing == 1.0)
    assert np.array_equal(x[missing == 0.0], plain[missing == 0.0])
    th = pg.theory(spec(gap=gap))["x"]
    assert float(th.mean(7)) == pytest.approx(5)
    np.testing.assert_allclose(
        th.autocovariance(np.arange(6), 3), arma_acovf([1, -0.6], [1, 0.3], nobs=6, sigma2=4), rtol=1e-9
    )
    hidden = th.expression.hidden("missing")
    stay = 0.2 if gap is None else 1 - 1 / gap
    chain = np.array([[1 - 0.2 * (1 - stay) / 0.8, 0.2 * (1 - stay) / 0.8], [1 - stay, stay]])
    for lag in (0, 1, 4):
        both = 0.2 * np.linalg.matrix_power(chain, lag)[1, 1]
        found = hidden.covariance(hidden, np.array([9 + lag]), np.array([9]))[0]
        assert float(found) == pytest.approx(both - 0.04, abs=1e-12)
    assert float(hidden.mean(np.array([4]))[0]) == pytest.approx(0.2)


def test_gaps_have_the_stated_share_and_length():
    """scipy.stats: without `gap` the number of missing values is binomial; gaps of a chain have geometric lengths."""
    count = int(np.isnan(pg.render(spec(0.05))["x"]).sum())
    assert 1e-7 < binom.cdf(count, 60_000, 0.05) < 1 - 1e-7
    ends = np.diff(np.pad(np.isnan(pg.render(spec(0.2, 5))["x"]), ((0, 0), (1, 1))).astype(int), axis=1)
    (paths, starts), (_, stops) = np.nonzero(ends == 1), np.nonzero(ends == -1)
    whole = (starts > 0) & (stops < 200)  # the others are cut off
    lengths = (stops - starts)[whole & (starts < 150)]  # late ones are cut off when they are long
    assert len(paths) > 1000
    for longest in (1, 3, 8):
        share = geom.cdf(longest, 1 / 5)
        seen = int((lengths <= longest).sum())
        assert 1e-7 < binom.cdf(seen, len(lengths), share) < 1 - 1e-7


@pytest.mark.parametrize("layout", ["long", "panel", "nested", "wide"])
def test_files_have_nulls_where_values_are_missing_and_only_there(tmp_path, layout):
    both = HEAD | {"series": spec(gap=5, type="float32", decimals=2)["series"] | {"y": [{"white_noise": {"sd": 1}}]}}
    memory = pg.render(both)
    ens = pg.render(both, out=tmp_path / "o", layout=layout)
    assert ens.digest == memory.digest
    for name in "xy":
        assert np.array_equal(ens[name], memory[name], equal_nan=True)
    assert ens.to_pandas()["x"].isna().sum() == np.isnan(memory["x"]).sum()
    assert pg.validate(ens, false_alarm=1e-8).agrees
    if layout == "long":
        (file,) = (tmp_path / "o").glob("*.parquet")
        table = pq.read_table(file)
        assert table.schema.field("x").nullable and not table.schema.field("y").nullable
        assert table.column("x").null_count == np.isnan(memory["x"]).sum()


def test_one_nan_in_digests_whatever_its_bits():
    import pyarrow as pa

    from procgen.ensemble.plan import Block
    from procgen.ensemble.reading import numbers

    odd = np.array([1.0, np.nan]).view(np.uint64) ^ np.array([0, 1], np.uint64)  # another NaN
    found = numbers(pa.chunked_array([pa.array(odd.view(np.float64))]), "x", "here", Block(0, 1, 0, 2), True)
    assert found.view(np.uint64)[1] == np.array(np.nan).view(np.uint64)


@pytest.mark.parametrize(
    "wrong, says",
    [
        (
            spec(0.8, 2),
            "expected gaps of at least 4 steps for a share of 0.8, got 2: they would be less than one apart; raise "
            "gap, or lower share",
        ),
        (
            spec(0.2, 0.5),
            "expected gaps of at least 1 step for a share of 0.2, got 0.5: none lasts less than a step; raise gap",
        ),
        (spec(type="int64"), "an int64 cannot say that a value of x is missing; write decimals: 0"),
        (
            HEAD | {"series": {"x": [*spec()["series"]["x"], {"constant": 1, "as": "c"}]}},
            "expected `missing` around the whole body of a series; put sum inside it",
        ),
        (
            HEAD | {"series": {"x": spec()["series"]["x"], "y": [{"abs": [{"use": "x"}]}]}},
            "y.abs reads x.missing, whose values are missing at some steps",
        ),
    ],
)
def test_what_cannot_be_missing(wrong, says):
    with pytest.raises(pg.SpecError) as error:
        pg.render(wrong)
    assert says in str(error.value)


def test_what_explodes_is_not_taken_for_missing():
    body = [{"exp": [{"random_walk": {"sd": 200, "start": 500}}]}]
    with pytest.raises(EnsembleError, match="not a finite number"):
        pg.render(spec(0.2, body=body))


def test_a_factor_and_a_second_name_keep_the_gaps():
    both = HEAD | {"series": {"x": [spec()["series"]["x"][0] | {"times": 2}], "y": [{"use": "x"}]}}
    ens = pg.render(both)
    assert np.array_equal(ens["x"], ens["y"], equal_nan=True) and 0.15 < np.isnan(ens["x"]).mean() < 0.25
    assert float(pg.theory(both)["x"].mean(0)) == pytest.approx(10)


def test_tables_of_anyone_may_have_the_gaps_that_are_declared(tmp_path):
    stated, x = pg.load(spec(gap=5)), pg.render(spec(gap=5))["x"]
    paths, steps = np.indices(x.shape).reshape(2, -1)
    table = pd.DataFrame({"path": paths, "step": steps, "x": x.ravel()})
    table.to_csv(tmp_path / "x.csv", index=False)  # empty cells
    assert pg.validate(tmp_path / "x.csv", spec=stated, false_alarm=1e-8).agrees
    undeclared = pg.load(HEAD | {"series": {"x": BODY}})
    verdict = pg.validate(table, spec=undeclared, false_alarm=1e-8)
    assert verdict.agrees is False and "not finite" in verdict.text()
