"""Who works on the chains of an ensemble: the workers of a Dask cluster, one that is there or one on this machine.

A task, the function that works on it and its records are those of `engines`: data for JSON and a name. So a worker
needs this package and sees the same files, and nothing of ours is pickled. A task may be begun more than once: when its
worker or the scheduler dies, and when all others are done and it still is not. Whoever ends first is heard; the files
are the same.
"""

from __future__ import annotations

import contextlib
import importlib
import json
import logging
import os
import queue
import secrets
import threading
import time
from collections import deque
from collections.abc import Callable, Iterator, Mapping
from dataclasses import field
from typing import Any

from procgen.chance.streams import STREAM_VERSION
from procgen.ensemble.engines import Work, as_json, function
from procgen.ensemble.errors import EnsembleError
from procgen.spec.records import dataclass

LOCAL = "local"
TRIES = 8  # times that a task is begun again when workers die under it
PATIENCE = 120.0  # seconds for a scheduler that does not answer to come back
ANSWER = 10.0  # seconds for a scheduler to answer at first
AHEAD = 2  # tasks in flight for each thread of the cluster: enough to keep it busy, few for the scheduler to hold
SLOW = 3.0  # times the median that the last tasks may take before they are begun a second time
REPORT = 2.0  # seconds between two reports of rows from one task: a thousand workers then send 500 a second
TURN = 0.5  # seconds after which the progress is shown again
MUST_AGREE = ("procgen", "numpy", "pyarrow", "pandas", "scipy")


@contextlib.contextmanager
def joined(scheduler: str, workers: int | None = None) -> Iterator[Cluster]:
    """The cluster behind a scheduler's address, or one of `workers` processes on this machine for "local".

    Raises EnsembleError where Dask is not installed, nobody answers, or a worker has other versions.
    """
    try:
        distributed = importlib.import_module("distributed")
    except ImportError:
        raise EnsembleError(
            "working on a cluster needs dask and distributed, which are not installed: install the extra `cluster`, "
            "or leave --scheduler (scheduler=) out to draw on this machine"
        ) from None
    with _quiet(), contextlib.ExitStack() as stack:
        address = scheduler
        if scheduler == LOCAL:
            address = stack.enter_context(_on_this_machine(workers)).scheduler_address
        cluster = Cluster(distributed, address)
        stack.callback(cluster.close)
        cluster.check_versions()
        yield cluster


@contextlib.contextmanager
def _quiet() -> Iterator[None]:
    """Keep the library's log off the terminal: what matters of it becomes a sentence of ours."""
    log = logging.getLogger("distributed")
    level = log.level
    log.setLevel(logging.CRITICAL + 1)
    try:
        yield
    finally:
        log.setLevel(level)


def _on_this_machine(workers: int | None) -> Any:
    """Plain child processes, so that a caller's script needs no `if __name__ == "__main__"`."""
    from distributed.deploy.subprocess import SubprocessCluster

    from procgen.ensemble.engines import processors

    return SubprocessCluster(
        host="127.0.0.1",
        scheduler_kwargs={"dashboard": False},
        worker_kwargs={"dashboard": False},
        n_workers=workers or processors(),
        threads_per_worker=1,
        silence_logs=logging.CRITICAL + 1,
    )


@dataclass
class Flight:
    """A task on its way: how often it was begun, the copies that may still answer, and the rows it has reported."""

    number: int
    task: Mapping[str, Any]
    tries: int = 0
    begun: float = 0.0
    rows: int = 0
    copies: dict[str, Any] = field(default_factory=dict)


