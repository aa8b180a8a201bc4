"""Starts and ends the shell: on a terminal or without, with signals bound to a stop, and an exit code at the end."""

from __future__ import annotations

import contextlib
import os
import sys
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING, TextIO

from ramprig.bench import Bench
from ramprig.cautions import cautions_lines
from ramprig.errors import LinkError, RamprigError, StoppedByUser
from ramprig.port.base import Port
from ramprig.session.signals import StopOnSignals
from ramprig.wrapping import wrapped

from .desk import Desk
from .keeper import Reopener
from .outbox import Outbox
from .plain import Printer, run_plain
from .stopkeys import StopKey
from .worker import Worker

if TYPE_CHECKING:
    from prompt_toolkit.input.base import Input
    from prompt_toolkit.output import Output

END_WAIT_S = 60.0
"""Longest the end may take: stop, confirmation, run-down, the log's tail, the disk. Each has a bound well below."""
LOOK_S = 0.05
"""How often what is said at the end is printed."""
NARROW = 80
"""Columns of the first screen where the terminal does not tell its own."""


def run_shell(
    bench: Bench,
    port: Port,
    *,
    runs: Path | None = None,
    open_again: Reopener | None = None,
    lines: TextIO | None = None,
    out: TextIO | None = None,
    history_file: Path | None = None,
    seed: int | None = None,
) -> int:
    """Drive a bench by hand until the user leaves; returns the exit code, with the outputs off and the port closed.

    On a terminal it is interactive; where `lines` (standard input) or `out` (standard output) is no terminal it reads
    plain lines. `runs` is the folder for run folders (`runs` where None), `open_again` opens the port anew after a lost
    link. Exit codes: 0 left in order, 3 tripped or refused, 4 link lost or the outputs not confirmed off, 5 stopped by
    a signal or, with plain lines, by the user; with plain lines also 2 for a line that could not be read or done, and
    1 for a sequence whose expectation failed. Raises what opening the device raises, and Bug.
    """
    lines, out = sys.stdin if lines is None else lines, sys.stdout if out is None else out
    outbox = Outbox()

    def make(aside: Callable[[], None]) -> Desk:
        folder = Path("runs") if runs is None else runs
        return Desk(bench, port, outbox, runs=folder, open_again=open_again, seed=seed, aside=aside)

    worker = Worker(make, outbox.say)
    with _signals(worker) as received:
        if _is_terminal(lines) and _is_terminal(out):
            terminal = _Terminal(bench, worker, outbox, history_file or default_history(), received)
            with contextlib.suppress(_NoConsole):
                return terminal.run(lines, out)
        return _on_lines(bench, worker, outbox, lines, out, received)


@contextlib.contextmanager
def _signals(worker: Worker) -> Iterator[list[str]]:
    """Signals stop the bench for as long as this lasts; the names of those that came."""
    if threading.current_thread() is not threading.main_thread():
        yield []
        return
    with StopOnSignals(worker) as signals:
        yield signals.received


def _is_terminal(stream: TextIO) -> bool:
    try:
        return stream.isatty()
    except ValueError:  # closed
        return False


def _first_screen(bench: Bench, width: int) -> list[str]:
    return [f"ramprig shell: {bench.name} ({bench.file})", *cautions_lines(width), ""]


def _exit_code(worker: Worker, error: RamprigError | None) -> int:
    """The code at the end; raises what the worker could not get over."""
    if worker.error is not None:
        raise worker.error
    if not worker.off_confirmed:
        return LinkError.exit_code
    return 0 if error is None else error.exit_code


# ---- without a terminal ----------------------------------------------------------------------------------------------


def _on_lines(bench: Bench, worker: Worker, outbox: Outbox, lines: TextIO, out: TextIO, received: list[str]) -> int:
    printer = Printer(outbox, out)
    try:
        for line in _first_screen(bench, NARROW):
            outbox.say(line)
        worker.start()
        worker.opened.wait()
        error: RamprigError | None = None
        if worker.error is None:
            error = run_plain(bench, worker, outbox, lines, interrupted=lambda: bool(received))
            worker.leave()
        worker.join(END_WAIT_S)
        if worker.off_confirmed:
            outbox.say("left: all outputs are off")
        else:
            outbox.say("left: the outputs are NOT CONFIRMED off; cut the power")
    finally:
        printer.close()
    return _exit_code(worker, error)


