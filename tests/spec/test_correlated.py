"""Correlations: three ways to write them, and how they fail. Eigenvalues of the examples are known in closed form."""

import numpy as np
import pytest

from procgen.spec.correlated import WAYS
from procgen.spec.reader import read_raw
from tests.spec.small import CATALOGUE, HEAD, LAWS, faults, read

BODIES = """shared:
  w: {white_noise: {sd: 1}}
series:
  a: {white_noise: {sd: 1}}
  b: [{ar: {phi: 0.5, sd: 1}, as: swing}, {constant: 1}]
  c: {exp: {random_walk: {shock: {garch: {sd: 1, alpha: 0.1}, as: noise}}}}
  d: {constant: 1}
"""


def correlation(text):
    return read(HEAD + BODIES + f"correlation: {text}\n").correlation


def correlation_faults(text):
    return faults(HEAD + BODIES + f"correlation: {text}\n")


def test_without_correlation_there_is_none():
    spec = read(HEAD + BODIES)
    assert (spec.correlation.names, spec.correlation.matrix) == ((), ())


def test_pairs_in_order_of_first_appearance():
    found = correlation(
        "[{between: [c.noise, a.white_noise], value: 0.3}, {between: [w.white_noise, c.noise], value: -0.2}]"
    )
    assert found.names == ("c.noise", "a.white_noise", "w.white_noise")
    assert found.matrix == ((1.0, 0.3, -0.2), (0.3, 1.0, 0.0), (-0.2, 0.0, 1.0))


def test_a_matrix_a_group_and_pairs_mean_the_same():
    group = correlation("{within: [a.white_noise, b.swing, c.noise], value: 0.5}")
    matrix = correlation(
        "{names: [a.white_noise, b.swing, c.noise], matrix: [[1, 0.5, 0.5], [0.5, 1, 0.5], [0.5, 0.5, 1]]}"
    )
    pairs = correlation(
        "[{between: [a.white_noise, b.swing], value: 0.5}, {between: [a.white_noise, c.noise], value: 0.5}, "
        "{between: [c.noise, b.swing], value: 0.5}]"
    )
    assert group == matrix == pairs


@pytest.mark.parametrize(
    ("text", "message", "place"),
    [
        # Equal correlations ρ of n have the smallest eigenvalue 1 + (n − 1)ρ for ρ < 0: here 1 − 2·0.6.
        ("{within: [a.white_noise, b.swing, c.noise], value: -0.6}", "expected a positive definite correlation, got "
         "one whose smallest eigenvalue is -0.2; bring the values nearer to 0, or to each other", "correlation:14"),
        # A path x – y – z with correlations ρ has the smallest eigenvalue 1 − ρ√2: here 1 − 0.9·1.41421 = −0.273.
        ("[{between: [a.white_noise, b.swing], value: 0.9}, {between: [b.swing, c.noise], value: 0.9}]",
         "expected a positive definite correlation, got one whose smallest eigenvalue is -0.273; bring the values "
         "nearer to 0, or to each other", "correlation:14"),
        ("{between: [a.white_noise, b.swing], value: 1}", "expected a number in (-1, 1), got 1 (value: correlation of "
         "the primary normals)", "correlation.value:57"),
        ("{between: [a.white_noise, a.white_noise], value: 0.1}",
         "expected two different names, got a.white_noise twice", "correlation.between[1]:40"),
        ("[{between: [a.white_noise, b.swing], value: 0.1}, {between: [b.swing, a.white_noise], value: 0.1}]",
         "the correlation of b.swing and a.white_noise is given twice; remove one", "correlation[1].between[1]:84"),
        ("{between: [a.white_noise, z.swing], value: 0.1}",
         "there is no series or shared body named z; expected one of w, a, b, c, d", "correlation.between[1]:40"),
        ("{between: [a.white_noise, b], value: 0.1}",
         "expected a term that draws shocks, got b; in b that is b.swing", "correlation.between[1]:40"),
        ("{between: [a.white_noise, b.constant], value: 0.1}",
         "expected a term that draws shocks, got b.constant; in b that is b.swing", "correlation.between[1]:40"),
        ("{between: [a.white_noise, c.random_walk], value: 0.1}",
         "expected a term that draws shocks, got c.random_walk; in c that is c.noise", "correlation.between[1]:40"),
        ("{between: [a.white_noise, d.constant], value: 0.1}",
         "expected a term that draws shocks, got d.constant; nothing in d draws any", "correlation.between[1]:40"),
        ("{between: [a.white_noise, b.swing], value: 0.3, repair: true}", "repair takes the nearest correlation matrix "
         "in place of a stated one, beside matrix: alone; write {names: […], matrix: […], repair: true}, or remove it",
         "correlation.repair:62"),
        ("{between: [a.white_noise], value: 0.1}", "expected a list of two names such as load.arma, got a list of 1 "
         "(between: the two that are correlated)", "correlation.between:24"),
        ("{within: a, value: 0.1}", 'expected a list of at least two names such as load.arma, got "a" '
         "(within: names of which any two are correlated alike)", "correlation.within:23"),
        ("{betwen: [a, b], value: 0.1}",
         f"expected {WAYS}, got a mapping with the keys betwen, value; did you mean between?",
         "correlation:14"),
        ("5", f"expected {WAYS}, got 5", "correlation:14"),
        ("{between: [a.white_noise, b.swing]}", "expected the key value (correlation of the primary normals: a number "
         "in (-1, 1))", "correlation:14"),
        ("{names: [a.white_noise, b.swing], matrix: [[1, 0.1]]}", "expected 2 rows of 2 for 2 names, got 1 row of 2",
         "correlation.matrix:56"),
        ("{names: [a.white_noise, b.swing], matrix: [[1, 0.1], [0.1, 0.9]]}",
         "expected 1 on the diagonal, got 0.9 in row 2", "correlation.matrix[1]:67"),
        ("{names: [a.white_noise, b.swing], matrix: [[1, 0.1], [0.2, 1]]}",
         "expected a symmetric matrix, got 0.2 in row 2, column 1 and 0.1 across it", "correlation.matrix[1]:67"),
        ("{names: [a.white_noise, b.swing], matrix: 5}", "expected a list of rows of numbers, as in [[1, 0.3], "
         "[0.3, 1]], got 5 (matrix: correlations of the primary normals, with 1 on the diagonal)",
         "correlation.matrix:56"),
    ],
)  # fmt: skip
def test_faults(text, message, place):
    path, column = place.split(":")
    assert correlation_faults(text) == [f"{message}\n  at {path} (a.yaml, line 12, column {column})"]


