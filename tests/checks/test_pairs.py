"""Pairs of series in one compiled pass: the bits of the plain form, pair by pair."""

from itertools import combinations

import numpy as np
import pytest

from procgen.chance import kernel
from procgen.chance.laws import LAWS
from procgen.checks.pairs import Pairs
from procgen.checks.scores import Scores
from procgen.checks.shocks import ShockSums
from procgen.checks.together import FAR, CrossSums
from procgen.checks.untied import UntiedSums

STEPS, NAMES = 300, ("a", "b", "c", "d", "e")
KINDS = (CrossSums, lambda: UntiedSums(False), lambda: CrossSums(FAR), lambda: UntiedSums(True))


def run(paths, cuts, compile, ready):
    """Totals and sums of all pairs of five series; shocks of c begin late, one of d is missing."""
    rng = np.random.default_rng(4)
    shocks = {name: rng.standard_normal((STEPS, paths)) for name in NAMES}
    shocks["c"][:70], shocks["d"][201, paths // 2] = np.nan, np.nan
    sums = {pair: KINDS[k % 4]() for k, pair in enumerate(combinations(NAMES, 2))}
    each = {name: ShockSums(Scores(LAWS["normal"]()), STEPS) for name in NAMES}
    lanes, pairs, done = {name: one.lane(paths) for name, one in each.items()}, Pairs(sums, paths), []
    original = pairs._at_once
    pairs._at_once = lambda *args: done.append(original(*args)) or done[-1]
    with kernel.compiling(compile):
        for first, end in zip([0, *cuts], [*cuts, STEPS], strict=True):
            for name in NAMES:
                each[name].absorb(shocks[name][first:end], first, lanes[name])
            pairs.absorb(lanes, end - first, dict.fromkeys(sums, ready - first))
    for pair, one in sums.items():
        one.finish(pairs.totals[pair])
    return {(pair, key): values for pair, one in sums.items() for key, values in one.sums.items()}, done


@pytest.mark.skipif(not kernel.available(), reason="numba is not installed")
@pytest.mark.parametrize("paths", [48, 100, 256])
@pytest.mark.parametrize("cuts", [[], [64, 128, 256], [128]], ids=str)
@pytest.mark.parametrize("ready", [-5, 0, 90])
def test_one_pass_has_the_bits_of_pair_by_pair(paths, cuts, ready):
    plain, none = run(paths, cuts, False, ready)
    compiled, done = run(paths, cuts, True, ready)
    assert not none
    assert [*plain] == [*compiled]
    for key, values in plain.items():
        np.testing.assert_array_equal(compiled[key], values, err_msg=str(key), strict=True)
    at_once = [len(each) for each in done]
    assert max(at_once) == {0: 1, 1: 4, 3: 6}[len(cuts)]  # the usual pairs of ten, without those that have a gap
