"""Threads that share what is to be done on a few paths at once: series by series, or any other items.

Compiled kernels, digests and what Arrow writes hold no lock of Python's, so that threads beside each other do as much
as processes would. Which of them does what changes no bit: no item reads what another makes.
"""

from __future__ import annotations

import threading
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from contextvars import ContextVar, copy_context
from dataclasses import field
from functools import partial
from queue import SimpleQueue
from typing import Any, TypeVar

import numpy as np

from procgen.spec.records import dataclass

Item = TypeVar("Item")
Found = TypeVar("Found")


@dataclass
class Hands:
    """Threads beside the calling one, which wait for calls."""

    others: int
    calls: SimpleQueue[Callable[[], object] | None] = field(default_factory=SimpleQueue)

    def live(self) -> None:
        while (call := self.calls.get()) is not None:
            call()


_hands: ContextVar[Hands | None] = ContextVar("hands", default=None)


@contextmanager
def hands(count: int) -> Iterator[None]:
    """Have `each`, called inside by this thread, share its items among so many threads, this one among them."""
    if count < 2:
        yield
        return
    ours = Hands(count - 1)
    threads = [threading.Thread(target=ours.live, daemon=True) for _ in range(ours.others)]
    for thread in threads:
        thread.start()
    token = _hands.set(ours)
    try:
        yield
    finally:
        _hands.reset(token)
        for _ in threads:
            ours.calls.put(None)
        for thread in threads:
            thread.join()


def at_hand() -> int:
    """Threads that `each` shares items among."""
    ours = _hands.get()
    return 1 if ours is None else ours.others + 1


def each(work: Callable[[Item], Found], items: Sequence[Item]) -> list[Found]:
    """What `work` makes of each item, in their order; the first error that was met is raised when all have ended."""
    ours = _hands.get()
    if ours is None or len(items) < 2:
        return [work(item) for item in items]
    shared = _Shared(work, items)
    token = _hands.set(None)  # what is shared is not shared again, by nobody who could wait for himself
    try:
        helping = min(ours.others, len(items) - 1)
        for _ in range(helping):
            ours.calls.put(partial(copy_context().run, shared.help, np.geterr()))
        shared.do()
        for _ in range(helping):
            shared.ended.acquire()
    finally:
        _hands.reset(token)
    if shared.errors:
        raise shared.errors[0]
    return shared.found


@contextmanager
def behind() -> Iterator[Behind]:
    """What makes one call at a time beside this thread; all has ended, and what was raised is raised, at the end."""
    ours = Behind()
    try:
        yield ours
        ours.end()
    finally:
        ours.wait()


class Behind:
    """A call that one more thread makes while this one goes on; without other hands, this one makes it at once."""

    def __init__(self) -> None:
        self._last: tuple[threading.Thread, _Shared] | None = None

    def begin(self, call: Callable[[], object]) -> None:
        """Have a call made, once the one before has ended; what that raised is raised here."""
        self.end()
        if at_hand() == 1:
            call()
            return
        shared, context = _Shared(done, [call]), copy_context()
        context.run(_hands.set, None)
        self._last = threading.Thread(target=partial(context.run, shared.help, np.geterr()), daemon=True), shared
        self._last[0].start()

    def end(self) -> None:
        """Wait for the call, and raise what it raised."""
        last = self.wait()
        if last is not None and last.errors:
            raise last.errors[0]

    def wait(self) -> _Shared | None:
        last, self._last = self._last, None
        if last is not None:
            last[0].join()
        return last and last[1]


def done(call: Callable[[], Found]) -> Found:
    """What a call gives: so `each` makes calls."""
    return call()


class _Shared:
    """Items that threads take one by one."""

    def __init__(self, work: Callable[[Any], Any], items: Sequence[Any]):
        self.work, self.left = work, deque(enumerate(items))
        self.found: list[Any] = [None] * len(items)
        self.errors: list[BaseException] = []
        self.lock, self.ended = threading.Lock(), threading.Semaphore(0)

    def do(self) -> None:
        try:
            while (taken := self._next()) is not None:
                place, item = taken
                self.found[place] = self.work(item)
        except BaseException as error:
            self.errors.append(error)
            self.left.clear()

    def _next(self) -> tuple[int, Any] | None:
        with self.lock:
            return self.left.popleft() if self.left else None

    def help(self, errors: Any) -> None:
        """Do the same in another thread, with the caller's treatment of overflows."""
        try:
            with np.errstate(**errors):
                self.do()
        finally:
            self.ended.release()