def test_too_many_names():
    bodies = "".join(f"  s{i}: {{white_noise: {{sd: 1}}}}\n" for i in range(1001))
    names = ", ".join(f"s{i}.white_noise" for i in range(1001))
    found = faults(HEAD + "series:\n" + bodies + f"correlation: {{within: [{names}], value: 0.1}}\n")
    assert found == [
        "expected at most 1000 correlated names, got 1,001\n  at correlation (a.yaml, line 1007, column 14)"
    ]


def test_factors_are_the_products_of_their_loadings():
    found = correlation("{names: [a.white_noise, b.swing, c.noise], loadings: [[0.8, 0], [0.5, 0.5], [0, 0.6]]}")
    assert found.matrix == ((1.0, 0.4, 0.0), (0.4, 1.0, 0.3), (0.0, 0.3, 1.0))


def test_blocks_have_a_correlation_inside_and_one_across():
    found = correlation(
        "{blocks: [{names: [a.white_noise, b.swing], value: 0.6}, {names: [c.noise, w.white_noise], value: 0.2}], "
        "across: 0.1}"
    )
    assert found.matrix == ((1, 0.6, 0.1, 0.1), (0.6, 1, 0.1, 0.1), (0.1, 0.1, 1, 0.2), (0.1, 0.1, 0.2, 1))


# Higham (2002), IMA J. Numer. Anal. 22, sec. 4 (from memory): the nearest correlation to [[1, 1, 0], [1, 1, 1],
# [0, 1, 1]] has 0.7607 beside the diagonal and 0.1573 in the corner.
HIGHAM = "{names: [a.white_noise, b.swing, c.noise], matrix: [[1, 1, 0], [1, 1, 1], [0, 1, 1]]"


def test_a_matrix_that_is_none_is_repaired_on_request():
    spec = read(HEAD + BODIES + f"correlation: {HIGHAM}, repair: true}}\n")
    matrix = np.array(spec.correlation.matrix)
    np.testing.assert_allclose(matrix[[0, 0, 1], [1, 2, 2]], [0.7607, 0.1573, 0.7607], rtol=0, atol=5e-4)
    assert np.linalg.eigvalsh(matrix)[0] > 5e-5
    (item,) = [spec.raw["correlation"]]
    assert item["matrix"] == matrix.tolist() and item["moved"] == round(1 - matrix[0, 1], 6)
    again = read_raw(spec.raw, CATALOGUE, LAWS)
    assert again.correlation == spec.correlation and again.raw == spec.raw


def test_without_the_request_it_is_refused_with_the_offer():
    (found,) = correlation_faults(HIGHAM + "}")
    assert "smallest eigenvalue is -0.414" in found  # 1 - sqrt(2), known in closed form
    assert "or add repair: true for the nearest one that is" in found


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("{names: [a.white_noise, b.swing], loadings: [[0.5]]}", "expected 2 rows, one a name, each with one number"),
        ("{names: [a.white_noise, b.swing], loadings: [[0.8, 0.6], [0.1, 0]]}", "expected squares that sum to less"),
        ("{names: [a.white_noise, b.swing]}", "expected {between: "),
    ],
)
def test_more_faults(text, message):
    (found,) = correlation_faults(text)
    assert found.startswith(message)


T4 = "copula: {student_t: {df: 4}}"


