"""What the commands share: one sentence for any failure, exit codes, and a progress bar on a terminal."""

from __future__ import annotations

import os
import signal
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import wraps
from typing import Any, NoReturn

from procgen.declared import plain
from procgen.ensemble.errors import few_words, lacks_memory
from procgen.ensemble.own import claim
from procgen.report.letters import (  # here, since a failure may leave no memory and no file to read it from
    encoded,
    tame,
)

BAD_INPUT, INTERRUPTED, BROKEN_PIPE = 2, 130, 141
EACH = 0.1  # seconds between two sights of the bar
Tick = Callable[[int, int], None]


def guarded(command: Callable[..., None]) -> Callable[..., None]:
    """The command, with failures turned into a message and an exit code."""

    @wraps(command)
    def safe(*args: Any, **kwargs: Any) -> None:
        try:
            command(*args, **kwargs)
            sys.stdout.flush()
        except Exception as error:
            _stop(error)
        except KeyboardInterrupt:
            kept = "; what was finished is kept, and render goes on with --resume"
            said("stopped" + (kept if command.__name__ == "render" else ""))
            raise SystemExit(INTERRUPTED) from None

    return safe


def run() -> NoReturn:
    """Run a command and end the process with its exit code, without a traceback whatever happens.

    The matrices here are small: threads of a linear algebra library only wait for each other, and much so beside
    other work. A process with one thread can be forked; pyarrow begins another for an allocator that it does not use,
    and gives memory back after each column that it reads, for the system to clear it again for the next one.
    Being asked to end is taken as Ctrl-C is, so that a render stops between two parts.
    """
    claim()
    _open_streams()
    for library in ("OPENBLAS", "OMP", "MKL"):
        os.environ.setdefault(f"{library}_NUM_THREADS", "1")
    os.environ.setdefault("JE_ARROW_MALLOC_CONF", "background_thread:false")
    os.environ.setdefault("MIMALLOC_PURGE_DELAY", "-1")
    signal.signal(signal.SIGTERM, signal.default_int_handler)
    try:
        _call(sys.argv[1:])
    except KeyboardInterrupt:  # before or after the command itself
        sys.exit(INTERRUPTED)
    except MemoryError as error:
        said(sentence(error))
        sys.exit(BAD_INPUT)
    sys.exit(0)


def _call(words: list[str]) -> None:
    """Call the command that words ask for."""
    call = plain(words)
    if call is not None:
        try:
            call.function(**call.arguments)
            return
        except Exception as error:
            if not hasattr(error, "exit_code"):
                raise
    # Help, or a fault of the call, found before anything was done.
    from procgen.app import app

    app()


def _open_streams() -> None:
    """Have something behind each standard stream that was closed: files opened later would take its number."""
    for name, mode in (("stdin", "r"), ("stdout", "w"), ("stderr", "w")):
        if getattr(sys, name) is None:
            setattr(sys, name, open(os.devnull, mode, encoding="utf-8"))


def printed(text: str, json: bool = False) -> None:
    """Write text to standard output, whatever letters the terminal can show; what it would obey is written as codes."""
    stream = sys.stdout
    encoding = getattr(stream, "encoding", None) or "utf-8"
    stream.write(encoded(tame(text, json), encoding).decode(encoding))
    if not text.endswith("\n"):
        stream.write("\n")


@contextmanager
def progress(doing: str) -> Iterator[Tick | None]:
    """A tick(rows done, rows in all) that moves a bar on a terminal; None in a pipe."""
    if not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TaskProgressColumn, TextColumn, TimeRemainingColumn

    columns = (TextColumn(doing), BarColumn(), TaskProgressColumn(), TextColumn("{task.fields[rate]}"))
    terminal = Console(stderr=True)
    # Drawn by the ticks, which come often, and not by a thread of its own: a process with threads is not forked.
    with Progress(*columns, TimeRemainingColumn(), console=terminal, transient=True, auto_refresh=False) as bar:
        task = bar.add_task(doing, total=None, rate="")
        bar.refresh()
        last = time.monotonic()

        def tick(done: int, rows: int) -> None:
            nonlocal last
            speed = bar.tasks[0].speed
            rate = f"{done:,} of {rows:,} rows" + (f", {speed:,.0f} a second" if speed else "")
            shown = done >= rows or time.monotonic() - last > EACH
            last = time.monotonic() if shown else last
            bar.update(task, completed=done, total=rows, rate=rate, refresh=shown)

        yield tick


def _stop(error: Exception) -> NoReturn:
    if hasattr(error, "exit_code"):  # a fault of the call
        raise error
    if os.environ.get("PROCGEN_DEBUG") == "1":
        import traceback

        traceback.print_exc()
    if isinstance(error, BrokenPipeError):  # whoever read the output has enough
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        raise SystemExit(BROKEN_PIPE) from None
    said(sentence(error))
    raise SystemExit(BAD_INPUT) from None


def sentence(error: Exception) -> str:
    """What went wrong, for a person: our own errors say it themselves, others in one line."""
    if type(error).__module__.startswith("procgen."):
        return str(error)
    if lacks_memory(error):
        return "not enough memory; ask for fewer paths or steps at a time, or fewer workers"
    if isinstance(error, OSError):
        return few_words(error)
    name = type(error).__name__
    return (
        f"a fault in procgen itself ({name}: {error}); please report it, with the spec and with what is printed "
        "when PROCGEN_DEBUG=1 is set in the environment"
    )


def said(text: str) -> None:
    """Write a line to standard error, beside what is printed; what a terminal would obey is written as codes."""
    print(f"procgen: {tame(text)}", file=sys.stderr)
