"""A fixed mix of draws, as digests: `python -m tests.chance.golden` prints them as JSON.

With --write they are written to tests/golden/chance.json; that is right only for a new stream version, or for
values that have never been released.
"""

import json
import sys
from hashlib import sha256
from importlib import import_module
from pathlib import Path

import numpy as np

from procgen.chance import portable
from procgen.chance.kernel import available, compiling, kernel
from procgen.chance.laws import LAWS
from procgen.chance.streams import STREAM_VERSION, Stream

FILE = Path(__file__).parent.parent / "golden" / "chance.json"
STREAM = Stream(271828, "load_kw", "swing", "innovation")
PARAMETERS = {
    "student_t": {"df": 4.5},
    "mixture": {"weight": 0.05, "ratio": 4, "shift": 0.5},
    "skewed_t": {"df": 4.5, "skew": -0.3},
    "ged": {"shape": 1.3},
    "skew_normal": {"alpha": 3},
    "gamma": {"shape": 1.5},
    "lognormal": {"sigma": 0.5},
    "normal_mixture": {"components": ((0.6, -1, 0.5), (0.3, 0, 1), (0.1, 2, 3))},
    "bernoulli": {"p": 0.3},
    "empirical": {"values": (4, 1, 1, 2.5, 9, 0.5, 3), "smoothed": 0.4},
    "stable": {"alpha": 1.5, "beta": 0.5},
}


@kernel
def recursion(z, out, h, omega, alpha, beta):
    """A garch and a filter of it: all operations that kernels use."""
    x = 0.0 * h
    for t in range(z.shape[0]):
        e = np.sqrt(h) * z[t]
        x = 0.7 * x - 0.1 * e
        out[t] = np.where(x > 0.5, x / 3.0, np.maximum(x, -2.0)) + e
        h = omega + alpha * (e * e) + beta * h
    return h


def dispatched():
    """The features above NumPy's baseline that it uses on this processor."""
    core = "numpy._core" if int(np.__version__.split(".")[0]) >= 2 else "numpy.core"
    numpy_build = import_module(f"{core}._multiarray_umath")
    return [name for name in numpy_build.__cpu_dispatch__ if numpy_build.__cpu_features__.get(name)]


def digest(values):
    return sha256(np.ascontiguousarray(values, "<f8").tobytes()).hexdigest()


def digests():
    u = STREAM.uniforms(5, 200, -100, 400)
    z = portable.normal_quantile(u)
    a = np.array([[0.9, 0.1, 0.0], [0.2, 0.3, 0.1], [0.0, 0.4, 0.5]])
    sums = portable.sum_doubling(a, np.eye(3) + 0.3)
    found = {
        "uniforms": u,
        "exp": portable.exp(30 * z),
        "log": portable.log(u),
        "log1p": portable.log1p(u / 100),
        "sin_turns": portable.sin_turns(z),
        "cos_turns": portable.cos_turns(z),
        "normal_quantile": z,
        "normal_tail": portable.normal_tail(np.abs(z)),
        "sum_doubling": sums,
        "cholesky": portable.cholesky(sums),
        "matmul": portable.matmul(z[:20, :30], z[30:60, :40]),
    }
    for name, law in LAWS.items():
        made = law(**PARAMETERS.get(name, {}))
        found[name] = made.shocks(u)
        found[f"{name} from normals"] = made.shocks_from_normals(1.2 * z)
    forms = {"kernel": recursion.plain}
    if available():
        forms["kernel compiled"] = recursion.compiled
        with compiling():
            found["uniforms compiled"] = STREAM.uniforms(5, 200, -100, 400)
    for name, form in forms.items():
        out = np.empty_like(z)
        last = form(z, out, np.ones(z.shape[1]), 0.1, 0.1, 0.8)
        found[name] = np.concatenate([out, last[None]])
    return {name: digest(values) for name, values in found.items()}


def golden():
    words = [[f"{word:016x}" for word in row] for row in STREAM.words(14, 4, -2, 4).tolist()]
    return {"stream_version": STREAM_VERSION, "words": words, "digests": digests()}


if __name__ == "__main__":
    text = json.dumps(golden(), indent=1) + "\n"
    if "--write" in sys.argv:
        FILE.write_text(text)
    else:
        print(text)
