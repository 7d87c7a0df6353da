"""The same bits on every processor: digests frozen in tests/golden/chance.json."""

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

from procgen.chance.kernel import available
from tests.chance.golden import FILE, digests, dispatched

GOLDEN = json.loads(FILE.read_text())["digests"]
ROOT = Path(__file__).parent.parent.parent


def test_digests():
    assert digests() == {name: GOLDEN[name] for name in GOLDEN if available() or "compiled" not in name}
    assert GOLDEN["kernel compiled"] == GOLDEN["kernel"]
    assert GOLDEN["uniforms compiled"] == GOLDEN["uniforms"]


def digests_in_a_process(**environment):
    done = subprocess.run(
        [sys.executable, "-W", "error", "-m", "tests.chance.golden"],
        cwd=ROOT,
        env={**os.environ, **environment},
        capture_output=True,
        text=True,
    )
    assert done.returncode == 0, done.stderr
    return json.loads(done.stdout)["digests"]


def test_digests_without_any_dispatched_feature(tmp_path):
    """NumPy's loops for the baseline processor, and kernels compiled for a processor without extensions."""
    if not dispatched():
        pytest.skip("this processor has nothing above NumPy's baseline")
    found = digests_in_a_process(
        NPY_DISABLE_CPU_FEATURES=" ".join(dispatched()),
        NUMBA_CPU_NAME="generic",
        NUMBA_CPU_FEATURES="",
        XDG_CACHE_HOME=str(tmp_path),
    )
    assert found == digests()


def test_what_the_rules_forbid_does_differ():
    """The check can fail: NumPy's own exp, log or sin differ between its loops, on processors that have both."""
    if "X86_V4" not in dispatched() and "AVX512_SKX" not in dispatched():
        pytest.skip("needs a processor with AVX-512 for NumPy's two loops")
    code = (
        "import numpy as np, hashlib; x = np.random.default_rng(1).uniform(0.1, 20, 100_000);"
        "print(hashlib.sha256(np.exp(x).tobytes() + np.log(x).tobytes() + np.sin(x).tobytes()).hexdigest())"
    )
    outputs = {
        subprocess.run(
            [sys.executable, "-c", code], env={**os.environ, **extra}, capture_output=True, text=True, check=True
        ).stdout
        for extra in ({}, {"NPY_DISABLE_CPU_FEATURES": " ".join(dispatched())})
    }
    assert len(outputs) == 2
