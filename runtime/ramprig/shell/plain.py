"""The shell without a terminal: plain lines in, plain lines out, one after the other; the first error ends it.

Each line is carried out to its end before the next one is read. Whatever ends it, the outputs are off and confirmed
before it returns. prompt_toolkit is not loaded.
"""

from __future__ import annotations

import contextlib
import threading
from collections.abc import Callable
from typing import TextIO

from ramprig.bench import Bench
from ramprig.errors import RamprigError, StoppedByUser, UsageError

from . import commands as c
from .outbox import Outbox
from .words import LINE_MAX, read_line
from .worker import Worker

LOOK_S = 0.1
"""How often a line under way is looked at for a signal."""
PRINT_WAIT_S = 0.2
"""How long the printer waits for something to print before it looks whether it is over."""


class Printer:
    """Prints what the outbox holds in a thread of its own, so that a reader who is slow never delays the session."""

    def __init__(self, outbox: Outbox, stream: TextIO) -> None:
        self._outbox = outbox
        self._stream = stream
        self._over = threading.Event()
        self._thread = threading.Thread(target=self._run, name="ramprig printer", daemon=True)
        self._thread.start()

    def _run(self) -> None:
        while True:
            over = self._over.is_set()
            lines = self._outbox.wait(PRINT_WAIT_S)
            if lines:
                with contextlib.suppress(OSError, ValueError):  # nobody reads any more: the work goes on
                    self._stream.write("\n".join(lines) + "\n")
                    self._stream.flush()
            elif over:
                return

    def close(self, timeout_s: float = 2.0) -> None:
        """Print what is left, for `timeout_s` at the longest."""
        self._over.set()
        self._outbox.close()
        self._thread.join(timeout_s)


def run_plain(
    bench: Bench, worker: Worker, outbox: Outbox, lines: TextIO, *, interrupted: Callable[[], bool]
) -> RamprigError | None:
    """Carry out the lines of a stream up to its end, `leave`, or the first error, which is returned.

    `interrupted` tells whether a signal asked to stop.
    """
    number = 0
    while True:
        line, over = _next_line(lines, interrupted, worker)
        if interrupted():
            return StoppedByUser("stopped by a signal")
        if over:
            return worker.failed
        if worker.failed is not None:
            return worker.failed
        number += 1
        text = line.strip()
        try:
            command = read_line(text, bench)
        except UsageError as error:
            outbox.say(f"line {number}: {error}")
            return error
        if command is None:
            continue
        outbox.say(f"> {text}")
        if isinstance(command, c.Leave):
            return None
        failure = _carried_out(worker, command, text)
        if failure is not None:
            outbox.say(f"line {number} is the last one that was looked at")
            return failure


def _next_line(lines: TextIO, interrupted: Callable[[], bool], worker: Worker) -> tuple[str, bool]:
    """The next line, and whether there is none. Reads in a thread, so that a signal or a lost link ends the wait."""
    box: list[str] = []
    done = threading.Event()

    def read() -> None:
        with contextlib.suppress(OSError, ValueError):
            box.append(lines.readline(LINE_MAX + 2))
        done.set()

    threading.Thread(target=read, name="ramprig lines", daemon=True).start()
    while not done.wait(LOOK_S):
        if interrupted() or worker.failed is not None or worker.ended:
            return "", False
    line = box[0] if box else ""
    return line, line == ""


def _carried_out(worker: Worker, command: c.Command, text: str) -> RamprigError | None:
    job = worker.post(command, text)
    while job is None:  # the worker is between two commands
        if worker.ended:
            return worker.error
        threading.Event().wait(LOOK_S / 10)
        job = worker.post(command, text)
    while not job.done.wait(LOOK_S):
        if worker.ended:
            break
    return job.error or worker.error
