"""Systems of several series: published covariances, statsmodels, and what the drawn values are made of."""

import re

import numpy as np
import pytest
from statsmodels.tsa.vector_ar.var_model import VARProcess

from procgen.chance.kernel import available, compiling
from procgen.report.equations import equations
from procgen.spec.model import SpecError
from procgen.theory import theory

from .helpers import draw, graph_of, jacobian

DERIVED = {
    "vector_arma": "test_autocovariances_of_another_library",
    "vector_error_correction": "test_covariance_of_what_is_drawn",
}
STEPS = 12
# Lütkepohl (2005), New Introduction to Multiple Time Series Analysis, sec. 2.1.1 and 2.1.4.
THREE = "names: [a, b, c], phi: [[0.5, 0, 0], [0.1, 0.1, 0.3], [0, 0.2, 0.3]], sd: [1.5, 1, 0.8602325267042627]"
CORRELATED = (
    f"{{vector_arma: {{{THREE}, correlation: [[1, 0, 0], [0, 1, 0.5812381937190965], [0, 0.5812381937190965, 1]]}}}}"
)
TWO = "{vector_arma: {names: [a, b], phi: [[[0.5, 0.1], [0.4, 0.5]], [[0, 0], [0.25, 0]]], sd: [0.3, 0.2]}}"
MIXED = (
    "{vector_arma: {names: [a, b], phi: [[0.6, 0.3], [-0.2, 0.5]], theta: [[[0.4, 0], [0.1, -0.3]], [[0.2, 0.1], "
    "[0, 0.3]]], sd: [1, 2], correlation: [[1, -0.4], [-0.4, 1]]}}"
)
AVERAGE = "{vector_arma: {names: [a, b], theta: [[0.4, 0.7], [0.1, -0.3]], sd: [1, 2]}}"
LEFT = (
    "{vector_arma: {names: [a, b], phi: [[1.1, 0.2], [0, 0.5]], theta: [[0.3, 0], [0, 0.1]], sd: [1, 2], "
    "before: {x: [[9, 9], [3, -2]], shocks: [[0.5, 1]]}}}"
)
PULLED = (
    "{vector_error_correction: {names: [a, b, c], relations: [[1, -1, 0], [0, 1, -2]], adjustment: [[-0.2, 0], [0.1, "
    "-0.1], [0, 0.15]], phi: [[0.2, 0, 0], [0, 0.1, 0], [0, 0, 0]], sd: [1, 2, 1], start: [3, 2, 1]}}"
)
CASES = {"three": CORRELATED, "two": TWO, "mixed": MIXED, "average": AVERAGE, "left": LEFT, "pulled": PULLED}


def system(body, steps=STEPS, series=""):
    names = re.findall(r"\w+", body.partition("names: [")[2].partition("]")[0])
    each = "".join(f"  {name}: {{use: w.v.{name}}}\n" for name in names)
    graph = graph_of(each + series, steps=steps, rest=f"shared:\n  w: [{{{body[1:-1]}, as: v}}]")
    return graph, theory(graph.spec, graph), names


def gamma(known, names, lag):
    at = np.array([lag])
    return np.array(
        [
            [
                (known[a].covariance(at, at * 0) if a == b else known.cross(a, b).covariance(at, at * 0))[0]
                for b in names
            ]
            for a in names
        ]
    )


def test_published_covariances():
    """Lütkepohl (2005), sec. 2.1.4, to the three decimals that are printed there (from memory, and computed again)."""
    _, known, names = system(CORRELATED)
    printed = [[3.000, 0.161, 0.019], [0.161, 1.172, 0.674], [0.019, 0.674, 0.954]]
    np.testing.assert_allclose(gamma(known, names, 0), printed, rtol=0, atol=6e-4)
    _, known, names = system(TWO)
    np.testing.assert_allclose(gamma(known, names, 0), [[0.131, 0.066], [0.066, 0.181]], rtol=0, atol=6e-4)
    np.testing.assert_allclose(gamma(known, names, 1), [[0.072, 0.051], [0.104, 0.143]], rtol=0, atol=6e-4)


def test_autocovariances_of_another_library():
    """statsmodels' VARProcess.acf, which inverts (I - A x A) at once."""
    coefs = np.array([[[0.5, 0.1], [0.4, 0.5]], [[0, 0], [0.25, 0]]])
    reference = VARProcess(coefs, np.zeros((2, 1)), np.diag([0.09, 0.04])).acf(8)
    _, known, names = system(TWO)
    for lag in range(9):
        np.testing.assert_allclose(gamma(known, names, lag), reference[lag], rtol=1e-10, atol=1e-14)


