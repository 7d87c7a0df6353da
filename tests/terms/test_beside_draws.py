"""A draw by path in one series leaves every other as it was: the whole catalogue beside one, bit for bit."""

import numpy as np
import pytest
import yaml

import procgen as pg
from procgen.terms import catalogue

HEAD = {"procgen": 1, "seed": 3, "paths": 5, "time": {"start": "2027-01-04", "every": "1h", "steps": 30}}
DRAWN = [{"constant": {"level": {"draw": {"uniform": [0.3, 0.9]}, "over": "path"}}}]


@pytest.mark.parametrize("kind", [kind for kind in catalogue() if kind != "use"])
def test_beside_a_draw(kind):
    entry = yaml.safe_load(f"{{{catalogue()[kind].example}}}")
    alone = pg.render({**HEAD, "series": {"x": [entry]}})
    beside = pg.render({**HEAD, "series": {"y": DRAWN, "x": [entry]}})
    assert np.array_equal(alone["x"], beside["x"], equal_nan=True)
