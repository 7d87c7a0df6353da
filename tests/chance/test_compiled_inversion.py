"""Laws by numerical inversion: compiled they have the bits of the plain form, far into both tails."""

import numpy as np
import pytest

from procgen.chance.kernel import compiling
from procgen.chance.laws import LAWS

pytest.importorskip("numba")

CASES = [
    ("student_t", {"df": 5.0}),
    ("student_t", {"df": 2.05}),  # cells that were cut further
    ("gamma", {"shape": 0.5}),
    ("gamma", {"shape": 40.0}),
    ("ged", {"shape": 1.3}),
    ("skewed_t", {"df": 4.0, "skew": -0.5}),
    ("stable", {"alpha": 1.5, "beta": 0.3}),
]


def uniforms():
    """Of the middle, of both tails, and the least and largest there are."""
    rng = np.random.default_rng(11)
    ends = np.array([2.0**-65, 2.0**-64, 0.5, np.nextafter(0.5, 1), 1 - 2.0**-53])
    low = 2.0 ** -rng.uniform(1, 65, 4000)
    return np.concatenate([rng.random(20_000), low, 1 - 2.0 ** -rng.uniform(1, 53, 4000), ends])


@pytest.mark.parametrize(("name", "parameters"), CASES)
def test_the_bits_are_those_of_the_plain_form(name, parameters):
    law, u = LAWS[name](**parameters), uniforms()
    plain = law.shocks(u)
    with compiling():
        compiled = law.shocks(u)
    assert np.array_equal(plain.view(np.int64), compiled.view(np.int64))
