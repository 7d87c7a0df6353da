"""The moving-blocks bootstrap: moments by Künsch's formula and by windows of numbers, draws beside those of arch."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import procgen as pg

DERIVED = {"moving_blocks": "test_moments_are_averages_over_all_windows"}

HEAD = {"procgen": 1, "seed": 31, "paths": 800, "time": {"steps": 72}}
# An invented record with a memory.
RECORD = np.round(20 + np.convolve(np.sin(np.arange(260) ** 1.7) * 4, [1, 0.8, 0.5, 0.3], "valid"), 2)


def spec(length=24, circular=False, values=RECORD, **more):
    term = {"values": [float(v) for v in values], "length": length, "circular": circular}
    return HEAD | {"series": {"x": [{"moving_blocks": term}]}} | more


def windows(length, circular):
    """Every block, one a row."""
    values = np.concatenate([RECORD, RECORD[: length - 1]]) if circular else RECORD
    return np.lib.stride_tricks.sliding_window_view(values, length)


def of_mean(x, count):
    """The variance of the mean of the first steps: of all pairs."""
    return float(x.covariance(*np.meshgrid(np.arange(count), np.arange(count))).mean())


@pytest.mark.parametrize("circular", [False, True])
@pytest.mark.parametrize("length", [1, 7, 24])
def test_moments_are_averages_over_all_windows(length, circular):
    x = pg.theory(spec(length, circular))["x"]
    every = windows(length, circular)
    place = np.arange(length)
    np.testing.assert_allclose(x.mean(length + place), every.mean(axis=0), rtol=1e-12)
    np.testing.assert_allclose(
        x.covariance(*np.meshgrid(place, place, indexing="ij")),
        np.cov(every.T, bias=True).reshape(length, length),
        rtol=0,
        atol=1e-12 * RECORD.var(),
    )
    between = x.covariance(np.array([length - 1]), np.array([length]))
    assert float(between[0]) == 0.0
    centred = every - every.mean(axis=0)
    kurtosis = (centred[:, 0] ** 4).mean() / (centred[:, 0] ** 2).mean() ** 2 - 3
    assert x.excess_kurtosis_at(2 * length) == pytest.approx(kurtosis, rel=1e-9)


def test_variance_of_a_mean_is_that_of_kunsch():
    """Künsch (1989), sec. 2: a mean of k blocks has 1/k of the variance of the means of all blocks."""
    x = pg.theory(spec(24))["x"]
    block_means = windows(24, False).mean(axis=1)
    found = [of_mean(x, count) for count in (24, 48, 240)]
    np.testing.assert_allclose(found, block_means.var() / np.array([1, 2, 10]), rtol=1e-10)


def test_the_circular_one_keeps_the_mean():
    """Politis & Romano (1992): every number is as likely at every step, which it is not near the ends of Künsch's."""
    steps = np.arange(60)
    assert np.ptp(pg.theory(spec(24, True))["x"].mean(steps)) < 1e-12
    assert float(pg.theory(spec(24, True))["x"].mean(3)) == pytest.approx(RECORD.mean())
    assert np.ptp(pg.theory(spec(24))["x"].mean(steps)) > 0.01


@pytest.mark.parametrize("circular", [False, True])
def test_means_are_as_spread_as_those_of_arch(circular):
    """arch.bootstrap draws from the same law: variances of means of 240 steps, within 6 standard errors (2e-9)."""
    from arch.bootstrap import CircularBlockBootstrap, MovingBlockBootstrap

    kind = CircularBlockBootstrap if circular else MovingBlockBootstrap
    boot = kind(24, RECORD[:240], seed=5)
    theirs = np.array([data[0][0].mean() for data in boot.bootstrap(2000)])
    x = pg.theory(spec(24, circular, RECORD[:240]))["x"]
    stated = of_mean(x, 240)
    assert abs(theirs.var(ddof=1) / stated - 1) < 6 * np.sqrt(2 / 2000)
    assert abs(theirs.mean() - float(np.mean(x.mean(np.arange(240))))) < 6 * np.sqrt(stated / 2000)


def test_blocks_are_stretches_of_the_record_and_starts_are_told():
    ens = pg.render(spec(24), reveal=["x.moving_blocks.block_start"])
    x, start = ens["x"], ens["x.moving_blocks.block_start"]
    assert np.array_equal(start, np.repeat(start[:, ::24], 24, axis=1))
    assert np.array_equal(x, RECORD[start.astype(int) + np.arange(72) % 24])
    assert start.min() >= 0 and start.max() <= len(RECORD) - 24
    counts = np.bincount(start[:, ::24].astype(int).ravel() // 26, minlength=9)[:9]
    from scipy.stats import chisquare

    assert chisquare(counts, counts.sum() * np.append(np.full(8, 26), 234 - 208) / 234).pvalue > 1e-7
    th = pg.theory(spec(24))["x"].expression.hidden("block_start")
    assert float(th.mean(np.array([3]))[0]) == (len(RECORD) - 24) / 2


def test_a_column_of_a_file_is_put_into_the_spec(tmp_path):
    pd.DataFrame({"n": np.arange(len(RECORD)), "flow": RECORD}).to_csv(tmp_path / "record.csv", index=False)
    body = "{moving_blocks: {values: {file: record.csv, column: flow, step: n}, length: 24}}"
    head = f"procgen: 1\nseed: 31\npaths: 800\ntime: {{steps: {len(RECORD)}}}"
    (tmp_path / "s.yaml").write_text(f"{head}\nseries:\n  x: {body}\n")
    read = pg.load(tmp_path / "s.yaml").changed(steps=72)
    assert np.array_equal(pg.render(read)["x"], pg.render(spec(24))["x"])


@pytest.mark.parametrize("steps, drawn, found", [(72, 24, True), (72, 12, False)])
def test_blocks_of_half_the_length_are_found(steps, drawn, found):
    verdict = pg.validate(pg.render(spec(drawn)), spec=pg.load(spec(24)), false_alarm=1e-8)
    assert verdict.agrees is found
    if not found:
        assert "memory" in verdict.text().splitlines()[1]


def test_ranks_hold_for_coarse_numbers_and_beside_a_trend():
    coarse = spec(6, values=np.rint(RECORD / 4))
    assert pg.validate(pg.render(coarse), false_alarm=1e-8).agrees
    beside = spec(24)
    beside["series"]["x"].append({"trend": {"slope": 0.1}})
    assert pg.validate(pg.render(beside), false_alarm=1e-8).agrees


def test_what_cannot_be_cut_into_blocks():
    with pytest.raises(pg.SpecError, match="no longer than the 5 numbers they are taken from, got 6; shorten"):
        pg.load(spec(6, values=[1, 2, 3, 4, 5]))
    with pytest.raises(pg.SpecError, match="expected a length in whole steps, got 2"):
        pg.load(spec(2.5))


def test_what_comes_after_a_block_that_has_begun():
    from procgen.terms.graph import build
    from procgen.terms.recover import forecast
    from procgen.terms.run import Run

    run = Run(build(pg.load(spec(6))), 0, 20)
    run.tile(8)
    ahead = forecast(run, "x", 8)
    coming = run.tile(8)["x"]
    np.testing.assert_array_equal(ahead.mean[:4], coming[:4])  # the rest of the block of steps 6 to 11
    assert not ahead.variance[:4].any() and np.all(ahead.variance[4:] > 0)
    every = windows(6, False)
    np.testing.assert_allclose(ahead.mean[4:8, 0], every.mean(axis=0)[:4])
    np.testing.assert_allclose(ahead.variance[4:8, 0], every.var(axis=0)[:4])
