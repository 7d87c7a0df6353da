"""The gallery's values never change: digests frozen in tests/golden/specs.json, on every kind of processor."""

from __future__ import annotations

import json
import os
import subprocess
import sys

import pytest

from procgen.chance.kernel import available
from tests import long_specs
from tests.chance.golden import dispatched
from tests.golden_specs import FILE, ROOT, digests

GOLDEN = json.loads(FILE.read_text())


def test_the_gallery_draws_what_it_always_drew():
    assert digests() == GOLDEN


@pytest.mark.skipif(not available(), reason="the speed extra is not installed")
def test_compiled_recursions_draw_the_same():
    assert digests(compiled=True) == GOLDEN


@pytest.mark.skipif(not available(), reason="the speed extra is not installed")
def test_compiled_recursions_of_many_coefficients_and_in_pieces_draw_what_one_step_after_another_drew():
    assert long_specs.digests(compiled=True) == json.loads(long_specs.FILE.read_text())


def test_without_any_feature_above_the_baseline():
    """NumPy's loops for the baseline processor, in a process of their own."""
    if not dispatched():
        pytest.skip("this processor has nothing above NumPy's baseline")
    done = subprocess.run(
        [sys.executable, "-m", "tests.golden_specs"],
        cwd=ROOT,
        env={**os.environ, "NPY_DISABLE_CPU_FEATURES": " ".join(dispatched())},
        capture_output=True,
        text=True,
    )
    assert done.returncode == 0, done.stderr
    assert json.loads(done.stdout) == GOLDEN
