"""A worker process: tasks come in on standard input, a JSON line each; records go out on standard output."""

from __future__ import annotations

import json
import os
import signal
import sys
import threading
from collections.abc import Iterable, Mapping
from queue import SimpleQueue
from types import FrameType
from typing import Any, BinaryIO

from procgen.ensemble.own import claim, settled


class Worker:
    """Works on tasks until standard input ends; when that is because the parent died, it ends at once."""

    def __init__(self, answers: BinaryIO) -> None:
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
            self._say(*answer)

    def stop(self, number: int, frame: FrameType | None) -> None:
        """Stop at the next tick, where a half-written part is removed: signals come at any instruction."""
        if self.stopped or not self.busy.is_set():
            os._exit(128 + number)
        self.stopped = True

    def _say(self, *pieces: bytes) -> None:
        try:
            self.answers.writelines(pieces)
            self.answers.flush()
        except BrokenPipeError:
            os._exit(1)  # the parent is gone: nothing may be written any more

    def _tick(self, rows: int) -> None:
        if self.stopped:
            raise SystemExit(128 + signal.SIGTERM)
        self._say(_line({"rows": rows}))

    def _answer(self, work: str, task: dict[str, Any]) -> Iterable[bytes]:
        from procgen.ensemble.errors import EnsembleError, lacks_memory, system_sentence

        try:
            from procgen.ensemble.engines import as_bytes, function

            return list(as_bytes({"records": function(work)(task, self._tick)}))
        except EnsembleError as error:
            return [_line({"error": str(error)})]
        except Exception as error:
            if lacks_memory(error):
                return [_line({"memory": ""})]
            if isinstance(error, OSError):
                return [_line({"error": system_sentence(error, "the work of a worker process")})]
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


def _line(message: Mapping[str, Any]) -> bytes:
    return json.dumps(message).encode() + b"\n"


def main() -> None:
    """Be a worker of the process that holds the other end of standard input and output."""
    claim()
    worker = Worker(sys.stdout.buffer)
    signal.signal(signal.SIGTERM, worker.stop)
    worker.work()