@pytest.mark.parametrize("name", CASES)
def test_covariance_of_what_is_drawn(name, monkeypatch):
    graph, known, names = system(CASES[name])
    drawn = jacobian(graph, STEPS, monkeypatch)
    t, s = (a.ravel() for a in np.meshgrid(np.arange(STEPS), np.arange(STEPS)))
    for a in names:
        for b in names:
            exact = (drawn[a] @ drawn[b].T)[t, s]
            said = known.cross(a, b).covariance(t, s) if a != b else known[a].covariance(t, s)
            np.testing.assert_allclose(said, exact, rtol=1e-9, atol=1e-11 * float(np.abs(exact).max()))


@pytest.mark.parametrize("name", ["three", "two", "mixed", "average"])
def test_a_deep_lag_reads_the_same_stationary_law_and_moves_nothing(name, monkeypatch):
    lagged = "  z: {lag: {of: [{use: w.v.b}], by: 6}}\n"
    graph, known, _ = system(CASES[name], series=lagged)
    drawn = jacobian(graph, STEPS, monkeypatch)
    t, s = (a.ravel() for a in np.meshgrid(np.arange(STEPS), np.arange(STEPS)))
    exact = (drawn["z"] @ drawn["a"].T)[t, s]
    said = known.cross("z", "a").covariance(t, s)
    np.testing.assert_allclose(said, exact, rtol=1e-9, atol=1e-11 * float(np.abs(drawn["a"]).max()))
    alone, both = draw(system(CASES[name])[0], 0, 8, [STEPS]), draw(graph, 0, 8, [STEPS])
    assert np.array_equal(alone["a"], both["a"]) and np.array_equal(both["z"][6:], both["b"][:-6])


@pytest.mark.parametrize("name", ["left", "pulled"])
def test_means_are_the_recursion_without_shocks(name, monkeypatch):
    graph, known, names = system(CASES[name], steps=40)
    values = _still(graph, monkeypatch, 40)
    for component in names:
        np.testing.assert_allclose(known[component].mean(np.arange(40)), values[component][:, 0], rtol=1e-12)


def _still(graph, monkeypatch, steps):
    from procgen.chance.laws import LAWS

    with monkeypatch.context() as patch:
        for law in LAWS.values():
            patch.setattr(law, "shocks", lambda self, u, out=None: np.zeros_like(u))
        return draw(graph, 0, 2, [steps])


def test_a_relation_is_an_autoregression_of_its_own():
    """With adjustment (-0.2, 0.1) the spread a - b keeps 1 - 0.3 of itself: from 0, (1 - 0.49^t)/(1 - 0.49) var."""
    body = "{vector_error_correction: {names: [a, b], relations: [[1, -1]], adjustment: [[-0.2], [0.1]], sd: [1, 0.8]}}"
    spread = "  z: [{use: w.v.a}, {use: w.v.b, times: -1}]\n"
    _, known, _ = system(body, series=spread)
    t = np.arange(STEPS)
    np.testing.assert_allclose(known["z"].variance(t), 1.64 * (1 - 0.49**t) / 0.51, rtol=1e-12, atol=1e-14)
    assert known["a"].stationarity.reasons == ("1 unit root in w.v (cointegration rank 1)",)
    verdict, reasons = known["z"].stationarity
    assert verdict == "settles from its given start"
    assert reasons == ("w.v leaves from a given past and forgets it: its unit roots cancel",)
    _, known, _ = system(body, series=spread.replace("-1", "-0.999"))
    assert known["z"].stationarity.verdict == "variance grows"


@pytest.mark.skipif(not available(), reason="the speed extra is not installed")
@pytest.mark.parametrize("name", CASES)
def test_tiles_and_compiling_move_no_bit(name):
    graph, _, names = system(CASES[name], steps=40)
    plain = draw(graph, 3, 9, [40])
    with compiling(True):
        compiled = draw(graph, 3, 9, [1, 7, 32])
    assert all(np.array_equal(plain[component], compiled[component]) for component in names)


def test_an_appended_component_moves_nobody():
    small = "{vector_arma: {names: [a, b], phi: [[0.5, 0.2], [0, 0.4]], sd: [1, 2]}}"
    large = "{vector_arma: {names: [a, b, c], phi: [[0.5, 0.2, 0], [0, 0.4, 0], [0.3, 0, 0.6]], sd: [1, 2, 1]}}"
    one, two = (draw(system(body)[0], 0, 8, [STEPS]) for body in (small, large))
    np.testing.assert_allclose(one["a"], two["a"], rtol=1e-12, atol=1e-13)


