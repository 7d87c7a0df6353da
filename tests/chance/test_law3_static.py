"""Value code calls nothing whose bits differ between processors: read from the syntax trees of the source.

Allowed are + - * /, np.sqrt, comparisons, rounding to whole numbers, bits, take and where, and the functions of
`procgen.chance.portable`. Refused are the elementary functions of NumPy, SciPy and math, powers (but of whole numbers,
and 2.0 to a written whole number), matrix products, sums, the linear algebra and Fourier transforms of libraries, and
the distributions of random generators. Python's own `sum` is refused too: from Python 3.12 on it adds otherwise.
"""

import ast
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parent.parent.parent / "procgen"

# Files whose functions make values or what values are made from.
FILES = sorted(
    path.relative_to(PACKAGE).as_posix()
    for pattern in ("chance/**/*.py", "terms/*.py", "ensemble/draw.py", "ensemble/part.py", "ensemble/columns.py")
    for path in PACKAGE.glob(pattern)
)

# Theory, messages and checks that stand beside value code: method or function names, in these rooms only.
EXEMPT = {
    "chance": {
        "moment",
        "growth",
        "_growth",
        "distribution",
        "_distribution",
        "expect",
    },
    "terms": {
        "moments",
        "equation",
        "check",
        "ahead",
        "rank",
        "ranks",
        "following",
        "events",
        "runs",
    },
}
# Single functions: only whether a spec is accepted, or a length rounded to a power of two, depends on them.
EXEMPT_PLACES = {
    ("terms/arma.py", "_root"),
    ("terms/conditional.py", "burn_without_variance"),
    ("terms/garch.py", "_without_variance"),
    ("terms/vector.py", "eigenvalues"),
    ("terms/vector.py", "shape_faults"),
    ("terms/gjr.py", "_without_variance"),
}

ELEMENTARY = set(
    "exp exp2 expm1 log log2 log10 log1p logaddexp sin cos tan arcsin arccos arctan arctan2 asin acos atan atan2 "
    "sinh cosh tanh asinh acosh atanh arcsinh arccosh arctanh pow power float_power cbrt hypot sinc erf erfc gamma "
    "lgamma dist prod fsum sumprod".split()
)
REDUCTIONS = set(
    "sum cumsum nansum prod cumprod mean nanmean average var std nanvar nanstd median dot vdot inner matmul "
    "tensordot einsum trapezoid trapz convolve correlate interp polyval polyfit reduce reduceat norm "
    "cov corrcoef roots".split()
)
LIBRARIES = {"linalg", "fft", "polynomial"}
GENERATORS = set(
    "default_rng Generator RandomState standard_normal normal random_sample rand randn uniform exponential "
    "standard_exponential standard_gamma standard_t integers choice shuffle permutation poisson binomial laplace "
    "logistic".split()
)
MODULES = {"np", "numpy", "math", "cmath"}


def parts(tree):
    """Every node with the names of the functions and classes it stands in."""

    def walk(node, within):
        for child in ast.iter_child_nodes(node):
            named = isinstance(child, ast.FunctionDef | ast.AsyncFunctionDef | ast.ClassDef)
            below = (*within, child.name) if named else within
            yield child, below
            yield from walk(child, below)

    yield from walk(tree, ())


def fault_of_power(node):
    base, exponent = node.left, node.right
    if isinstance(base, ast.Constant) and (type(base.value) is int or (base.value == 2.0 and is_fixed(exponent))):
        return None
    return "a power; write products, or a function of procgen.chance.portable"


def is_fixed(node):
    """Made of written whole numbers and module constants, as the exponent of 2.0 ** -(_OCTAVES + 1)."""
    return all(
        type(part.value) is int if isinstance(part, ast.Constant) else part.id.isupper()
        for part in ast.walk(node)
        if isinstance(part, ast.Constant | ast.Name)
    ) and not any(isinstance(part, ast.Call | ast.Attribute) for part in ast.walk(node))


def fault_of_attribute(node):
    """What is wrong with `owner.name`; owners other than modules are arrays, laws, streams ..."""
    name = node.attr
    module = isinstance(node.value, ast.Name) and node.value.id in MODULES
    if module and name in ELEMENTARY:
        return f"{node.value.id}.{name}; use procgen.chance.portable"
    if name in REDUCTIONS and module:
        return f"{name}, a reduction in an order that is not ours"
    if name in LIBRARIES:
        return f"{name}, a library whose bits differ"
    if name in GENERATORS and ast.unparse(node.value).split(".")[-1] in {"random", "rng", "generator", "np"}:
        return f"{name}; only raw words of Philox are promised to stay"
    return None


def fault_of_method(function):
    """What is wrong with calling a method of an array; a parameter or a field may well be named `mean`."""
    module = isinstance(function.value, ast.Name) and function.value.id in MODULES
    if function.attr in {"sum", "cumsum", "prod", "dot", "mean", "std", "reduce"} and not module:
        return f"{function.attr}, a reduction in an order that is not ours"
    return None


