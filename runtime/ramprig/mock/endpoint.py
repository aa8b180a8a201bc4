"""Where a served mock meets its host: a pseudo-terminal or a TCP port, one host after another."""

from __future__ import annotations

import contextlib
import os
import select
import socket
from pathlib import Path
from typing import Protocol

from ramprig.errors import PortUnavailable

READ_BYTES = 65536


class Endpoint(Protocol):
    """One place to meet. A host may come, go, and come again; bytes sent while none is there are lost, as on a wire."""

    @property
    def name(self) -> str:
        """What a host opens."""
        ...

    def poll(self, timeout_s: float) -> tuple[bytes, bool]:
        """Wait up to `timeout_s` for something; returns the bytes of the host and whether a new one has come."""
        ...

    def send(self, data: bytes) -> None:
        """Hand over bytes; what a host does not take is lost."""
        ...

    def unplug(self) -> None:
        """Let the host see that the port has gone."""
        ...

    def plug(self) -> None:
        """Be there again after `unplug`."""
        ...

    def close(self) -> None:
        """Give everything back."""
        ...


class PtyEndpoint:
    """A pseudo-terminal (POSIX). Its name changes with each plugging in; `link`, where given, always points to it."""

    def __init__(self, link: Path | None = None) -> None:
        self._link = link
        self._master = -1
        self._here = False
        self._name = ""
        self.plug()

    @property
    def name(self) -> str:
        """The terminal's device name, or the link to it."""
        return self._name if self._link is None else str(self._link)

    def plug(self) -> None:
        """Open a pair, make it raw, and have the link point to it."""
        try:
            import pty
            import tty
        except ImportError as error:
            raise PortUnavailable("this system has no pseudo-terminals; serve a TCP port instead") from error
        self._master, slave = pty.openpty()
        tty.setraw(slave)
        self._name = os.ttyname(slave)
        os.close(slave)
        os.set_blocking(self._master, False)
        self._here = False
        if self._link is not None:
            try:
                fresh = self._link.with_name(self._link.name + ".new")
                fresh.unlink(missing_ok=True)
                fresh.symlink_to(self._name)
                os.replace(fresh, self._link)
            except (OSError, ValueError) as error:
                self.unplug()
                why = error.strerror if isinstance(error, OSError) else error
                raise PortUnavailable(f"the link {self._link} to the terminal cannot be made: {why}") from error

    def unplug(self) -> None:
        """Close the pair: a host that has it open meets an error."""
        if self._master >= 0:
            os.close(self._master)
            self._master = -1
        self._here = False

    def poll(self, timeout_s: float) -> tuple[bytes, bool]:
        """As `Endpoint.poll`."""
        if self._master < 0:
            select.select((), (), (), timeout_s)
            return b"", False
        poller = select.poll()
        poller.register(self._master, select.POLLIN)
        events = poller.poll(0)
        if events and events[0][1] & select.POLLHUP and not events[0][1] & select.POLLIN:
            self._here = False
            select.select(
                (), (), (), timeout_s
            )  # a terminal that nobody has open would answer at once, again and again
            return b"", False
        came = not self._here
        if came:
            self._here = True
            return b"", True
        if not events and not poller.poll(max(0.0, timeout_s * 1000.0)):
            return b"", False
        try:
            return os.read(self._master, READ_BYTES), False
        except BlockingIOError:
            return b"", False
        except OSError:
            self._here = False
            return b"", False

    def send(self, data: bytes) -> None:
        """As `Endpoint.send`."""
        if self._here:
            with contextlib.suppress(OSError):
                os.write(self._master, data)

    def close(self) -> None:
        """As `Endpoint.close`; the link is removed."""
        self.unplug()
        if self._link is not None and self._link.is_symlink() and os.readlink(self._link) == self._name:
            self._link.unlink()


class TcpEndpoint:
    """A TCP port on `host`; `port` 0 takes a free one. While a host is connected, a second one is turned away."""

    def __init__(self, *, host: str = "127.0.0.1", port: int = 0) -> None:
        try:
            self._listener = socket.create_server((host, port))
        except OSError as error:
            raise PortUnavailable(f"cannot listen on {host}:{port}: {error.strerror or error}") from error
        self._listener.setblocking(False)
        self._plugged = True
        self._connection: socket.socket | None = None

    @property
    def name(self) -> str:
        """The `socket://` text that a host opens."""
        host, port = self._listener.getsockname()[:2]
        return f"socket://{host}:{port}"

    def plug(self) -> None:
        """Take hosts again."""
        self._plugged = True

    def unplug(self) -> None:
        """Drop the host and turn away the next ones."""
        self._plugged = False
        self._drop()

    def _drop(self) -> None:
        if self._connection is not None:
            self._connection.close()
            self._connection = None

    def poll(self, timeout_s: float) -> tuple[bytes, bool]:
        """As `Endpoint.poll`."""
        connection = self._connection
        watched = [self._listener] if connection is None else [self._listener, connection]
        ready, _, _ = select.select(watched, (), (), max(0.0, timeout_s))
        came = self._listener in ready and self._accept()
        if came or connection is None or connection not in ready:
            return b"", came
        try:
            data = connection.recv(READ_BYTES)
        except BlockingIOError:
            return b"", False
        except OSError:
            data = b""
        if not data:
            self._drop()
        return data, False

    def _accept(self) -> bool:
        try:
            connection, _ = self._listener.accept()
        except OSError:
            return False
        if self._connection is not None or not self._plugged:
            connection.close()
            return False
        connection.setblocking(False)
        connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self._connection = connection
        return True

    def send(self, data: bytes) -> None:
        """As `Endpoint.send`."""
        if self._connection is not None:
            try:
                self._connection.send(data)
            except BlockingIOError:
                pass
            except OSError:
                self._drop()

    def close(self) -> None:
        """As `Endpoint.close`."""
        self._drop()
        self._listener.close()
