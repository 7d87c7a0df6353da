"""What all tests need of the process that they run in."""

import signal
import threading


def pytest_configure():
    """A suite begun in the background ignores Ctrl-C, and so would every process that a test begins and strikes."""
    if threading.current_thread() is threading.main_thread():
        signal.signal(signal.SIGINT, signal.default_int_handler)
