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


def main() -> None:
    """Draw chains until standard input ends; a parent that has died ends it too, and this process at once."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # Ctrl-C reaches the whole group; the parent decides
    signal.signal(signal.SIGTERM, _end)
    answers, sys.stdout = sys.stdout, sys.stderr
    answers.reconfigure(encoding="utf-8")  # type: ignore[union-attr]
    tasks: SimpleQueue[str | None] = SimpleQueue()
    busy = threading.Event()
    threading.Thread(target=_listen, args=(tasks, busy), daemon=True).start()

    def say(**message: Any) -> None:
        answers.write(json.dumps(message) + "\n")
        answers.flush()

    while (line := tasks.get()) is not None:
        _draw(line, say)
        busy.clear()


def _draw(line: str, say: Any) -> None:
    from procgen.ensemble.errors import EnsembleError
    from procgen.ensemble.part import Task, render_chain

    try:
        say(records=render_chain(Task.read(json.loads(line)), lambda rows: say(rows=rows)))
    except EnsembleError as error:
        say(error=str(error))
    except MemoryError:
        say(error="a worker process ran out of memory; use fewer --workers, then go on with --resume")


def _listen(tasks: SimpleQueue[str | None], busy: threading.Event) -> None:
    rest = b""
    while data := os.read(0, 1 << 16):  # not sys.stdin, whose lock would hold up the end of the process
        *lines, rest = (rest + data).split(b"\n")
        for line in lines:
            busy.set()
            tasks.put(line.decode())
    if busy.is_set():
        os._exit(1)  # the parent is gone: nothing may be written any more
    tasks.put(None)


def _end(number: int, frame: FrameType | None) -> None:
    raise SystemExit(143)