class Cluster:
    """Runs tasks on a cluster; outlives workers and, for a while, a scheduler that is started anew."""

    def __init__(self, distributed: Any, address: str):
        self.distributed, self.address = distributed, address
        self.client = self._connect(ANSWER)

    def close(self) -> None:
        with contextlib.suppress(Exception):  # a cluster that is gone cannot be left in order
            self.client.close(timeout=2)

    @property
    def size(self) -> int:
        """Threads of the cluster: tasks that it can work on at once."""
        return max(sum(self.client.ncores().values()), 1)

    def hands(self, tasks: int) -> int:
        """One: the other threads of a worker are for other tasks."""
        return 1

    def check_versions(self) -> None:
        """Refuse workers that would draw or write other values than this process."""
        ours = versions()
        for worker, theirs in self._ask(versions).items():
            for name, version in ours.items():
                if theirs.get(name) != version:
                    raise EnsembleError(
                        f"worker {worker} has {name} {theirs.get(name)}, and this process has {version}; "
                        "install the same on both"
                    )

    def check_sees(self, folder: str) -> None:
        """Refuse workers that do not see the folder that is written: they have another disk."""
        for worker, seen in self._ask(_sees, folder).items():
            if not seen:
                raise EnsembleError(
                    f"worker {worker} does not see {folder}; choose a folder that all machines of the cluster share"
                )

    def _ask(self, question: Callable[..., Any], *args: Any) -> dict[str, Any]:
        try:
            return self.client.run(question, *args)
        except (ImportError, AttributeError) as error:
            raise EnsembleError(f"a worker cannot answer ({error}); install this procgen on every machine") from None
        except Exception as error:
            raise EnsembleError(f"the workers at {self.address} cannot be asked ({error})") from None

    def _connect(self, timeout: float) -> Any:
        try:
            return self.distributed.Client(self.address, timeout=timeout, set_as_default=False)
        except (OSError, ValueError, TimeoutError) as error:
            raise EnsembleError(
                f"no scheduler answers at {self.address} ({type(error).__name__}); start one with `dask scheduler`, "
                "and give its address, such as tcp://10.0.0.5:8786, or `local` for one on this machine"
            ) from None

    def run(self, work: Work) -> None:
        """Do all tasks.

        Raises EnsembleError of the first that failed, of one under which workers died TRIES times, and when the
        scheduler stays away.
        """
        job = _Run(self, work)
        try:
            job.through()
        finally:
            job.end()

    def again(self) -> None:
        """A new connection, when the scheduler was started anew; EnsembleError when it stays away."""
        self.close()
        give_up = time.monotonic() + PATIENCE
        while True:
            try:
                self.client = self._connect(ANSWER)
                return
            except EnsembleError:
                if time.monotonic() > give_up:
                    raise EnsembleError(
                        f"the scheduler at {self.address} has not answered for {PATIENCE:.0f} s; start it again, "
                        "then go on with --resume (resume=True)"
                    ) from None


