"""Kernels: one text, two forms, the same bits."""

import os
import subprocess
import sys
import threading

import numpy as np
import pytest

from procgen.chance import kernel as room
from procgen.chance.kernel import available, compiling, is_compiling, kernel

pytest.importorskip("numba", reason="the extra `speed` compiles kernels")

RNG = np.random.default_rng(3)


@kernel
def garch(z, out, h, omega, alpha, beta):
    """Lane rows, scalars, one returned row."""
    for t in range(z.shape[0]):
        e = np.sqrt(h) * z[t]
        out[t] = e
        h = omega + alpha * (e * e) + beta * h
    return h


@kernel
def filtered(phi, x, a):
    """Coefficients in an array or a tuple, a past in the first rows, nothing returned."""
    p = len(phi)
    for t in range(a.shape[0]):
        v = a[t]
        for i in range(p):
            v = v + phi[i] * x[t + p - 1 - i]
        x[t + p] = v


@kernel
def threshold(a, x, low, high):
    """Comparisons, two returned rows, one of them never changed."""
    for t in range(a.shape[0]):
        x = np.where(x > 0.0, low * x, high * x) + a[t]
        x = np.maximum(np.minimum(np.abs(x), 9.0), 0.25) + np.floor(x) / 3.0
    return x, low


@kernel
def left_over(a, b, product, out):
    """What a·b is more than its rounded value: nothing, unless product and difference are one operation."""
    for t in range(a.shape[0]):
        out[t] = a[t] * b[t] - product[t]


SHAPES = [(200, 1), (50, 7), (30, 300), (0, 4), (40, 0)]


def both(function, make):
    """Arguments and results of the plain and the compiled form; those of all paths abreast are as these."""
    found = []
    for form in (function.plain, function.compiled, function.abreast):
        arguments = make()
        result = form(*arguments)
        rows = result if isinstance(result, tuple) else () if result is None else (result,)
        found.append([value for value in (*arguments, *rows) if isinstance(value, np.ndarray)])
    for one, other in zip(*found[1:], strict=True):
        assert np.array_equal(one, np.broadcast_to(other, one.shape))
    return found[:2]


def check_same(plain, compiled, lanes):
    assert len(plain) == len(compiled)
    for one, other in zip(plain, compiled, strict=True):
        assert np.array_equal(np.broadcast_to(one, other.shape), other)
        assert np.isfinite(other).all()


@pytest.mark.parametrize(("steps", "paths"), SHAPES)
def test_rows_and_scalars(steps, paths):
    z = RNG.standard_normal((steps, paths))
    check_same(*both(garch, lambda: (z, np.empty_like(z), np.ones(paths), 0.1, 0.1, 0.85)), paths)


@pytest.mark.parametrize(("steps", "paths"), SHAPES)
def test_parameters_that_vary_by_path(steps, paths):
    z = RNG.standard_normal((steps, paths))
    alpha = RNG.uniform(0, 0.3, paths)
    check_same(*both(garch, lambda: (z, np.empty_like(z), np.ones(paths), alpha, alpha, 0.6)), paths)


@pytest.mark.parametrize("coefficients", [np.array([0.6, -0.2, 0.1]), (0.6, -0.2, 0.1), (0.5,)], ids=str)
@pytest.mark.parametrize(("steps", "paths"), [(200, 1), (50, 3)])  # three: as many paths as coefficients
def test_coefficients(coefficients, steps, paths):
    a = RNG.standard_normal((steps, paths))
    past = RNG.standard_normal((len(coefficients), paths))
    check_same(*both(filtered, lambda: (coefficients, np.concatenate([past, np.zeros_like(a)]), a)), paths)


def test_coefficients_that_vary_by_path():
    a = RNG.standard_normal((60, 5))
    phi = (RNG.uniform(-0.5, 0.5, 5), 0.2)
    check_same(*both(filtered, lambda: (phi, np.zeros((62, 5)), a)), 5)


def test_one_column_stands_for_every_path():
    season = RNG.standard_normal((60, 1))
    check_same(*both(filtered, lambda: (np.array([0.9]), np.ones((61, 5)), season)), 5)


def test_several_returned_rows():
    a = RNG.standard_normal((100, 6))
    check_same(*both(threshold, lambda: (a, np.zeros(6), np.full(6, 0.9), -0.4)), 6)


def test_views_and_transposed_tiles():
    z = RNG.standard_normal((40, 90)).T[::2, 3:20]
    check_same(*both(garch, lambda: (z, np.empty_like(z), np.ones(17), 0.1, 0.1, 0.85)), 17)


def test_compiling_is_asked_for_and_ends(monkeypatch):
    calls = []
    monkeypatch.setattr(room.Kernel, "compiled", lambda self, *args: calls.append(self))
    z = np.zeros((3, 2))
    arguments = (z, z.copy(), np.ones(2), 0.1, 0.1, 0.8)
    garch(*arguments)
    assert not calls and not is_compiling()
    with compiling():
        garch(*arguments)
        assert is_compiling()
        with compiling(False):
            garch(*arguments)
        other = threading.Thread(target=garch, args=arguments)
        other.start()
        other.join()
    garch(*arguments)
    assert calls == [garch]


