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
    for pattern in (
        "chance/**/*.py",
        "terms/**/*.py",
        *(f"ensemble/{name}.py" for name in ("draw", "part", "columns", "source")),
        *(f"spec/{name}.py" for name in ("elapsed", "local", "timegrid", "timelist", "calendar", "zones")),
    )
    for path in PACKAGE.glob(pattern)
    if path.name != "distributions.py"  # the laws that theory and checks ask
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
        "_landmarks",
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
    ("terms/vector_shapes.py", "_correlation_faults"),
    ("terms/labels.py", "entry_named"),  # a number of entries
    ("terms/gjr.py", "_without_variance"),
    ("terms/inar.py", "_given"),  # moments
    ("terms/inar.py", "_law_after"),
    ("terms/prices.py", "_log_before"),  # of `rank`
    *(("terms/hidden_memory.py", name) for name in ("spreads", "_step", "_body", "body_gap", "_total", "_remembering")),
    ("terms/hidden_states.py", "__init__"),  # a term that only checks ask
    ("terms/hidden_states.py", "_law"),
    ("terms/hidden_states.py", "_law_of"),
    ("terms/hidden_states.py", "_functions"),
    ("terms/hidden_states.py", "hidden_states"),
    ("chance/laws/points.py", "std"),
    ("spec/local.py", "places"),  # a running sum of whole numbers
}
# Who may reach the compiler; all others compile by `compiled_function`, which allows no fused or reordered operation.
COMPILERS = {
    f"chance/{name}.py"
    for name in ("kernel", "machine", "passing", "compiled", "compiled_elementary", "compiled_passing")
} | {"checks/crossed.py"}

ELEMENTARY = set(
    "exp exp2 expm1 log log2 log10 log1p logaddexp logaddexp2 sin cos tan arcsin arccos arctan arctan2 asin acos atan "
    "atan2 sinh cosh tanh asinh acosh atanh arcsinh arccosh arctanh pow power float_power cbrt hypot sinc erf erfc "
    "gamma lgamma dist prod fsum sumprod fma i0 geomspace logspace linspace angle".split()
)
REDUCTIONS = set(
    "sum cumsum nansum prod cumprod mean nanmean average var std nanvar nanstd median dot vdot inner matmul "
    "tensordot einsum trapezoid trapz convolve correlate interp polyval polyfit reduce reduceat norm vecdot matvec "
    "vecmat cov corrcoef roots cumulative_sum cumulative_prod nancumsum nanprod nancumprod trace kron cross percentile "
    "quantile nanpercentile nanquantile nanmedian gradient histogram".split()
)
LIBRARIES = {"linalg", "fft", "polynomial"}
GENERATORS = set(
    "default_rng Generator RandomState standard_normal normal random_sample rand randn uniform exponential "
    "standard_exponential standard_gamma standard_t integers choice shuffle permutation poisson binomial laplace "
    "logistic".split()
)
METHODS = set("sum cumsum prod cumprod dot mean std var trace reduce reduceat".split())
MODULES = {"np", "numpy", "math"}


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
    if isinstance(base, ast.Constant) and (is_fixed(exponent) or (type(base.value) is int and is_whole(exponent))):
        return None
    return "a power; write products, or a function of procgen.chance.portable"


def is_whole(node):
    """An exponent that cannot be an array of floats: a length, int(...), decimals or their size, a sum of these."""
    if isinstance(node, ast.BinOp):
        return is_whole(node.left) and is_whole(node.right)
    if isinstance(node, ast.Call):
        called = ast.unparse(node.func)
        return called in {"len", "int"} or (called == "abs" and is_whole(node.args[0]))
    return is_fixed(node) or (isinstance(node, ast.Name) and node.id == "decimals")


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
    if function.attr in METHODS and not module:
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
        for alias in node.names:
            if alias.name.split(".")[0] in MODULES and (alias.asname not in {None, "np"} or "." in alias.name):
                return f"import {ast.unparse(alias)}; numpy as np and math as math are looked through"
        source = node.names[0].name
    refused = {"scipy", "random", "statistics", "cmath", "operator", "numba", "llvmlite"}
    return f"import of {source}" if source.split(".")[0] in refused else None