@pytest.mark.parametrize(
    ("body", "message"),
    [
        (
            "{vector_arma: {names: [a, b], phi: [[1.2, 0], [0, 0.5]], sd: 1}}",
            "expected all eigenvalues of the recursion inside the unit circle, got one of size 1.2; shrink phi",
        ),
        (
            "{vector_arma: {names: [a, b], phi: [[0.5, 0.1]], sd: 1}}",
            "expected 2 rows of 2, one a component, got 1 row of 2; give a row to each of a, b, with a weight for "
            "each of them, 0 for none",
        ),
        (
            "{vector_arma: {names: [a, b], phi: [[[0.5, 0.1], [0, 0]], [[0.5], [0.1, 0]]], sd: 1}}",
            "expected 2 rows of 2, one a component, got 2 rows of 1 or 2 in matrix 2 of 2; give",
        ),
        (
            "{vector_arma: {names: [a, b], sd: [1, 2, 3]}}",
            "expected 2 values, one a component, or one for all, got 3; give those of a, b in this order",
        ),
        (
            "{vector_arma: {names: [a, b], sd: 1, correlation: [[1, 0.2]]}}",
            "expected 2 rows of 2, one a component, got 1 row of 2; give a row and a column to each of a, b",
        ),
        (
            "{vector_arma: {names: [a, b], sd: 1, correlation: [[1, 0.2], [0.3, 1]]}}",
            "expected a symmetric matrix, got 0.3 in row 2, column 1 and 0.2 across it; make them equal",
        ),
        (
            "{vector_arma: {names: [a, b], sd: 1, correlation: [[0.5, 0.2], [0.2, 1]]}}",
            "expected 1 on the diagonal, got 0.5 in row 1; write 1 there",
        ),
        (
            "{vector_arma: {names: [a, b], sd: 1, correlation: [[1, 1], [1, 1]]}}",
            "expected a positive definite correlation, got one whose smallest eigenvalue is",
        ),
        (
            "{vector_arma: {names: [a, b], phi: [[0.5, 0], [0, 0.5]], sd: 1, before: {x: [[1]]}}}",
            "expected 1 or more rows of 2 past values in `x` (a row a step, one for each lag of phi), got 1 row of 1; "
            "give those of a, b in each row, the last step last",
        ),
        (
            "{vector_error_correction: {names: [a, b], relations: [[1, -1]], adjustment: [[0.2], [-0.1]], sd: 1}}",
            "expected as many unit roots as components less relations (1), all else inside the unit circle, got 1 and "
            "a root of size 1.3; adjust against a relation",
        ),
        (
            "{vector_error_correction: {names: [a, b], relations: [[1, 0], [0, 1]], adjustment: [[-1, 0], [0, -1]], "
            "sd: 1}}",
            "expected fewer relations than the 2 components: with 2 of them nothing wanders; use vector_arma",
        ),
        (
            "{vector_error_correction: {names: [a, b], relations: [[1]], adjustment: [[-1]], sd: 1}}",
            "expected a row of 2 weights for each relation, one a component, got 1 row of 1; give the weights of a, b",
        ),
        (
            "{vector_error_correction: {names: [a, b], relations: [[1, -1]], adjustment: [[-1, 0]], sd: 1}}",
            "expected 2 rows of 1 (a row a component, a column a relation), got 1 row of 2; give a row to each of a, b",
        ),
    ],
)
def test_refusals_say_what_was_expected_and_given(body, message):
    with pytest.raises(SpecError) as error:
        system(body)
    assert message in str(error.value)


def test_a_component_that_does_not_exist_is_named():
    with pytest.raises(SpecError) as error:
        graph_of("  x: {use: w.v.d}", rest=f"shared:\n  w: [{{{TWO[1:-1]}, as: v}}]")
    assert "there is no hidden output of w.v named d; expected a or b" in str(error.value)


def test_shocks_have_a_letter_that_no_component_can_have():
    """Lütkepohl (2005) writes u for them; here a component may be called u, or a_b, but no Greek letter."""
    body = "{vector_arma: {names: [a, a_a], phi: [[0.5, 0.2], [0, 0.4]], theta: [[0, 0.3], [0, 0]], sd: [1, 2]}}"
    graph, _, _ = system(body)
    lines = " ".join(" ".join(equations(graph.spec, 200)).split())
    assert "a[t] = 0.5 a[t−1] + 0.2 a_a[t−1] + 0.3 ε_a_a[t−1] + ε_a[t], a_a[t] = 0.4 a_a[t−1] + ε_a_a[t]" in lines
    assert "sd ε = (1, 2), independent" in lines


def test_equations_say_where_a_system_leaves_from():
    known = "before: {x: [[3, 4], [5, 6]], shocks: [[1, 2]]}"
    past = f"{{vector_arma: {{names: [a, b], theta: [[1, 0], [0, 1]], sd: 1, {known}}}}}"
    lines = " ".join(" ".join(equations(system(past)[0].spec, 200)).split())
    assert "a[−2] = 3, a[−1] = 5, b[−2] = 4, b[−1] = 6, ε_a[−1] = 1, ε_b[−1] = 2" in lines
    pull = "relations: [[1, -1]], adjustment: [[-0.2], [0.1]]"
    start = f"{{vector_error_correction: {{names: [a, b], {pull}, start: 7, sd: 1}}}}"
    assert "a[0] = 7, b[0] = 7" in " ".join(equations(system(start)[0].spec, 200))