class _Run:
    """One call of `Cluster.run`."""

    def __init__(self, cluster: Cluster, work: Work):
        self.cluster, self.work, self.done = cluster, work, work.done
        self.topic = f"procgen-{secrets.token_hex(8)}"
        self.waiting = deque(Flight(number, task) for number, task in enumerate(work.tasks))
        self.flying: dict[int, Flight] = {}
        self.ended: queue.SimpleQueue[tuple[int, str]] = queue.SimpleQueue()  # number of a task, key of a copy
        self.took: list[float] = []
        self.listen()

    def listen(self) -> None:
        self.cluster.client.subscribe_topic(self.topic, self._heard)

    def _heard(self, event: tuple[float, Mapping[str, int]]) -> None:
        message = event[1]
        flight = self.flying.get(message["number"])
        if flight is not None:
            flight.rows = max(flight.rows, message["rows"])

    def through(self) -> None:
        room, looked = 0, 0.0
        while self.waiting or self.flying:
            if self.cluster.client.status != "running":
                self._scheduler_is_gone()
            if time.monotonic() > looked + 1.0:  # workers come and go
                room, looked = self._room(), time.monotonic()
            while self.waiting and len(self.flying) < room:
                self._begin(self.waiting.popleft())
            if not self.waiting:
                self._hurry(room)
            with contextlib.suppress(queue.Empty):
                self._land(*self.ended.get(timeout=TURN))
            if self.work.progress is not None:
                self.work.progress(self.done + sum(flight.rows for flight in self.flying.values()), self.work.rows)

    def _room(self) -> int:
        try:
            return AHEAD * self.cluster.size
        except Exception:  # the scheduler is gone, which the next turn finds
            return 0

    def _begin(self, flight: Flight) -> None:
        key = f"{self.topic}-{flight.number}-{secrets.token_hex(4)}"
        text = json.dumps({"work": self.work.name, "task": flight.task, "topic": self.topic, "number": flight.number})
        self.flying[flight.number] = flight
        flight.begun = time.monotonic()
        future = self.cluster.client.submit(perform, text, key=key, pure=False, priority=-flight.number)
        flight.copies[key] = future
        future.add_done_callback(lambda _: self.ended.put((flight.number, key)))

    def _land(self, number: int, key: str) -> None:
        """Take the answer of a copy, or begin the task again when there is none."""
        flight = self.flying.get(number)
        if flight is None or key not in flight.copies:
            return  # another copy was quicker
        future = flight.copies.pop(key)
        try:
            answer = json.loads(future.result(timeout=ANSWER))
        except KeyboardInterrupt:
            raise
        except BaseException as error:  # a lost worker shows in many ways, CancelledError among them
            self._retry(flight, error)
            return
        if "error" in answer:
            raise EnsembleError(answer["error"])
        del self.flying[number]
        for copy in flight.copies.values():
            copy.cancel()
        self.done += answer["rows"]
        self.took.append(time.monotonic() - flight.begun)
        self.work.keep(answer["records"])

    def _retry(self, flight: Flight, error: BaseException) -> None:
        if self.cluster.client.status != "running":
            return  # all tasks are begun again when the scheduler is back
        flight.tries += 1
        if flight.tries >= TRIES:
            raise EnsembleError(
                f"workers died {TRIES} times under the same task ({type(error).__name__}), often for lack of memory; "
                "give them more, then go on with --resume (resume=True)"
            )
        if not flight.copies:
            self._begin(flight)

    def _hurry(self, room: int) -> None:
        """Begin the last tasks a second time where they take long: one slow machine must not hold up the rest."""
        if not self.took or len(self.flying) * 2 > room:
            return
        late = time.monotonic() - SLOW * sorted(self.took)[len(self.took) // 2] - TURN
        for flight in list(self.flying.values()):
            if len(flight.copies) == 1 and flight.begun < late:
                self._begin(flight)

    def _scheduler_is_gone(self) -> None:
        lost = list(self.flying.values())
        self.flying.clear()
        self.cluster.again()
        self.listen()
        for flight in lost:
            flight.copies.clear()
        self.waiting.extendleft(reversed(lost))

    def end(self) -> None:
        with contextlib.suppress(Exception):
            self.cluster.client.unsubscribe_topic(self.topic)
            for flight in self.flying.values():
                for copy in flight.copies.values():
                    copy.cancel()


def versions() -> dict[str, str]:
    """What must be the same on all machines."""
    found = {name: str(importlib.import_module(name).__version__) for name in MUST_AGREE}
    return found | {"stream version": str(STREAM_VERSION)}


def _sees(folder: str) -> bool:
    return os.path.isdir(folder)


_one_at_a_time = threading.Lock()  # threads of one process would only wait for each other, and share its memory


def perform(text: str) -> str:
    """On a worker: do one task, and answer with its records as JSON, or with the sentence of its failure."""
    from distributed import get_worker

    message = json.loads(text)
    worker, rows, said = get_worker(), 0, 0.0

    def tick(more: int) -> None:
        nonlocal rows, said
        rows += more
        if time.monotonic() > said + REPORT:
            said = time.monotonic()
            worker.log_event(message["topic"], {"number": message["number"], "rows": rows})

    with _one_at_a_time:
        try:
            records = function(message["work"])(message["task"], tick)
        except EnsembleError as error:
            return json.dumps({"error": str(error)})
        except MemoryError:
            message = "a worker ran out of memory; give it more, then go on with --resume (resume=True)"
            return json.dumps({"error": message})
    return as_json({"records": records, "rows": rows})