def fault_of_call(node):
    """What is wrong with a call by name, or with how an array is made or counted."""
    called = ast.unparse(node.func)
    words = {keyword.arg: keyword.value for keyword in node.keywords}
    if called in {"sum", "pow", "complex"}:
        return f"Python's {called}"
    if called == "getattr" and ast.unparse(node.args[0]) in MODULES:
        return "a function by its name as text; write it out"
    if called in {"np.arange", "numpy.arange"}:
        step = words.get("step", node.args[2] if len(node.args) > 2 else ast.Constant(1))
        value = step.operand if isinstance(step, ast.UnaryOp) else step
        if not (isinstance(value, ast.Constant) and value.value == int(value.value)):
            return "arange with a step, start + i·step in one operation on some processors; multiply np.arange(n)"
    if called.endswith("bincount") and "weights" in words:
        return "bincount with weights, a sum"
    return None


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
    if isinstance(node, ast.Constant) and isinstance(node.value, complex):
        return "a complex number, whose product is fused on some processors"
    if isinstance(node, ast.Call):
        return (fault_of_method(node.func) if isinstance(node.func, ast.Attribute) else None) or fault_of_call(node)
    return None


def faults(source, file):
    """Every breach of the rules in a file outside exempt functions, as text with its line."""
    exempt = EXEMPT.get(file.split("/")[0], set())
    found = []
    for node, within in parts(ast.parse(source)):
        if exempt & set(within) or any((file, name) in EXEMPT_PLACES for name in within):
            continue
        what = fault(node)
        if what and not (file in COMPILERS and what.startswith(("import of numba", "import of llvmlite"))):
            found.append(f"procgen/{file}, line {node.lineno}, in {'.'.join(within) or 'the module'}: {what}")
    return found


@pytest.mark.parametrize("file", FILES)
def test_value_code_is_portable(file):
    assert faults((PACKAGE / file).read_text(encoding="utf-8"), file) == []


def test_the_files_are_there():
    assert {"chance/streams.py", "chance/normal.py", "chance/laws/base.py", "terms/garch.py"} <= set(FILES)
    assert {"ensemble/draw.py", "ensemble/part.py", "ensemble/columns.py"} <= set(FILES)


def test_few_places_say_how_to_compile():
    """Fused a·b + c, other orders of sums, or threads would be other bits: see tests/chance/test_kernel.py."""
    said = []
    for path in sorted(PACKAGE.rglob("*.py")):
        file, tree = path.relative_to(PACKAGE).as_posix(), ast.parse(path.read_text(encoding="utf-8"))
        for node in ast.walk(tree):
            if isinstance(node, ast.Import | ast.ImportFrom) and file not in COMPILERS:
                assert "numba" not in ast.unparse(node), (file, node.lineno)
            if isinstance(node, ast.Attribute) and node.attr in {"jit", "njit", "cfunc", "vectorize", "guvectorize"}:
                said.append((file, node.attr))
            if isinstance(node, ast.keyword) and node.arg in {"fastmath", "parallel"}:
                assert ast.unparse(node.value) == "False", (file, node.lineno)
    assert said == [("chance/kernel.py", "njit"), ("chance/machine.py", "njit"), ("chance/machine.py", "cfunc")]


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
        "np.add.reduceat(x, edges)",
        "x.cumprod()",
        "x.var()",
        "np.cumulative_sum(x)",
        "2 ** x",
        "2 ** -x",
        "3.0 ** k",
        "np.arange(0.0, 1.0, 0.1)",
        "np.arange(0, 1, step=h)",
        "np.linspace(0, 1, n)",
        "np.bincount(k, weights=x)",
        "getattr(np, name)(x)",
        "import numpy as xp",
        "import math as m",
        "import numpy.linalg",
        "import cmath",
        "from operator import matmul",
        "import numba",
        "math.fma(a, b, c)",
        "x * 2j",
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
        "10 ** abs(decimals)",
        "2 ** (len(rows) - 1)",
        "1 << k",
        "np.arange(1.0, n + 1.0)",
        "np.arange(n, 0, -1)",
        "np.bincount(k)",
        "np.add.accumulate(x)",  # one after the other, which a sum is not
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
