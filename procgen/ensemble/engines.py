"""Who works on the chains of an ensemble: this process alone, or this process and worker processes beside it.

A task is data for JSON, and the work is a function named as "module:function", which takes a task and a tick and
returns a list of records: data for JSON, bytes, and what is `Packed` into these where it goes to another process.
Rendering draws a chain, validation sums one up. Workers are plain child processes that read tasks and write records as
lines of JSON, with bytes as they are before them. So a caller's script needs no
`if __name__ == "__main__"`, nothing is forked under running threads, and no pickle is read. The calling process works
too: while workers import (0.2 s) it is already at it. A command forks its workers where that is safe (`forked`), before
any thread is begun.
"""

from __future__ import annotations

import base64
import contextlib
import importlib
import json
import os
import signal
import sys
import threading
from collections import deque
from collections.abc import Callable, Iterator, Mapping, Sequence
from types import FrameType
from typing import Any, BinaryIO, Protocol, runtime_checkable

from procgen.ensemble import forked
from procgen.ensemble.errors import EnsembleError, lacks_memory, system_sentence
from procgen.ensemble.own import settled
from procgen.spec.records import dataclass

Progress = Callable[[int, int], None]  # (rows done so far, rows in all)
Records = list[dict[str, Any]]
FEWER = "use fewer workers (--workers, workers=)"
WORTH = 4_000_000  # values that repay one more process that draws
_PLACE = " bytes"  # in place of bytes, their number among those of the answer


def function(name: str) -> Callable[..., Any]:
    """The function behind "module:function"."""
    module, _, attribute = name.partition(":")
    return getattr(importlib.import_module(module), attribute)


@runtime_checkable
class Packed(Protocol):
    """What a record may hold for this process alone."""

    def packed(self) -> Any:
        """The same for another one: data for JSON and bytes."""


def as_json(answer: Mapping[str, Any]) -> str:
    """An answer that goes to another machine as text alone."""
    return json.dumps(answer, default=lambda x: x.packed() if isinstance(x, Packed) else base64.b64encode(x).decode())


def as_bytes(answer: Mapping[str, Any]) -> Iterator[bytes]:
    """An answer that goes through a pipe: a line with the sizes of its bytes, these, and a line of JSON."""
    data: list[bytes] = []

    def place(found: Any) -> Any:
        if isinstance(found, Packed):
            return found.packed()
        data.append(found)
        return {_PLACE: len(data) - 1}

    text = json.dumps(answer, default=place)
    if data:
        yield json.dumps({"sizes": [len(each) for each in data]}).encode() + b"\n"
        yield from data
    yield text.encode() + b"\n"


def messages(pipe: BinaryIO) -> Iterator[dict[str, Any]]:
    """What comes through a pipe, line by line, until it is closed."""
    data: list[bytes] = []

    def placed(found: dict[str, Any]) -> Any:
        return data[found[_PLACE]] if _PLACE in found else found

    for line in pipe:
        message = json.loads(line, object_hook=placed)
        if "sizes" in message:
            data[:] = [pipe.read(size) for size in message["sizes"]]
        else:
            yield message


def processors() -> int:
    """Processors that this process may use."""
    affinity = getattr(os, "sched_getaffinity", None)
    return len(affinity(0)) if affinity else os.cpu_count() or 1


