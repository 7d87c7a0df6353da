"""A worker process: tasks come in on standard input and records go out on standard output, a JSON line each."""

from __future__ import annotations

import json
import os
import signal
import sys
import threading
from queue import SimpleQueue
from types import FrameType
from typing import Any, TextIO

from procgen.ensemble.own import claim, settled


class Worker:
    """Works on tasks until standard input ends; when that is because the parent died, it ends at once."""

    def __init__(self, answers: TextIO) -> None:
        self.answers, sys.stdout = answers, sys.stderr
        self.tasks: SimpleQueue[str | None] = SimpleQueue()
        self.busy = threading.Event()
        self.stopped = False

    def work(self) -> None:
        threading.Thread(target=self._listen, daemon=True).start()
        while (line := self.tasks.get()) is not None:
            answer = self._answer(**json.loads(line))
            settled()
            self.busy.clear()  # before it is heard, since the next task may come at once
            if self.stopped:
                raise SystemExit(128 + signal.SIGTERM)
            self._say(answer)

    def stop(self, number: int, frame: FrameType | None) -> None:
        """Stop at the next tick, where a half-written part is removed: signals come at any instruction."""
        if self.stopped or not self.busy.is_set():
            os._exit(128 + number)
        self.stopped = True

    def _say(self, message: str) -> None:
        try:
            self.answers.write(message + "\n")
            self.answers.flush()
        except BrokenPipeError:
            os._exit(1)  # the parent is gone: nothing may be written any more

    def _tick(self, rows: int) -> None:
        if self.stopped:
            raise SystemExit(128 + signal.SIGTERM)
        self._say(json.dumps({"rows": rows}))

    def _answer(self, work: str, task: dict[str, Any]) -> str:
        from procgen.ensemble.errors import EnsembleError, lacks_memory, system_sentence

        try:
            from procgen.ensemble.engines import as_json, function

            return as_json({"records": function(work)(task, self._tick)})
        except EnsembleError as error:
            return json.dumps({"error": str(error)})
        except Exception as error:
            if lacks_memory(error):
                return json.dumps({"memory": ""})
            if isinstance(error, OSError):
                return json.dumps({"error": system_sentence(error, "the work of a worker process")})
            raise

    def _listen(self) -> None:
        rest = b""
        while data := os.read(0, 1 << 16):  # not sys.stdin, whose lock would hold up the end of the process
            *lines, rest = (rest + data).split(b"\n")
            for line in lines:
                self.busy.set()
                self.tasks.put(line.decode())
        if self.busy.is_set():
            os._exit(1)  # as above
        self.tasks.put(None)


def main() -> None:
    """Be a worker of the process that holds the other end of standard input and output."""
    claim()
    sys.stdout.reconfigure(encoding="utf-8")  # type: ignore[union-attr]
    worker = Worker(sys.stdout)
    signal.signal(signal.SIGTERM, worker.stop)
    worker.work()
