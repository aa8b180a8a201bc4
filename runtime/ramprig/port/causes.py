"""The one place where exceptions of pyserial and the operating system become ours, each with its cause and
remedy.
"""

from __future__ import annotations

import errno
import os
import sys
from collections.abc import Sequence

from ramprig.errors import LinkError, LinkLost, PortNotFound, PortUnavailable


def _foreign() -> tuple[type[Exception], ...]:
    """Everything a port is known to raise in use.

    pyserial's own exceptions are OSErrors. After an unplug or a close in another thread there are also
    TypeError and AttributeError (its descriptor is None by then), ValueError (a descriptor too large for
    select), and termios.error, which is not an OSError.
    """
    kinds: tuple[type[Exception], ...] = (OSError, EOFError, TypeError, ValueError, AttributeError)
    try:
        import termios
    except ImportError:
        return kinds
    return (*kinds, termios.error)


FOREIGN = _foreign()

NOT_FOUND = {errno.ENOENT, errno.ENXIO, errno.ENODEV}
DENIED = {errno.EACCES, errno.EPERM}
BUSY = {errno.EBUSY, errno.EAGAIN, errno.EWOULDBLOCK}


class FarEndStuck(TimeoutError):
    """A write did not end in time: the far end takes no more bytes."""


class TwoReaders(OSError):
    """The system announced bytes and then had none."""


def lost(name: str, error: BaseException, *, closed: bool) -> LinkLost:
    """The `LinkLost` that `error`, met in using the port `name`, means; `closed` says that we closed it
    ourselves.
    """
    if closed:
        return LinkLost(f"{name} was closed while it was in use")
    if isinstance(error, FarEndStuck):
        return LinkLost(f"{name} takes no more bytes: the far end has stopped reading ({error})")
    if isinstance(error, TwoReaders):
        return LinkLost(f"{name} announced bytes and had none: unplugged, or another program reads the same port")
    if isinstance(error, EOFError):
        return LinkLost(f"{name} was closed by the far end")
    return LinkLost(f"{name} is gone: unplugged, or its far end closed ({_words(error)})")


def _words(error: BaseException) -> str:
    text = str(error).strip() or "no further message"
    return f"{type(error).__name__}: {text}"


def error_number(error: BaseException | None) -> int | None:
    """The system's error number behind `error`, also where pyserial dropped it on the way."""
    while error is not None:
        if isinstance(error, OSError) and error.errno is not None:
            return error.errno
        error = error.__cause__ or error.__context__
    return None


def not_opened(name: str, error: BaseException, *, present: Sequence[str], holder: str = "") -> LinkError:
    """Why `name` could not be opened, with what to do about it.

    `present` lists the ports that are there, `holder` says who holds the port where that is known.
    """
    number = error_number(error)
    text = str(error)
    if number in NOT_FOUND or "FileNotFoundError" in text:
        return PortNotFound(f"there is no port {name}; {listed(present)}")
    if number in BUSY or "PermissionError" in text or "Access is denied" in text:
        return busy(name, holder)
    if number in DENIED:
        return PortUnavailable(f"{name} may not be opened by this user: {permission_remedy(name)}")
    if number == errno.ENOTTY or "Could not configure port" in text:
        return PortUnavailable(f"{name} is not a serial port, or its adapter has locked up: replug it ({text})")
    return PortUnavailable(f"{name} could not be opened: {_words(error)}")


def busy(name: str, holder: str) -> PortUnavailable:
    """The port is held by another program; `holder` names it, or is empty."""
    if holder:
        return PortUnavailable(f"{name} is in use by {holder}: end that program first")
    hint = "; a modem or braille service may also have taken it" if sys.platform == "linux" else ""
    return PortUnavailable(f"{name} is in use by another program: end it, or find it with your system's tools{hint}")


def unreachable(name: str, error: BaseException) -> PortUnavailable:
    """A network port that could not be reached."""
    number = error_number(error)
    if number == errno.ECONNREFUSED:
        return PortUnavailable(f"{name} refused the connection: is the server started, and is this its port number?")
    if isinstance(error, TimeoutError):
        return PortUnavailable(f"{name} did not answer in time: is the machine on and reachable?")
    return PortUnavailable(f"{name} could not be reached: {_words(error)}")


def permission_remedy(name: str) -> str:
    """What gives this user the right to open `name`: the group that owns it, and the command that joins it."""
    group = _group_of(name)
    if group is None:
        return "ask this machine's administrator for access to serial ports"
    if group == "root":
        return "it belongs to root alone; a udev rule must give it to a group such as dialout"
    return f"run 'sudo usermod -aG {group} $USER', then log out and in again"


def _group_of(name: str) -> str | None:
    if os.name != "posix":
        return None
    import grp

    try:
        return grp.getgrgid(os.stat(name).st_gid).gr_name
    except (OSError, KeyError):
        return "dialout"  # the group's name on Debian and most others


def listed(present: Sequence[str]) -> str:
    """The ports that are there, as the end of a sentence."""
    if not present:
        return "no serial port is there at all: is the cable in, and does it carry data?"
    return "there are: " + ", ".join(present)
