"""Burn-ins side by side give every path the bits of its own burn-in."""

import numpy as np
import pytest

import procgen as pg
from procgen.terms import by_path

DRAWN = {"draw": {"uniform": [0.05, 0.15]}, "over": "path"}
GARCH = {"garch": {"sd": 1, "alpha": DRAWN, "beta": 0.8}}
# Beside this one all paths have graphs of their own.
PATH_BY_PATH = {"stochastic_volatility": {"sd": 1.0, "phi": DRAWN, "eta": 0.3, "rho": -0.3}}
FEW = {"draw": {"choice": [0.8, 0.85, 0.9]}, "over": "path"}
BODIES = {
    "garch": GARCH,
    "of two orders": {"garch": {"sd": 2, "alpha": [0.05, 0.02], "beta": FEW, "law": {"student_t": {"df": 5}}}},
    "arch": {"arch": {"omega": 0.7, "alpha": {"draw": {"uniform": [0.1, 0.5]}, "over": "path"}}},
    "as a shock": {"ar": {"phi": 0.5, "shock": GARCH}},
    "looked back at": {"lag": {"of": [GARCH], "by": 3}},
}


@pytest.mark.parametrize("name", BODIES)
def test_together_is_one_by_one(name, monkeypatch):
    head = {"procgen": 1, "seed": 3, "paths": 70, "time": {"steps": 12}}
    spec = pg.load({**head, "series": {"x": [BODIES[name]], "y": [PATH_BY_PATH]}})
    together = np.array(pg.render(spec)["x"])
    rows = np.array(pg.render({**head, "series": {"x": [BODIES[name]]}})["x"])
    assert np.array_equal(together, rows)
    asked, can = [], by_path.can_burn_together

    def never(*told):
        asked.append(can(*told))
        return False

    monkeypatch.setattr(by_path, "can_burn_together", never)
    assert np.array_equal(np.array(pg.render(spec)["x"]), together)
    assert any(asked)  # it was done side by side above


def test_a_hidden_variance_before_step_0_is_kept():
    head = {"procgen": 1, "seed": 3, "paths": 20, "time": {"steps": 12}}
    back = {"lag": {"of": [{"use": "x.garch.variance"}], "by": 4}}
    spec = pg.load({**head, "series": {"x": [GARCH], "y": [back]}})
    ensemble = pg.render(spec, reveal=["x.garch.variance"])
    assert np.array_equal(ensemble["y"][:, 4:], ensemble["x.garch.variance"][:, :-4])
    alone = pg.render(spec, paths=1, first_path=7)
    assert np.array_equal(alone["y"][0], ensemble["y"][7]) and (ensemble["y"][:, :4] > 0).all()
