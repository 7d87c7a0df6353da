"""Functions of Gaussian series: what the value code makes of given bodies, averaged over their normals by quadrature.

The body is an AR(1) with a level, whose values at two steps are normal with correlation phi^lag. 1e-9 of the standard
deviations is allowed.
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from procgen.theory import theory

from ..terms.helpers import graph_of
from .gauss import over_one, over_two

LAGS = (1, 5)

# entries: the composition with its body left open, and the values of the body at which it bends
BENT = {
    "abs": ("{{abs: {body}}}", (0.0,)),
    "hinge, above": ("{{hinge: {{of: {body}, above: 0.7}}}}", (0.7,)),
    "hinge, below": ("{{hinge: {{of: {body}, below: -0.4}}}}", (-0.4,)),
    "clip": ("{{clip: {{of: {body}, low: -0.5, high: 0.8}}}}", (-0.5, 0.8)),
    "clip, one side": ("{{clip: {{of: {body}, high: 0.8}}}}", (0.8,)),
    "max": ("{{max: {{of: {body}, and: [{{constant: 0.3}}]}}}}", (0.3,)),
    "min": ("{{min: {{of: {body}, and: [{{constant: 0.3}}]}}}}", (0.3,)),
    "sigmoid": ("{{sigmoid: {{of: {body}, low: 2, high: 10}}}}", ()),
    "power": ("{{power: {{of: {body}, exponent: 3}}}}", ()),
    "exp": ("{{exp: {body}}}", ()),
    "product": ("{{product: [{{sum: {body}}}, {{constant: 3}}]}}", ()),
}

DERIVED = {name.partition(",")[0]: "test_functions_of_an_autoregression" for name in BENT} | {
    "logit": "test_logit_of_a_random_body_is_unknown_and_undoes_a_sigmoid_of_a_known_one"
}


def of_body(graph, x):
    """What the value code of a series' last term makes of values of its bodies."""
    x = np.asarray(x, float)
    node = graph.series["x"]
    rest = [part.term.level for part in node.inputs[1:] if part.term.kind == "constant"]
    bodies = [x.reshape(-1, 1), *[np.full((x.size, 1), level) for level in rest]]
    out, _ = node.term.recurse(bodies, {}, np.arange(x.size))
    return np.asarray(out).reshape(x.shape)


phis = st.floats(-0.95, 0.99).filter(lambda phi: abs(phi) > 0.05)


@pytest.mark.parametrize("name", BENT)
@settings(max_examples=4, deadline=None, derandomize=True)
@given(phis, st.floats(0.1, 1.5), st.floats(-2, 2))
@example(0.5, 0.3, 2.0)  # bounds that are hardly ever left or reached
@example(0.5, 0.3, -2.0)
def test_functions_of_an_autoregression(name, phi, sd, level):
    text, bends = BENT[name]
    body = f"[{{ar: {{phi: {phi!r}, total_sd: {sd!r}}}}}, {{constant: {level!r}, as: level}}]"
    graph = graph_of(f"  x: {text.format(body=body)}")
    x = theory(graph.spec, graph)["x"]

    def f(z):
        return of_body(graph, level + sd * z)

    at = [(bend - level) / sd for bend in bends]
    mean = over_one(f, at)
    variance = over_one(lambda z: (f(z) - mean) ** 2, at)
    assert float(x.mean(5)) == pytest.approx(mean, rel=1e-9, abs=1e-9 * np.sqrt(variance))
    assert float(x.variance(5)) == pytest.approx(variance, rel=1e-9)
    exact = [over_two(lambda a, b: (f(a) - mean) * (f(b) - mean), phi**lag, at, at) for lag in LAGS]
    np.testing.assert_allclose(x.autocovariance(LAGS, 5), exact, rtol=0, atol=1e-9 * variance + 1e-28)