# ---- on a terminal ---------------------------------------------------------------------------------------------------


class _NoConsole(Exception):
    """The terminal is none that can be drawn on."""


class _Terminal:
    """The interactive shell from its first screen to its last line."""

    def __init__(
        self, bench: Bench, worker: Worker, outbox: Outbox, history_file: Path | None, received: list[str]
    ) -> None:
        self._bench = bench
        self._worker = worker
        self._outbox = outbox
        self._history_file = history_file
        self._received = received
        self._stop_key = StopKey(worker)
        self._columns = NARROW

    def run(self, lines: TextIO, out: TextIO) -> int:
        """The exit code."""
        from prompt_toolkit.output import create_output

        try:
            output = create_output(stdout=out)
        except Exception as error:  # a Windows console that is none: each version raises another one
            raise _NoConsole(str(error)) from error
        self._columns = output.get_size().columns
        for line in _first_screen(self._bench, min(100, self._columns)):
            _print(out, line)
        self._worker.start()
        try:
            with self._keys(lines) as keys:
                self._show(keys, output)
                self._end(out)
        finally:
            self._worker.leave()
            self._worker.join(END_WAIT_S)
        return _exit_code(self._worker, StoppedByUser("stopped by a signal") if self._told_to_go() else None)

    @contextlib.contextmanager
    def _keys(self, lines: TextIO) -> Iterator[Input]:
        """The keyboard, its stop keys tapped where the system lets us."""
        if sys.platform == "win32":
            from prompt_toolkit.input import create_input

            yield create_input(lines)
            return
        from .taps import TappedInput, tapped_terminal

        keys = TappedInput(self._stop_key.press)
        with tapped_terminal(lines.fileno(), keys):
            yield keys

    def _show(self, keys: Input, output: Output) -> None:
        import asyncio

        from prompt_toolkit.application import create_app_session

        from .screen import Screen

        with create_app_session(input=keys, output=output):
            screen = Screen(
                self._bench,
                self._worker,
                self._outbox,
                self._stop_key,
                keys=keys,
                output=output,
                history_file=self._history_file,
                over=self._told_to_go,
            )
            with contextlib.suppress(OSError):  # the terminal went away while it was drawn on
                asyncio.run(screen.run())

    def _told_to_go(self) -> bool:
        """A signal other than an interrupt came: stop, and leave."""
        return any(name != "SIGINT" for name in self._received)

    def _end(self, out: TextIO) -> None:
        """Stop what is under way, have the worker end, print what it says; stop keys work to the last."""
        worker = self._worker
        if worker.busy:
            worker.panic(1)
        worker.leave()
        bound_s = time.monotonic() + END_WAIT_S
        while time.monotonic() < bound_s:
            worker.join(LOOK_S)
            over = worker.ended
            for line in self._outbox.take():
                _print(out, wrapped(line, self._columns))
            if over:
                break
        _print(out, "left: all outputs are off" if worker.off_confirmed else "left: NOT CONFIRMED off; cut the power")


def _print(out: TextIO, line: str) -> None:
    with contextlib.suppress(OSError, ValueError):  # the terminal is gone: the end goes on without it
        out.write(line + "\n")
        out.flush()


def default_history() -> Path | None:
    """Where typed lines are kept from one shell to the next; None where no place can be had."""
    home = Path.home()
    if sys.platform == "win32":
        base = Path(os.environ.get("LOCALAPPDATA", home / "AppData" / "Local"))
    elif sys.platform == "darwin":
        base = home / "Library" / "Application Support"
    else:
        base = Path(os.environ.get("XDG_STATE_HOME") or home / ".local" / "state")
    try:
        (base / "ramprig").mkdir(parents=True, exist_ok=True)
    except OSError:
        return None
    return base / "ramprig" / "shell_history"