def fault_of_import(node):
    if isinstance(node, ast.ImportFrom):
        source, names = node.module or "", [alias.name for alias in node.names]
        if set(source.split(".")) & LIBRARIES:
            return f"import from {source}"
        if source.split(".")[0] in MODULES and set(names) & (ELEMENTARY | REDUCTIONS | LIBRARIES | GENERATORS):
            return f"import of {', '.join(names)} from {source}"
    else:
        source = node.names[0].name
    return f"import of {source}" if source.split(".")[0] in {"scipy", "random", "statistics"} else None


def fault(node):
    if isinstance(node, ast.BinOp | ast.AugAssign):
        if isinstance(node.op, ast.MatMult):
            return "@, a matrix product in an order that is not ours; use portable.matmul"
        if isinstance(node, ast.BinOp) and isinstance(node.op, ast.Pow):
            return fault_of_power(node)
        if isinstance(node, ast.AugAssign) and isinstance(node.op, ast.Pow):
            return "a power"
    if isinstance(node, ast.Attribute):
        return fault_of_attribute(node)
    if isinstance(node, ast.Import | ast.ImportFrom):
        return fault_of_import(node)
    if isinstance(node, ast.Call) and isinstance(node.func, ast.Attribute):
        return fault_of_method(node.func)
    if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id in {"sum", "pow"}:
        return f"Python's {node.func.id}"
    return None


def faults(source, file):
    """Every breach of the rules in a file outside exempt functions, as text with its line."""
    exempt = EXEMPT.get(file.split("/")[0], set())
    found = []
    for node, within in parts(ast.parse(source)):
        if exempt & set(within) or any((file, name) in EXEMPT_PLACES for name in within):
            continue
        what = fault(node)
        if what:
            found.append(f"procgen/{file}, line {node.lineno}, in {'.'.join(within) or 'the module'}: {what}")
    return found


@pytest.mark.parametrize("file", FILES)
def test_value_code_is_portable(file):
    assert faults((PACKAGE / file).read_text(encoding="utf-8"), file) == []


def test_the_files_are_there():
    assert {"chance/streams.py", "chance/normal.py", "chance/laws/base.py", "terms/garch.py"} <= set(FILES)
    assert {"ensemble/draw.py", "ensemble/part.py", "ensemble/columns.py"} <= set(FILES)


def test_exemptions_are_used():
    """An exemption of a place that no longer needs it goes."""
    for file, name in EXEMPT_PLACES:
        tree = ast.parse((PACKAGE / file).read_text(encoding="utf-8"))
        inside = [node for node, within in parts(tree) if name in within]
        assert any(fault(node) for node in inside), (file, name)


@pytest.mark.parametrize(
    "line",
    [
        "np.exp(x)",
        "math.log(x)",
        "np.sin(x) + 1",
        "x ** 2",
        "x ** 0.5",
        "10.0 ** n",
        "2.0 ** x",
        "x **= 2",
        "a @ b",
        "np.dot(a, b)",
        "a.dot(b)",
        "x.sum(axis=0)",
        "np.cumsum(x)",
        "np.add.reduce(x)",
        "sum(x)",
        "pow(x, 2)",
        "np.linalg.cholesky(s)",
        "np.fft.rfft(x)",
        "np.random.default_rng(1)",
        "rng.standard_normal(3)",
        "from math import exp",
        "from numpy import power",
        "from numpy.linalg import cholesky",
        "from scipy.special import ndtri",
        "import scipy.stats",
        "import random",
        "np.mean(x)",
        "x.mean()",
        "np.einsum('ij,jk', a, b)",
    ],
)
def test_a_breach_is_seen(line):
    source = f"def recurse(x):\n    {line}\n"
    assert len(faults(source, "terms/new.py")) == 1
    assert faults(f"def moments(x):\n    {line}\n", "terms/new.py") == []
    assert faults(f"def moments(x):\n    {line}\n", "ensemble/draw.py") != []


@pytest.mark.parametrize(
    "line",
    [
        "np.sqrt(x) * z + x / 3.0",
        "2.0 ** -53",
        "2**62 // 16",
        "10 ** decimals",
        "2.0 ** -(_OCTAVES + 1)",
        "from procgen.chance.portable import exp, log",
        "exp(x) + portable.exp(x)",
        "np.random.Philox(key=1).random_raw(4)",
        "np.where(x > 0, x, np.floor(x))",
        "np.maximum(x, 0.0).max()",
        "law.moment(4)",
        "f(**values)",
    ],
)
def test_what_is_allowed_passes(line):
    assert faults(f"def recurse(x):\n    {line}\n", "terms/new.py") == []
