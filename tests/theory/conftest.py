"""An empty axis for each test."""

import pytest

from procgen.theory import Axis


@pytest.fixture
def axis() -> Axis:
    return Axis(horizon=2000)
