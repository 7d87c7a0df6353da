"""A process that is ours: of a command, or a worker. A caller's process is left as it is.

It ends without taking apart what it has made (`leave`). Python looks for garbage in cycles each time some hundred
objects more have been made. Imports make 100,000 that stay, and values are no such objects; to look at all of them
again and again took a twentieth of the processor time.

SciPy's special functions come without what they never use (`load_functions`), which is a seventh of a small validation.
"""

from __future__ import annotations

import atexit
import gc
import os
import sys
import threading

STARTING = 250_000  # objects: more than imports and a plan make
WORKING = 20_000  # objects since `settled`, which are few and soon looked through

_own = _settled = False


def claim() -> None:
    """Say that this process is ours."""
    global _own
    _own = True
    gc.set_threshold(STARTING, *gc.get_threshold()[1:])


def claimed() -> bool:
    """Whether this process is ours."""
    return _own


def settled() -> None:
    """Of a process of ours, once: what has been made until now stays, and is not looked at again."""
    global _settled
    if _own and not _settled:
        _settled = True
        gc.freeze()
        gc.set_threshold(WORKING, *gc.get_threshold()[1:])


def load_functions() -> None:
    """Load SciPy's special functions; in a process of ours without what NumPy has of tests, chance and Fortran.

    SciPy copies all that NumPy names, and NumPy loads what is named when it is asked for. What has a value is not
    loaded. The names are free again after that, for whoever does want what they stand for.
    """
    import numpy as np

    spared = [name for name in ("f2py", "random", "testing") if _own and name not in vars(np)]
    for name in spared:
        setattr(np, name, None)
    import scipy.special  # noqa: F401

    for name in spared:
        if getattr(np, name) is None:
            delattr(np, name)


def leave(code: int) -> None:
    """End this process of ours: the system takes back all at once what Python would let go of one by one.

    That takes 20 ms, a tenth of a small command. It returns where that is Python's to do: beside other threads, or
    where something that was said cannot be written.
    """
    if not _own or threading.active_count() > 1:
        return
    atexit._run_exitfuncs()
    try:
        sys.stdout.flush()
        sys.stderr.flush()
    except (OSError, ValueError):
        return
    os._exit(code)