@pytest.mark.parametrize("kind", ["max", "min"])
@settings(max_examples=4, deadline=None, derandomize=True)
@given(phis, phis, st.floats(0.3, 2.0), st.floats(-1.5, 1.5))
def test_the_larger_and_the_smaller_of_two_autoregressions(kind, phi, psi, sd, level):
    """Given the gaps u = x - y at both steps, y is a line in them plus what is independent of them; these are averaged.

    x has variance 1 and psi and sd are those of y. No identity of Stein's or Clark's is used.
    """
    graph = graph_of(
        f"  x: {{{kind}: {{of: [{{ar: {{phi: {phi!r}, total_sd: 1}}}}, {{constant: {level!r}, as: level}}], "
        f"and: [{{ar: {{phi: {psi!r}, total_sd: {sd!r}}}, as: other}}]}}}}"
    )
    x, sign = theory(graph.spec, graph)["x"], 1.0 if kind == "max" else -1.0

    def of_gap(u):  # max(x, y) - y, or min(x, y) - y
        return sign * np.maximum(sign * u, 0.0)

    spread = np.sqrt(1.0 + sd * sd)
    for lag in LAGS:
        one, other = np.array([1.0, phi**lag]), sd * sd * np.array([1.0, psi**lag])
        gaps, shared = one + other, -other  # Cov(u, u) and Cov(y, u) at lags 0 and lag
        inverse = np.linalg.inv([[gaps[0], gaps[1]], [gaps[1], gaps[0]]])
        line = np.array([[shared[0], shared[1]], [shared[1], shared[0]]]) @ inverse
        left = other[1] - (line @ np.array([[shared[0], shared[1]], [shared[1], shared[0]]]))[0, 1]

        def mean_at(i, u, line=line):
            return line[i, 0] * u[0] + line[i, 1] * u[1] + of_gap(level + u[i])

        def product(a, b):
            u = spread * a, spread * b
            return mean_at(0, u) * mean_at(1, u)

        bend, r = [-level / spread], gaps[1] / gaps[0]
        mean = over_one(lambda z: of_gap(level + spread * z), bend)
        exact = over_two(product, r, bend, bend) + left - mean * mean
        assert float(x.mean(9)) == pytest.approx(mean, rel=1e-9, abs=1e-10)
        assert float(x.autocovariance([lag], 9)[0]) == pytest.approx(exact, abs=1e-9 * (1 + sd * sd))
    own = other[0] / gaps[0]

    def second(z):
        u = spread * z
        return (-own * u + of_gap(level + u)) ** 2

    variance = over_one(second, bend) + other[0] * (1.0 - own) - mean * mean
    assert float(x.variance(9)) == pytest.approx(variance, rel=1e-9)


def test_logit_of_a_random_body_is_unknown_and_undoes_a_sigmoid_of_a_known_one():
    graph = graph_of("  x: {logit: [{sigmoid: [{ar: {phi: 0.9, total_sd: 1}}]}]}\n  y: {logit: [{constant: 0.2}]}")
    th = theory(graph.spec, graph)
    assert th["x"].mean(0) is None and "log odds" in th["x"].reason("mean")
    # log(0.2 / 0.8), exact in double precision beside NumPy's logarithm
    assert th["y"].mean(0) is None or float(th["y"].mean(0)) == pytest.approx(np.log(0.25), rel=1e-14)


@pytest.mark.parametrize("steps", [(4, 9), (1, 1)])
def test_functions_of_a_walk_in_its_transient(steps):
    """Values at steps t and s of a walk from 0.5 with drift: normal, variances t and s, covariance min(t, s)."""
    graph = graph_of("  x: {abs: [{random_walk: {sd: 0.5, drift: 0.1, start: 0.5}}]}")
    x, (t, s) = theory(graph.spec, graph)["x"], steps

    def f(step):
        return lambda z: of_body(graph, 0.5 + 0.1 * step + 0.5 * np.sqrt(step) * z)

    bends = [[-(0.5 + 0.1 * step) / (0.5 * np.sqrt(step))] for step in steps]
    means = [over_one(f(step), bend) for step, bend in zip(steps, bends, strict=True)]
    if t == s:
        exact = over_one(lambda z: (f(t)(z) - means[0]) ** 2, bends[0])
    else:
        r = min(t, s) / np.sqrt(t * s)
        exact = over_two(lambda a, b: (f(t)(a) - means[0]) * (f(s)(b) - means[1]), r, *bends)
    np.testing.assert_allclose(x.mean(np.array(steps)), means, rtol=1e-10)
    assert float(x.covariance(t, s)) == pytest.approx(exact, rel=1e-9)
