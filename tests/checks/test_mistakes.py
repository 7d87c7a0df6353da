"""Mistakes that simulators make are found and named, in a plain CSV and in a Parquet file that pandas wrote.

The simulator is plain NumPy, and the t law's own variance is df / (df − 2) = 5/3 (any textbook; SciPy's t.var(5)).
Seeds are fixed. The right simulator is called departing with probability 0.001 under another seed; each mistake moves
its statistic by more than 15 standard errors at this size, and would be missed with probability below 1e-12.
"""

import pytest

from tests.studies.mistakes import FORMATS, MISTAKES, judged


@pytest.mark.parametrize("write", FORMATS, ids=lambda write: write.__name__)
@pytest.mark.parametrize("mistake", MISTAKES)
def test_a_mistake_is_found_and_named(mistake, write, tmp_path):
    verdict = judged(mistake, write, 3, tmp_path)
    if mistake == "none":
        assert verdict.agrees is True, verdict.headline
        return
    assert verdict.agrees is False
    assert verdict.headline[0].startswith(MISTAKES[mistake]), verdict.headline
    assert all(line.startswith(MISTAKES[mistake].split(":")[0]) for line in verdict.headline)  # no other series
