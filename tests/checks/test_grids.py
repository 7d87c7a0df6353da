"""Values on a grid that is not declared: which grid it is, and that of numbers on none nothing is said.

Spacings of floating-point types are those of IEEE 754 (2019): 11 and 24 significant bits.
"""

import math

import numpy as np
import pandas as pd
import pytest

from procgen.checks import grids
from procgen.checks.validate import validate
from procgen.ensemble.source import read_spec
from tests.studies.departures import draw, spec_of, verdict

AR = [{"ar": {"phi": 0.7, "sd": 2}}]
STEPS = {"0.5": 0.5, "0.25": 0.25, "5": 5.0, "0.000976562": 2.0**-10, "0.05": 0.05, "0.3": 0.3, "10": 10.0}


def noise(seed=1, size=16_384):
    return np.random.default_rng(seed).standard_normal(size)


def on(x, step, start=0.0):
    return start + step * np.rint((x - start) / step)


@pytest.mark.parametrize("step", STEPS.values())
@pytest.mark.parametrize("level", [0.0, 200.3])
def test_the_spacing_is_found_wherever_the_grid_begins(step, level):
    x = level + 12 * noise()
    for values in (on(x, step), on(x, step, 0.17), np.concatenate([on(x, step), [math.nan]])):
        found, count = grids.spacing(values)
        assert float(found) == pytest.approx(step, rel=1e-8) and count == x.size


def test_the_steps_of_a_converter_over_any_range_are_found():
    """4,096 steps of a range, and 65,536 of one: spacings that are no decimals and no powers of two."""
    for bits in (12, 16):
        for low, high in ((-10.0, 10.0), (4.0, 20.0), (-0.3, 0.4)):
            step = (high - low) / (2**bits - 1)
            x = np.clip(low + (high - low) * (0.5 + 0.13 * noise(2)), low, high)
            found, count = grids.spacing(low + step * np.rint((x - low) / step))
            assert float(found) == pytest.approx(step, rel=1e-8) and count == x.size


def test_of_numbers_on_no_grid_nothing_is_said():
    """20,000 sets of numbers of all sizes and levels; a grid of 64 needs as many remainders within a tenth of it."""
    rng = np.random.default_rng(3)
    for _ in range(20_000):
        x = rng.standard_normal(64) * 10 ** rng.uniform(-4, 5) + rng.choice([-1, 0, 1]) * 10 ** rng.uniform(-3, 6)
        assert grids.spacing(x) == ("", 0)
    for x in (noise() ** 9, np.exp(4 * noise()), 1e200 * noise(), 1e-300 * noise(), 1e15 * noise(), np.zeros(50)):
        assert grids.spacing(x) == ("", 0)


@pytest.mark.parametrize("kind", [np.float16, np.float32])
def test_the_grid_of_a_type_is_not_called_one(kind):
    for x in (noise(), 3.7 + 0.1 * noise()):
        assert grids.spacing(x.astype(kind).astype(float))[0] == "" or kind is np.float16
    assert grids.spacing(noise().astype(kind).astype(float)) == ("", 0)
    assert grids.spacing((1000.3 + 2 * noise()).astype(np.float32).astype(float)) == ("", 0)


def test_a_few_values_beside_the_grid_hide_it_not():
    x = on(noise(), 0.5)
    x[::97] = noise(5)[::97]
    assert grids.spacing(x) == ("0.5", np.count_nonzero(2 * x == np.rint(2 * x)))


@pytest.mark.parametrize(
    ("spoil", "said"),
    [
        (lambda x: on(x, 0.5), "values lie on a grid of 0.5, which is not declared"),
        (lambda x: on(x, 0.25), "values lie on a grid of 0.25, which is not declared"),
        (lambda x: on(x, 5.0), "values lie on a grid of 5, which is not declared"),
        (lambda x: on(x, 2.0**-10), "values lie on a grid of 0.000976562, which is not declared"),
        (lambda x: on(x, 24 / 4095, -12.0), "values lie on a grid of 0.00586081, which is not declared"),
        (lambda x: np.round(x, 2), "values are rounded to 2 decimals, which is not declared; write `decimals: 2`"),
        (lambda x: np.rint(x), "values are rounded to whole numbers, where no rounding (`decimals: 0`) is declared"),
    ],
)
def test_the_verdict_names_the_grid(spoil, said):
    x = draw(spec_of(AR, 500, 200, 5))["x"]
    found = verdict(AR, {"x": spoil(x)})
    assert found.agrees is False and found.headline[0].startswith(f"x: structure: {said}")
    assert not any("float16" in line or "float32" in line for line in found.headline)


def test_what_rounding_does_not_explain_is_told_for_what_it_is():
    """Zeros in the place of gaps, and a value that stays, where 6 decimals were written, as tables have them."""
    x = np.round(draw(spec_of(AR, 100, 60, 5))["x"], 6)
    assert grids.spacing(x) == ("1e-06", x.size) and verdict(AR, {"x": x}).agrees is True
    zeros = x.copy()
    zeros[5:9, 30:41:2] = 0.0
    told = verdict(AR, {"x": zeros}).headline[0]
    assert told.startswith("x: structure: 24 values are exactly 0, the first at path 5")
    stuck = x.copy()
    stuck[7, 20:32] = stuck[7, 20]
    assert "12 equal values in a row at path 7, steps 20–31, as if stuck" in verdict(AR, {"x": stuck}).headline[0]


def test_of_a_table_that_departs_the_grid_is_told_beside_what_is_declared():
    path, step = np.divmod(np.arange(200 * 100), 100)
    x = draw(spec_of(AR, 200, 100, 5))["x"]
    for step_of, said in ((0.05, "values lie on a grid of 0.05, where the spec declares 2 decimals"),
                          (0.1, "values are rounded to 1 decimal, where the spec declares 2; write `decimals: 1` if"),
                          (0.01, "")):  # fmt: skip
        table = pd.DataFrame({"path": path, "step": step, "x": np.round(on(1.1 * x, step_of), 2).ravel()})
        spec = read_spec({**spec_of(AR, 200, 100, 5).raw, "series": {"x": {"of": AR, "decimals": 2}}})
        found = validate(table, spec)
        assert found.agrees is False
        assert found.headline[0].startswith(f"x: structure: {said}" if said else "x: spread: ")
