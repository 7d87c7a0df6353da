"""Short paths of a garch: shocks are taken before the last trace of the unknown first variance is gone, and tell.

Seeds are fixed. Under others true ensembles are said to depart with probability 1e-8 each.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from procgen.checks.planning import plan_of
from procgen.checks.short import soon_forgotten
from procgen.terms.recover import recovery
from tests.studies.departures import draw, spec_of, verdict

T8 = {"student_t": {"df": 8}}


def garch(alpha, beta, kind="garch", **more):
    return [{kind: {"sd": 1, "alpha": alpha, "beta": beta, **more}}]


@pytest.mark.parametrize(
    ("stated", "drawn", "shape"),
    [
        (garch(0.10, 0.85), garch(0.15, 0.80), (2000, 100)),
        (garch(0.10, 0.85), garch(0.15, 0.80), (500, 100)),
        (garch(0.10, 0.80, law=T8), garch(0.15, 0.75, law=T8), (2000, 70)),
        (garch(0.05, 0.85, "gjr_garch", gamma=0.1), garch(0.10, 0.85), (1000, 100)),
    ],
)
def test_clustering_of_short_paths_is_found_and_named(stated, drawn, shape):
    for seed in range(1, 7):
        found = verdict(stated, draw(spec_of(drawn, *shape, seed)))
        assert found.headline[0].startswith("x: clustering: "), found.headline


@pytest.mark.parametrize("shape", [(2000, 70), (100, 100)])
@pytest.mark.parametrize(
    "body", [garch(0.10, 0.85), garch(0.14, 0.84), garch(0.10, 0.80, law=T8), garch(0.05, 0.85, "gjr_garch", gamma=0.1)]
)
def test_true_short_paths_agree(body, shape):
    for seed in range(8):
        found = verdict(body, draw(spec_of(body, *shape, seed)), 1e-8)
        assert found.agrees is not False, found.text()


@pytest.mark.parametrize("body", [garch(0.10, 0.85), garch(0.14, 0.84), garch(0.05, 0.85, "gjr_garch", gamma=0.1)])
def test_what_is_left_of_the_first_variance_is_a_small_part_of_a_standard_error(body):
    """Against shocks by the variances that were drawn: the hidden output of the term itself."""
    paths, steps = 2000, 100
    plan = plan_of(spec_of(body, paths, steps, 3))
    kind = next(iter(body[0]))
    told = {"series": {"x": body, "h": [{"use": f"x.{kind}.variance"}]}}
    values = draw(spec_of(told, paths, steps, 3))
    z = plan.routes["x"].tile(values["x"].T, plan.routes["x"].start(0, paths), 0, 0)[0]
    known = np.isfinite(z).all(axis=1)
    true = (values["x"] / np.sqrt(values["h"])).T[known]
    assert known.sum() > 0.25 * steps
    off = (z[known] ** 2).mean(axis=1) - (true**2).mean(axis=1)
    assert np.abs(off).max() < 0.2 * math.sqrt(2 / paths)
    assert abs(off.mean()) < 0.1 * math.sqrt(2 / (paths * known.sum()))


def test_long_paths_and_given_starts_are_as_they_were():
    def share(body, steps, **more):
        plan = plan_of(spec_of(body, 100, steps, 1))
        return soon_forgotten(recovery(plan.routes["x"].graph, "x", 1).nodes, 100, steps)

    assert share(garch(0.10, 0.85), 100) > 1e-5
    assert share(garch(0.10, 0.85), 400) is None
    given = {"variance": [1.0], "shocks": [0.5]}
    assert share(garch(0.10, 0.85, before=given), 100) is None
    assert share([{"arch": {"sd": 1, "alpha": 0.3}}], 20) is None