def test_wide_tiles_go_abreast(monkeypatch):
    """Many paths are taken together at each step; the values are the same anyway."""
    calls = []
    monkeypatch.setattr(room.Kernel, "compiled", None)
    monkeypatch.setattr(room.Kernel, "plain", None, raising=False)
    monkeypatch.setattr(room.Kernel, "abreast", lambda self, *args: calls.append(self))
    z = np.zeros((3, 2000))
    with compiling():
        garch(z, z.copy(), np.ones(2000), 0.1, 0.1, 0.8)
    assert calls == [garch]


def abreast_forms(function):
    return [form for kinds, form in function._drivers.items() if kinds[0] == "abreast"]


def test_many_coefficients_stay_with_numpy():
    """Loops that cannot be unrolled are slower abreast than NumPy's rows."""
    own = kernel(filtered.plain)
    a = RNG.standard_normal((40, 7))
    for phi, made in ((np.full(8, 0.1), True), (np.full(9, 0.1), False)):
        check_same(*both(own, lambda phi=phi: (phi, np.zeros((40 + len(phi), 7)), a)), 7)
        assert (abreast_forms(own)[-1] is not None) is made


@kernel
def led(z, weight, out):
    """Numbers by step, the same for all paths."""
    for t in range(z.shape[0]):
        out[t] = weight[t] * z[t]


def test_numbers_by_step_are_no_coefficients():
    """Tiles of any length are drawn by the same compiled form."""
    for steps in (3, 20):
        z = RNG.standard_normal((steps, 5))
        check_same(*both(led, lambda z=z: (z, z[:, 0].copy(), np.empty_like(z))), 5)
    (form,) = abreast_forms(led)
    assert form is not None


@kernel
def nested(z, weights, m, s, out, state):
    """A row and a tile of states that move on, loops within the loop, a choice, a whole number."""
    for t in range(z.shape[0]):
        after = 0.0 * s
        for j in range(m):
            if weights[j] != 0.0:
                after = after + weights[j] * (z[t] >= state[j])
            state[j] = np.where(z[t] > 0.0, state[j] / 2.0, state[j] + z[t])
        s = after - s / 3.0
        out[t] = s
    return s


@pytest.mark.parametrize(("steps", "paths"), SHAPES)
def test_loops_within_the_loop(steps, paths):
    z = RNG.standard_normal((steps, paths))
    weights = np.array([0.3, 0.0, 1.7])
    check_same(*both(nested, lambda: (z, weights, 3, np.ones(paths), np.empty_like(z), np.zeros((3, paths)))), paths)
    assert None not in abreast_forms(nested)


def test_without_numba_the_error_says_what_to_do(monkeypatch):
    monkeypatch.setattr(room, "available", lambda: False)
    with pytest.raises(ModuleNotFoundError, match="install the extra `speed`, or go on without"), compiling():
        pass
    with compiling(False):
        assert not is_compiling()
    assert available()


def test_arrays_of_three_axes_are_refused():
    with pytest.raises(TypeError, match="at most two axes in a kernel, got 3 for 'z'"):
        garch.compiled(np.zeros((2, 2, 2)), np.zeros((2, 2)), 1.0, 0.1, 0.1, 0.8)


CODE = """
import sys
import numpy as np
from procgen.chance import kernel
from tests.chance.golden import recursion
z = np.ones((5, 1))
recursion.compiled(z, z.copy(), np.ones(1), 0.1, 0.1, 0.8)
print(kernel.cache_folder(), "numba" in sys.modules)
"""


def run_code(**environment):
    done = subprocess.run(
        [sys.executable, "-c", CODE], env={**os.environ, **environment}, capture_output=True, text=True
    )
    assert done.returncode == 0, done.stderr
    return done.stdout.split()


def test_compiled_once_for_all_processes_in_the_users_cache(tmp_path):
    folder, compiled = run_code(XDG_CACHE_HOME=str(tmp_path))
    assert folder.startswith(str(tmp_path)) and compiled == "True"
    folder, compiled = run_code(XDG_CACHE_HOME=str(tmp_path))
    assert compiled == "False"  # machine code is loaded without numba


def test_a_cache_that_cannot_be_made_is_replaced(tmp_path):
    (tmp_path / "file").write_text("in the way")
    folder, _ = run_code(XDG_CACHE_HOME=str(tmp_path / "file"))
    assert "procgen-kernels-" in folder


def test_no_product_and_sum_are_fused():
    """Processors have one operation for a·b + c, rounded once, and compilers like to use it; other bits would come."""
    import numba
    from llvmlite import binding

    a, b = RNG.standard_normal((2, 64, 40))
    for form in (left_over.plain, left_over.compiled, left_over.abreast):
        out = np.full(a.shape, np.nan)
        form(a, b, a * b, out)
        assert not out.any()
    if binding.get_host_cpu_features().get("fma") or binding.get_default_triple().startswith("aarch64"):
        fused = numba.njit(fastmath={"contract"})(left_over.plain)  # the test can fail
        fused(a, b, a * b, out)
        assert np.count_nonzero(out) > out.size // 2