def default_workers(values: int, worth: int = WORTH) -> int:
    """Processes worth starting for so many values, when `worth` of them repay one more."""
    return max(1, min(processors(), values // worth)) if sys.executable else 1


class Stopped(Exception):
    """Another process has failed; this one's work is of no more use."""


class Crew:
    """The state that the calling process and its workers' threads share."""

    def __init__(self, work: Work):
        self.waiting = deque(work.tasks)
        self._keep = work.keep
        self.error: BaseException | None = None
        self._progress, self._done, self._rows = work.progress, work.done, work.rows
        self._caller = threading.current_thread()
        self._lock, self._kept = threading.Lock(), threading.Lock()

    def tick(self, rows: int) -> None:
        """Count rows, in any thread; stops the work of the calling thread when another has failed."""
        with self._lock:
            self._done += rows
        if self.error is not None:
            raise Stopped
        if threading.current_thread() is self._caller:
            self.show()

    def show(self) -> None:
        if self._progress is not None:
            self._progress(self._done, self._rows)

    def next(self) -> Mapping[str, Any] | None:
        with self._lock:
            return self.waiting.popleft() if self.waiting and self.error is None else None

    def keep(self, records: Records) -> None:
        with self._kept:
            self._keep(records)

    def fail(self, error: BaseException) -> None:
        self.error = self.error or error

    @contextlib.contextmanager
    def interruptible(self) -> Iterator[None]:
        """Let Ctrl-C stop the work at the next tick; the second Ctrl-C stops it at once.

        Where Python delivers the exception itself, it can be lost: in a `__del__` it is only printed. SIGTERM is
        treated the same where the caller takes it as a Ctrl-C.
        """

        def stop(number: int, frame: FrameType | None) -> None:
            if self.error is not None:
                raise KeyboardInterrupt
            self.fail(KeyboardInterrupt())

        ours = []
        if self._caller is threading.main_thread():
            both = (signal.SIGINT, signal.SIGTERM)
            ours = [number for number in both if signal.getsignal(number) is signal.default_int_handler]
        for number in ours:
            signal.signal(number, stop)
        try:
            yield
        finally:
            for number in ours:
                signal.signal(number, signal.default_int_handler)


@dataclass(frozen=True)
class Work:
    """Tasks, and who is told of them.

    Attributes
    ----------
    tasks : data for JSON; begun in their order
    name : "module:function" that does a task
    keep : takes the records of a task, as they come, one call at a time
    ready : makes what all tasks need, where that is worth doing before workers are forked; they do without it, too
    progress : called with (rows done, rows in all); `done` of the `rows` are done at the beginning
    """

    tasks: Sequence[Mapping[str, Any]]
    name: str
    keep: Callable[[Records], None]
    progress: Progress | None = None
    done: int = 0
    rows: int = 0
    ready: Callable[[], object] = lambda: None


class Engine(Protocol):
    """Who works: `Here`, or a `Cluster`."""

    @property
    def size(self) -> int:
        """Tasks that are worked on at once."""

    def hands(self, tasks: int) -> int:
        """Threads for each of so many tasks, where there are fewer of them than could be worked on at once."""

    def check_sees(self, folder: str) -> None:
        """Raise EnsembleError when a worker does not see the folder."""

    def run(self, work: Work) -> None:
        """Do all tasks. Raises EnsembleError of the first that failed, or when it cannot go on."""


@dataclass(frozen=True)
class Here:
    """This process, and worker processes beside it, `size` in all.

    Workers hold the file descriptor `inherit` as long as they live. When one dies, the error has the `advice`;
    KeyboardInterrupt passes through after all have ended.
    """

    size: int
    inherit: int | None = None
    advice: str = FEWER

    def hands(self, tasks: int) -> int:
        return max(self.size // max(tasks, 1), 1)

    def check_sees(self, folder: str) -> None:
        """Nothing to check: it is one machine."""

    def run(self, work: Work) -> None:
        crew = Crew(work)
        with crew.interruptible():
            _work(crew, work, min(self.size, len(work.tasks)) - 1, self.inherit, self.advice)
        if crew.error is not None:
            raise crew.error


def _work(crew: Crew, work: Work, helping: int, inherit: int | None, advice: str) -> None:
    helpers: list[Helper] = []
    try:
        if forking := helping > 0 and forked.possible():
            work.ready()
            settled()
            forking = forked.possible()  # what was imported may have begun a thread
        for _ in range(helping):
            helpers.append(Helper(crew, work.name, inherit, advice, forking))
        for helper in helpers:
            helper.start()
        do = function(work.name)
        settled()
        while (task := crew.next()) is not None:
            crew.keep(do(task, crew.tick))
        while crew.error is None and any(helper.is_alive() for helper in helpers):
            for helper in helpers:
                helper.join(0.05)
            crew.show()
    except Stopped:
        pass
    except EnsembleError:
        raise
    except Exception as error:
        if lacks_memory(error):
            raise EnsembleError(f"not enough memory; give it more, or {advice}") from None
        raise
    finally:
        for helper in helpers:
            helper.end()


@contextlib.contextmanager
def opened(
    scheduler: str | None, workers: int | None, inherit: int | None = None, advice: str = FEWER
) -> Iterator[Engine]:
    """The engine that was asked for: a cluster, or this machine when there is no scheduler."""
    if scheduler is None:
        yield Here(workers or 1, inherit, advice)
        return
    from procgen.ensemble.cluster import joined

    with joined(scheduler, workers) as cluster:
        yield cluster


def in_threads(
    work: Callable[[Any, Callable[[int], None]], Records],
    tasks: Sequence[Any],
    count: int,
    progress: Progress | None,
    rows: int,
) -> None:
    """Do tasks in this thread and others beside it, `count` in all; the first error is raised when all have ended."""
    crew = Crew(Work(tasks, "", lambda records: None, progress, 0, rows))

    def each() -> None:
        try:
            while (task := crew.next()) is not None:
                work(task, crew.tick)
        except Stopped:
            pass
        except BaseException as error:
            crew.fail(error)

    with crew.interruptible():
        others = [threading.Thread(target=each) for _ in range(min(count, len(tasks)) - 1)]
        for thread in others:
            thread.start()
        each()
        for thread in others:
            thread.join()
    if crew.error is not None:
        raise crew.error


class Process(Protocol):
    """A worker process: `subprocess.Popen`, or `Forked`."""

    stdin: BinaryIO
    stdout: BinaryIO

    def wait(self) -> int: ...
    def terminate(self) -> None: ...


class Helper(threading.Thread):
    """Feeds one worker process with tasks, and takes its ticks, records and errors."""

    def __init__(self, crew: Crew, work: str, inherit: int | None, advice: str, forking: bool = False):
        super().__init__(daemon=True)
        self.crew, self.work, self.advice = crew, work, advice
        try:
            self.process: Process = forked.Forked(inherit) if forking else _program(inherit)
        except OSError as error:
            raise EnsembleError(system_sentence(error, "starting a worker process")) from None

    def run(self) -> None:
        try:
            while (task := self.crew.next()) is not None:
                self._send(task)
                self.crew.keep(self._receive())
        except Stopped:
            # `end` ends it: with its input closed, it would think us dead and clean up nothing. What it says until then
            # is read, or it would wait for ever to say more than a pipe holds.
            for _ in self.process.stdout:
                pass
            self.process.wait()
        except BaseException as error:
            self.crew.fail(error)
        finally:
            self._close()

    def _send(self, task: Mapping[str, Any]) -> None:
        try:
            self.process.stdin.write(json.dumps({"work": self.work, "task": task}).encode() + b"\n")
            self.process.stdin.flush()
        except OSError:
            pass  # it is dead, and `_receive` says so

    def _receive(self) -> Records:
        for message in messages(self.process.stdout):
            if "rows" in message:
                self.crew.tick(message["rows"])
            elif "error" in message:
                raise EnsembleError(message["error"])
            elif "memory" in message:
                raise EnsembleError(f"a worker process ran out of memory; {self.advice}")
            else:
                return message["records"]
        code = self.process.wait()
        how = f"killed by signal {-code}" if code < 0 else f"exit code {code}"
        raise EnsembleError(f"a worker process died ({how}); signal 9 is often a lack of memory: {self.advice}")

    def _close(self) -> None:
        try:
            self.process.stdin.close()
        except OSError:
            pass

    def end(self) -> None:
        """Wait for the process; one that is still drawing is ended first, and cleans up by itself."""
        if self.is_alive():
            self.process.terminate()
        if self.ident is None:  # it never had a task
            self._close()
        else:
            self.join()
        self.process.wait()
        self.process.stdout.close()


def _program(inherit: int | None) -> Any:
    """A worker process begun as a program of its own."""
    import subprocess

    return subprocess.Popen(
        [sys.executable, "-P", "-c", "from procgen.ensemble.worker import main; main()"],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        env={**os.environ, "PYTHONPATH": os.pathsep.join(path or os.getcwd() for path in sys.path)},
        pass_fds=() if inherit is None else (inherit,),
        process_group=0 if os.name == "posix" else None,  # Ctrl-C is for this process alone to act on
    )
