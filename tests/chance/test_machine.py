"""Machine code that is kept: the bits of the plain form, whatever is in the cache, and nothing beside it."""

import os
import shutil
import subprocess
import sys
from hashlib import sha256
from pathlib import Path

import numpy as np
import pytest

import procgen
from procgen.chance.kernel import compiling, machine
from procgen.chance.machine import Machine
from procgen.chance.normal import normal_quantile
from procgen.chance.streams import Stream

pytest.importorskip("numba", reason="the extra `speed` compiles")

FAR = 2.0 ** -np.arange(1, 1020, 0.05)
U = np.concatenate([FAR, 1 - FAR[:1000], np.random.default_rng(8).random(50_000), 0.5 + np.array([0.425, -0.425])])
U = U[(U > 0) & (U < 1)]


def test_the_quantile_compiled_has_the_bits_of_the_plain_one():
    plain = normal_quantile(U)
    with compiling():
        compiled, inside = normal_quantile(U), U.copy()
        normal_quantile(inside, out=inside)
        with np.errstate(all="ignore"):
            odd = normal_quantile(np.array([0.0, 0.3, 1.0]))
    assert np.array_equal(plain.view(np.int64), compiled.view(np.int64))
    assert np.array_equal(plain.view(np.int64), inside.view(np.int64))
    with np.errstate(all="ignore"):
        assert np.array_equal(odd, normal_quantile(np.array([0.0, 0.3, 1.0])), equal_nan=True)


RECTANGLES = [(0, 64, -3, 9), (5, 1, 7, 20), (30, 37, -20, 21), (3, 130, -70, 150), (8, 8, -70, 150), (2, 1, -9, 130)]


@pytest.mark.parametrize(("path", "paths", "step", "steps"), RECTANGLES)
@pytest.mark.parametrize("form", ["uniforms", "uniforms_abreast"])
def test_uniforms_compiled_are_those_of_numpy_in_any_rectangle(path, paths, step, steps, form, monkeypatch):
    monkeypatch.setattr("procgen.chance.streams.uniforms", lambda: machine("compiled", form))
    stream = Stream(3, "x", "noise", "innovation")
    for draw in (stream.uniforms, stream.words):
        plain = draw(path, paths, step, steps)
        with compiling():
            assert np.array_equal(draw(path, paths, step, steps), plain)
            wider = np.zeros((steps, paths + 2), plain.dtype)
            draw(path, paths, step, steps, out=wider[:, 1:-1])
        assert np.array_equal(wider[:, 1:-1], plain) and not wider[:, [0, -1]].any()


def halves(x, k, out):
    for i in range(x.shape[0]):
        out[i] = k[0] * x[i] + k[1]


def with_memory(x, k, out):
    work = np.empty(x.shape[0])
    for i in range(x.shape[0]):
        work[i] = k[0] * x[i]
    for i in range(x.shape[0]):
        out[i] = work[i] + k[1]


@pytest.mark.parametrize(("function", "kept"), [(halves, True), (with_memory, False)])
def test_what_needs_numba_when_it_runs_is_left_to_it(tmp_path, function, kept):
    x, out = np.arange(5.0), np.empty(5)
    for _ in range(2):  # made, then loaded
        made = Machine("made", "text", lambda: function, lambda: tmp_path)
        made(x, (0.5, 1.0), out)
        assert np.array_equal(out, 0.5 * x + 1)
        assert (next(iter(made._loaded.values())) is not None) == kept
    made(np.arange(10.0)[::2], (2.0, 0.0), out)  # not contiguous
    assert np.array_equal(out, 4 * x)


def seen(x, k, out):
    out[0] = x.size
    out[1] = x.ndim
    out[2] = k
    for i in range(x.shape[0]):
        out[3] += x.flat[i]


def test_arrays_are_told_apart_at_each_call(tmp_path):
    """By machine code or by numba: whatever the call before was for."""
    made = Machine("made", "text", lambda: seen, lambda: tmp_path)
    frozen = np.arange(6.0)
    frozen.flags.writeable = False
    odd = np.frombuffer(b"\0" * 3 + np.arange(2.0).tobytes(), np.float64, offset=3)  # not aligned
    own = np.arange(7.0).view(np.dtype("f8", metadata={"a": 1}))  # a data type that is an object of its own
    arrays = [np.arange(3.0), np.arange(4), np.ones((2, 3)), np.arange(5, dtype=np.uint64), frozen, odd, own]
    for x in [*arrays, *(row[::2] for row in arrays[:2]), *arrays]:
        for k in (1, 2.5, np.int64(3), np.float64(4.5), -(2**60)):
            out = np.zeros(4)
            made(x, k, out)
            assert out.tolist() == [x.size, x.ndim, k, x.reshape(-1)[: x.shape[0]].sum()]


def test_a_damaged_file_is_made_again(tmp_path):
    x, out = np.arange(5.0), np.empty(5)
    Machine("made", "text", lambda: halves, lambda: tmp_path)(x, (0.5, 1.0), out)
    (file,) = tmp_path.iterdir()
    whole = file.read_bytes()
    for damaged in (b"", whole[:-9], whole[:40] + b"\0" + whole[41:]):
        file.write_bytes(damaged)
        made = Machine("made", "text", lambda: halves, lambda: tmp_path)
        assert made.is_kept(x, (0.5, 1.0), out)
        made(x, (0.5, 1.0), out)
        assert np.array_equal(out, 0.5 * x + 1)
        data = file.read_bytes()
        assert sha256(data[32:]).digest() == data[:32] and len(data) > 100


CODE = """
import sys
import procgen as pg
from procgen.chance.kernel import compiling
with compiling():
    series = {"x": [{"integrate": {"of": [{"constant": 3}]}}]}
    pg.render({"procgen": 1, "seed": 1, "paths": 300, "time": {"steps": 3}, "series": series})
print(pg.__file__)
"""


def test_an_installation_is_never_written_to(tmp_path):
    """A copy of the package compiles: all files are in the user's cache, none is new beside the sources."""
    install = tmp_path / "site"
    shutil.copytree(Path(procgen.__file__).parent, install / "procgen", ignore=shutil.ignore_patterns("__pycache__"))
    before = {path: path.stat().st_mtime_ns for path in install.rglob("*")}
    for path in install.rglob("*"):
        path.chmod(0o555 if path.is_dir() else 0o444)
    given = {"PYTHONPATH": str(install), "XDG_CACHE_HOME": str(tmp_path / "cache"), "PYTHONDONTWRITEBYTECODE": "1"}
    command = [sys.executable, "-c", CODE]
    done = subprocess.run(command, env={**os.environ, **given}, cwd=tmp_path, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    assert done.stdout.startswith(str(install))
    for path in install.rglob("*"):
        path.chmod(0o755)
    assert {path: path.stat().st_mtime_ns for path in install.rglob("*")} == before
    assert list((tmp_path / "cache" / "procgen" / "kernels").glob("*.o"))
