"""A worker process: tasks come in on standard input and records go out on standard output, a JSON line each."""

from __future__ import annotations

import json
import os
import signal
import sys
import threading
from queue import SimpleQueue
from types import FrameType
from typing import Any

from procgen.ensemble.own import claim, settled


class Worker:
    """Works on tasks until standard input ends; when that is because the parent died, it ends at once."""

    def __init__(self) -> None:
        self.answers, sys.stdout = sys.stdout, sys.stderr
        self.answers.reconfigure(encoding="utf-8")  # type: ignore[union-attr]
        self.tasks: SimpleQueue[str | None] = SimpleQueue()
        self.busy = threading.Event()
        self.stopped = False

    def work(self) -> None:
        threading.Thread(target=self._listen, daemon=True).start()
        while (line := self.tasks.get()) is not None:
            self._do(**json.loads(line))
            self.busy.clear()

    def stop(self, number: int, frame: FrameType | None) -> None:
        """Stop at the next tick, where a half-written part is removed: signals come at any instruction."""
        if self.stopped or not self.busy.is_set():
            os._exit(128 + number)
        self.stopped = True

    def _say(self, **message: Any) -> None:
        self.answers.write(json.dumps(message) + "\n")
        self.answers.flush()

    def _tick(self, rows: int) -> None:
        if self.stopped:
            raise SystemExit(128 + signal.SIGTERM)
        self._say(rows=rows)

    def _do(self, work: str, task: dict[str, Any]) -> None:
        from procgen.ensemble.errors import EnsembleError, lacks_memory, system_sentence

        try:
            from procgen.ensemble.engines import function

            self._say(records=function(work)(task, self._tick))
            settled()
        except EnsembleError as error:
            self._say(error=str(error))
        except Exception as error:
            if lacks_memory(error):
                self._say(memory="")
            elif isinstance(error, OSError):
                self._say(error=system_sentence(error, "the work of a worker process"))
            else:
                raise

    def _listen(self) -> None:
        rest = b""
        while data := os.read(0, 1 << 16):  # not sys.stdin, whose lock would hold up the end of the process
            *lines, rest = (rest + data).split(b"\n")
            for line in lines:
                self.busy.set()
                self.tasks.put(line.decode())
        if self.busy.is_set():
            os._exit(1)  # the parent is gone: nothing may be written any more
        self.tasks.put(None)


def main() -> None:
    """Be a worker of the process that holds the other end of standard input and output."""
    claim()
    worker = Worker()
    signal.signal(signal.SIGTERM, worker.stop)
    worker.work()
