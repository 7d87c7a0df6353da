"""What all tests need of the process that they run in."""

import signal
import threading

from hypothesis import HealthCheck, settings

# How long a busy machine takes to draw examples says nothing of what is tested.
settings.register_profile("suite", suppress_health_check=[HealthCheck.too_slow])
settings.load_profile("suite")


def pytest_configure():
    """A suite begun in the background ignores Ctrl-C, and so would every process that a test begins and strikes."""
    if threading.current_thread() is threading.main_thread():
        signal.signal(signal.SIGINT, signal.default_int_handler)
