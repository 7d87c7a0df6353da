"""Worker processes forked from a command: what it has imported and planned is theirs too, and costs nothing again.

Only a process of ours is forked, on Linux, and only while it has a single thread: whatever another thread was about
to do, such as holding a lock, would stay undone in the copy for ever. Everywhere else workers are begun as programs.
"""

from __future__ import annotations

import contextlib
import gc
import os
import signal
import sys
import threading
import traceback
from collections.abc import Iterator
from typing import BinaryIO, NoReturn

from procgen.ensemble import own

STOPS = (signal.SIGINT, signal.SIGTERM)


def possible() -> bool:
    """Whether this process may be forked: it is ours, has one thread, of libraries too, and its standard streams."""
    if not own.claimed() or not sys.platform.startswith("linux"):
        return False
    if None in (sys.__stdin__, sys.__stdout__, sys.__stderr__):  # else a pipe could become one of them
        return False
    try:
        return len(os.listdir("/proc/self/task")) == 1
    except OSError:
        return False


class Forked:
    """A worker forked from this process, with as much of the face of `subprocess.Popen` as is needed.

    It keeps the file descriptor `inherit`, and no other but its standard streams. OSError when it cannot be begun.
    """

    def __init__(self, inherit: int | None):
        with contextlib.ExitStack() as opened:
            tasks, to_worker = given = _pipe(opened)
            from_worker, answers = taken = _pipe(opened)
            with contextlib.suppress(OSError):
                sys.__stdout__.flush()  # type: ignore[union-attr]
            with _held():
                self.pid = os.fork()
                if self.pid == 0:
                    _live(tasks, answers, {*given, *taken}, inherit)
                with contextlib.suppress(OSError):  # both do it, so that it is done whoever comes first
                    os.setpgid(self.pid, self.pid)
            opened.pop_all()
        os.close(tasks)
        os.close(answers)
        self.stdin: BinaryIO = open(to_worker, "wb")
        self.stdout: BinaryIO = open(from_worker, "rb")
        self.returncode: int | None = None
        self._reaping = threading.Lock()

    def wait(self) -> int:
        """The exit code, or minus the number of the signal that killed it, when it has ended."""
        with contextlib.suppress(ChildProcessError):
            os.waitid(os.P_PID, self.pid, os.WEXITED | os.WNOWAIT)  # without the lock, so that it can be terminated
        with self._reaping:
            if self.returncode is None:
                self.returncode = os.waitstatus_to_exitcode(os.waitpid(self.pid, 0)[1])
        return self.returncode

    def terminate(self) -> None:
        """Ask it to end; nothing when it has been waited for, since its number may be another's by now."""
        with self._reaping:
            if self.returncode is None:
                os.kill(self.pid, signal.SIGTERM)


def _pipe(opened: contextlib.ExitStack) -> tuple[int, int]:
    ends = os.pipe()
    for end in ends:
        opened.callback(os.close, end)
    return ends


@contextlib.contextmanager
def _held() -> Iterator[None]:
    """Hold back what asks to stop, so that it does not meet a worker that is not one yet."""
    before = signal.pthread_sigmask(signal.SIG_BLOCK, STOPS)
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)


def _live(tasks: int, answers: int, pipes: set[int], inherit: int | None) -> NoReturn:
    """Be the worker until its end, which no frame and no buffer of the process it was forked from ever sees."""
    code = 1
    try:
        os.setpgid(0, 0)  # Ctrl-C is for the command alone to act on
        signal.signal(signal.SIGINT, signal.SIG_IGN)  # drops one that came before
        signal.signal(signal.SIGINT, signal.default_int_handler)
        os.dup2(tasks, 0)
        os.dup2(answers, 1)
        for end in pipes:
            os.close(end)
        _close_all_but(inherit)
        sys.stderr = sys.__stderr__  # a progress bar may have put its own there
        from procgen.ensemble.worker import Worker

        worker = Worker(open(1, "wb", closefd=False))
        signal.signal(signal.SIGTERM, worker.stop)
        signal.pthread_sigmask(signal.SIG_UNBLOCK, STOPS)
        worker.work()
        code = 0
    except SystemExit as ended:
        code = ended.code if isinstance(ended.code, int) else 1
    except BaseException:
        traceback.print_exc()
    finally:
        os._exit(code)


def _close_all_but(kept: int | None) -> None:
    """Close all file descriptors beyond the standard streams: an end of another's pipe, held here, would hide its end.

    What thinks them open never closes them again: it is never collected, and no frame that holds it ever ends.
    """
    gc.freeze()
    for name in os.listdir("/proc/self/fd"):
        if int(name) > 2 and int(name) != kept:
            with contextlib.suppress(OSError):  # such as that of this list
                os.close(int(name))