@pytest.mark.parametrize(
    "item",
    [
        "{between: [a.white_noise, b.swing], value: 0.3, " + T4 + "}",
        "{within: [a.white_noise, b.swing], value: 0.3, " + T4 + "}",
        "{names: [a.white_noise, b.swing], matrix: [[1, 0.3], [0.3, 1]], " + T4 + "}",
        "{names: [a.white_noise, b.swing], loadings: [[0.6], [0.5]], " + T4 + "}",
        "{blocks: [{names: [a.white_noise, b.swing], value: 0.3}], " + T4 + "}",
    ],
)
def test_every_form_takes_a_copula(item):
    (found,) = correlation(item).copulas
    assert found.names == ("a.white_noise", "b.swing") and found.df == 4.0


def test_items_that_share_a_name_share_their_copula():
    found = correlation(
        "[{between: [a.white_noise, b.swing], value: 0.3, " + T4 + "}, "
        "{between: [b.swing, c.noise], value: 0.2, " + T4 + "}]"
    )
    (copula,) = found.copulas
    assert copula.names == found.names == ("a.white_noise", "b.swing", "c.noise")


@pytest.mark.parametrize("other", ["", ", copula: {student_t: {df: 5}}"])
def test_two_copulas_of_one_name_are_refused(other):
    (found,) = correlation_faults(
        "[{between: [a.white_noise, b.swing], value: 0.3, " + T4 + "}, "
        "{between: [b.swing, c.noise], value: 0.2" + other + "}]"
    )
    assert found.startswith("another item ties b.swing by a t copula of 4 degrees of freedom, and here")


@pytest.mark.parametrize(
    ("copula", "message"),
    [
        ("normal", "expected a copula such as {student_t: {df: 4}}"),
        ("{student_t: {df: 2}}", "expected a number above 2, got 2"),
        ("{student_t: {}}", "expected the key df"),
    ],
)
def test_copulas_that_are_none(copula, message):
    (found,) = correlation_faults("{between: [a.white_noise, b.swing], value: 0.3, copula: " + copula + "}")
    assert found.startswith(message)


def test_too_many_names_of_one_copula():
    names = ", ".join(f"s{i}.white_noise" for i in range(101))
    bodies = "".join(f"  s{i}: {{white_noise: {{sd: 1}}}}\n" for i in range(101))
    (found,) = faults(HEAD + "series:\n" + bodies + f"correlation: {{within: [{names}], value: 0.1, {T4}}}\n")
    assert found.startswith("expected at most 100 names in a t copula, got 101")


ROOTS = "for a correlation of ρ at every lag add √ρ times one under shared: to √(1 − ρ) times its own in each series"
FOLLOWED = "let the mean of each follow a body, as in of: [{ar: {phi: 0.5, sd: 0.3}}], and name those bodies' terms"
BESIDE = "put a term with plain shocks beside it and name that"


@pytest.mark.parametrize(
    ("body", "own", "mend"),
    [
        ("arfima: {d: 0.3, sd: 1}", "x.arfima", ROOTS),
        ("poisson: {mean: 3}", "x.poisson", FOLLOWED),
        ("flag: {share: 0.2}", "x.flag", BESIDE),
        ("local_level: {level_sd: 1, noise_sd: 1}", "x.local_level", BESIDE),
        ("[{inar: {alpha: 0.5, mean: 2}}, {white_noise: {sd: 1}}]", "x.inar", "name x.white_noise"),
    ],
)
def test_shocks_that_are_a_terms_own_cannot_be_mixed(body, own, mend):
    from procgen.chance.laws import LAWS as ALL
    from procgen.spec.model import SpecError
    from procgen.spec.reader import read_text
    from procgen.terms import catalogue

    body = body if body.startswith("[") else f"{{{body}}}"
    spec = f"{HEAD}series:\n  x: {body}\n  y: {{white_noise: {{sd: 1}}}}\n"
    said = f"the shocks of {own} are its own and cannot be mixed with others'; {mend}, or let the series that are to "
    for name in (own, "x") if not body.startswith("[") else (own,):
        with pytest.raises(SpecError) as error:
            read_text(f"{spec}correlation: {{between: [y.white_noise, {name}], value: 0.3}}\n", catalogue(), ALL)
        assert str(error.value).startswith(f"{said}move together use one body under shared:\n")


def test_what_a_refusal_tells_to_write_gives_the_correlation_that_it_tells():
    import procgen as pg

    rho, memory = 0.4, {"arfima": {"d": 0.3, "phi": 0.4, "sd": 1}}

    def mixed():
        return [{"use": "w", "times": rho**0.5}, {**memory, "times": (1.0 - rho) ** 0.5}]

    said = pg.theory({
        "procgen": 1, "seed": 1, "time": {"steps": 50}, "shared": {"w": [memory]}, "paths": 5,
        "series": {"x": mixed(), "y": mixed(), "alone": [memory]},
    })  # fmt: skip
    lags, own = np.arange(12), said["alone"].autocovariance(np.arange(12))
    np.testing.assert_allclose(said.cross("x", "y").covariance(lags, 0 * lags), rho * own, rtol=1e-12)
    np.testing.assert_allclose(said["x"].autocovariance(lags), own, rtol=1e-12)
