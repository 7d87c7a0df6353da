"""Waiting for what another process does: with an end, and a sentence when it does not come."""

import time
from collections.abc import Callable
from typing import TypeVar

T = TypeVar("T")


def wait_for(what: str, found: Callable[[], T], seconds: float = 60.0) -> T:
    """What `found` gives as soon as that is something; AssertionError where it still is nothing after `seconds`."""
    end = time.monotonic() + seconds
    while not (answer := found()):
        assert time.monotonic() < end, f"waited {seconds:g} seconds in vain for {what}"
        time.sleep(0.01)
    return answer
