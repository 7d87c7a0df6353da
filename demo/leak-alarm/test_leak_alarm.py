"""The leak alarm, on a station whose behaviour is written down in station.yaml."""

import numpy as np

from procgen.testing import ensemble_fixture

station = ensemble_fixture("station.yaml", expect="de968bb45f63507fc3aada57940e48fc246d5866e3138298dde3567196d5b69f")
LIMIT = 37.5  # l/s, the mean of the hours from 2 to 5 in the night


def alarms(flow):
    """Whether three nights in a row are above the limit, by path; flow is (paths, hours)."""
    high = flow.reshape(len(flow), -1, 24)[:, :, 2:5].mean(axis=2) > LIMIT
    return (high[:, :-2] & high[:, 1:-1] & high[:, 2:]).any(axis=1)


def test_it_is_quiet_without_a_leak(station):
    assert alarms(station["flow"]).mean() < 0.02


def test_it_finds_a_leak_within_a_week(station):
    leak = np.where(np.arange(336) >= 168, 6.0, 0.0)
    assert alarms(station["flow"] + leak).mean() > 0.95
