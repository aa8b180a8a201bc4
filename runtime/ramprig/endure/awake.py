"""Keeps the computer awake for a run, through the package wakepy, and says what no program can prevent.

A lock against sleep is a request to the system: a closed lid, the power button, an explicit Sleep, an empty battery and
some updates pass it by. So a sleep is also noticed afterwards: the board's ticks went on while the host's clock stood
still, or the wall clock jumped against the monotonic one (see `session/watch.py`).
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from typing import Protocol, cast

from ramprig.errors import PackageMissing, UsageError
from ramprig.extras import need

CANNOT_PREVENT = (
    "No program can keep the computer awake against a closed lid, the power button, a Sleep asked for by hand, an "
    "empty battery, or a restart for updates: plug it in, leave the lid open, and put updates off."
)
ACCEPT = "--accept-sleep goes on without"


@dataclass(frozen=True, slots=True, kw_only=True)
class Awake:
    """Whether the system was asked to stay awake: by which `method`, or why not."""

    active: bool
    method: str
    why_not: str = ""

    def __str__(self) -> str:
        if self.active:
            return f"the computer is kept awake ({self.method}). {CANNOT_PREVENT}"
        return f"THE COMPUTER MAY FALL ASLEEP: {self.why_not}. {CANNOT_PREVENT}"


class _Mode(Protocol):
    """What wakepy gives when entered."""

    active: bool
    active_method: str | None


class _Lock(Protocol):
    """A lock of wakepy."""

    def __enter__(self) -> _Mode: ...

    def __exit__(self, kind: object, error: object, trace: object) -> None: ...


def _lock() -> _Lock:
    """A lock against sleep that lets the screen go dark. Raises PackageMissing."""
    wakepy = need("wakepy", purpose="keeping the computer awake")
    return cast("_Lock", wakepy.keep.running(on_fail="pass"))


@contextmanager
def keep_awake(*, accept_sleep: bool) -> Iterator[Awake]:
    """Keep the computer awake while it is entered.

    Where that cannot be had it raises PackageMissing or UsageError, or goes on without with `accept_sleep`.
    """
    try:
        lock = _lock()
    except PackageMissing as missing:
        if not accept_sleep:
            raise UsageError(f"{missing}. {ACCEPT}.") from missing
        yield Awake(active=False, method="", why_not=f"the package {missing.package} is not installed")
        return
    with _held(lock) as mode:
        if mode is not None and mode.active:
            yield Awake(active=True, method=str(mode.active_method))
            return
        why_not = "the system took no request to stay awake (no desktop session, or none that can be asked)"
        if not accept_sleep:
            raise UsageError(f"The computer cannot be kept awake: {why_not}. {ACCEPT}.")
        yield Awake(active=False, method="", why_not=why_not)


@contextmanager
def _held(lock: _Lock) -> Iterator[_Mode | None]:
    """The lock while this is entered; None where the package fails, which must neither begin nor end a run wrongly."""
    try:
        mode = lock.__enter__()
    except Exception:  # whatever the desktop's services make of the request
        yield None
        return
    try:
        yield mode
    finally:
        with suppress(Exception):  # a desktop that has gone meanwhile holds no lock either
            lock.__exit__(None, None, None)
