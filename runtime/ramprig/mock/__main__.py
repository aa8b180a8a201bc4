"""Serve a mock: `python -m ramprig.mock`, which is also what `ramprig mock` runs."""

from __future__ import annotations

import argparse
import contextlib
import queue
import signal
import socket
import sys
import threading
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

from ramprig.errors import PortUnavailable, RamprigError, UsageError

from .device import MockDevice
from .endpoint import Endpoint, PtyEndpoint, TcpEndpoint
from .faults import FAULTS
from .serve import Server, TraceFile
from .url import MockWish, make_device

COMMANDS_MAX = 64
"""Most lines of control that wait; more are refused."""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The options of a served mock."""
    parser.add_argument("--bench", type=Path, metavar="FILE", help="take motors, servos and model from a bench file")
    parser.add_argument("--pace", choices=("real", "virtual"), default="real", help="virtual: the host grants the time")
    parser.add_argument("--seed", type=int, metavar="N", help="the same seed and the same doings give the same bytes")
    parser.add_argument("--baud", type=int, metavar="RATE", help="rate of the wire; 0: takes no time (default 115200)")
    parser.add_argument("--limits", type=Path, metavar="FILE", help="keep the board's limits in this file")
    parser.add_argument("--fault", action="append", default=[], metavar="NAME[:AXIS][=VALUE]", help="see --faults")
    parser.add_argument("--faults", action="store_true", help="list the faults and leave")
    parser.add_argument("--tcp", metavar="[HOST:]PORT", help="serve a TCP port (0: a free one) and no pseudo-terminal")
    parser.add_argument("--link", type=Path, metavar="PATH", help="a symbolic link that always points to the terminal")
    parser.add_argument("--control", metavar="[HOST:]PORT", help="take lines of control on this TCP port too")
    parser.add_argument(
        "--trace", type=Path, metavar="FILE", help="write state and duties to a CSV file as they change"
    )


def fault_help() -> str:
    """The table of faults, a line each."""
    return "\n".join(
        f"{name + (':AXIS' if kind.per_axis else ''):<24}"
        f"{kind.text}{f' (default {kind.default:g} {kind.unit})' if kind.unit else ''}"
        for name, kind in FAULTS.items()
    )


def _address(text: str) -> tuple[str, int]:
    host, _, port = text.rpartition(":")
    if not (port.isdigit() and int(port) < 65536):
        raise UsageError(f"'{text}' is no TCP port; write PORT or HOST:PORT")
    return host or "127.0.0.1", int(port)


class Commands:
    """Lines of control from standard input and from a TCP port, handed to the server's loop one by one."""

    def __init__(self) -> None:
        self._lines: queue.Queue[str] = queue.Queue(COMMANDS_MAX)

    def take(self) -> str | None:
        """The next line, None where there is none."""
        try:
            return self._lines.get_nowait()
        except queue.Empty:
            return None

    def read_stdin(self) -> None:
        """Read standard input in a thread of its own, until it ends."""
        threading.Thread(target=self._read, args=(sys.stdin,), daemon=True).start()

    def listen(self, host: str, port: int) -> str:
        """Take lines on a TCP port too; returns where. Raises PortUnavailable."""
        try:
            listener = socket.create_server((host, port))
        except OSError as error:
            raise PortUnavailable(f"cannot listen for control on {host}:{port}: {error.strerror or error}") from error
        threading.Thread(target=self._accept, args=(listener,), daemon=True).start()
        return "control socket://{}:{}".format(*listener.getsockname()[:2])

    def _accept(self, listener: socket.socket) -> None:
        while True:
            connection, _ = listener.accept()
            with connection, contextlib.suppress(OSError, UnicodeDecodeError), connection.makefile("r") as lines:
                self._read(lines)

    def _read(self, lines: object) -> None:
        with contextlib.suppress(ValueError):
            for line in lines:  # type: ignore[attr-defined]  # any text stream
                if line.strip():
                    with contextlib.suppress(queue.Full):
                        self._lines.put(line, timeout=1.0)


def _endpoint(options: argparse.Namespace) -> Endpoint:
    if options.tcp is not None:
        host, port = _address(options.tcp)
        return TcpEndpoint(host=host, port=port)
    return PtyEndpoint(options.link)


def _say(text: str) -> None:
    print(text, flush=True)


def serve(options: argparse.Namespace) -> int:
    """Serve until SIGTERM or SIGINT; the first line printed is what a host opens. Raises RamprigError."""
    if options.faults:
        _say(fault_help())
        return 0
    wish = MockWish(seed=options.seed, faults=tuple(options.fault), bench=options.bench, limits=options.limits)
    device, seed = make_device(replace(wish, baud=options.baud))
    endpoint = _endpoint(options)
    stop = threading.Event()
    for number in (signal.SIGTERM, signal.SIGINT):
        signal.signal(number, lambda *_: stop.set())
    commands = Commands()
    with contextlib.ExitStack() as ends:
        ends.callback(endpoint.close)
        _trace(device, options.trace, ends)
        server = Server(device, endpoint, pace=options.pace, seed=seed, say=_say)
        _say(endpoint.name)
        if options.control is not None:
            _say(commands.listen(*_address(options.control)))
        commands.read_stdin()
        server.run(stop.is_set, commands=commands.take)
    return 0


def _trace(device: MockDevice, path: Path | None, ends: contextlib.ExitStack) -> None:
    if path is not None:
        try:
            file = ends.enter_context(path.open("w", encoding="ascii", newline=""))
        except OSError as error:
            raise UsageError(f"--trace {path}: {error.strerror}") from error
        device.trace = TraceFile(file, axes=device.board.axes)


def main(arguments: Sequence[str] | None = None) -> int:
    """The command line; returns the exit code."""
    parser = argparse.ArgumentParser(prog="ramprig mock", description="Serve a device in software.")
    add_arguments(parser)
    try:
        return serve(parser.parse_args(arguments))
    except RamprigError as error:
        print(f"ramprig mock: {error}", file=sys.stderr)
        return error.exit_code


if __name__ == "__main__":
    sys.exit(main())
