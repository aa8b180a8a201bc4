"""The functions of `firmware_ref/ports/library/library.c`, with their types, for one kind of board."""

from __future__ import annotations

import ctypes
from functools import cache
from pathlib import Path

from ramprig.errors import UsageError
from ramprig.mock.board import Board

from .build import build, firmware, simulated_sources

QUEUE_MAX = 255
"""The core counts its queue in a byte."""

Arguments = tuple[type[ctypes._SimpleCData], ...]  # type: ignore[type-arg]  # of any of ctypes' simple types

_HANDLE = ctypes.c_void_p
_TEXT = ctypes.c_char_p
_SIGNATURES: dict[str, tuple[type[ctypes._SimpleCData] | None, Arguments]] = {  # type: ignore[type-arg]  # as above
    "new": (_HANDLE, ()),
    "free": (None, (_HANDLE,)),
    "identity": (None, (_HANDLE, _TEXT, _TEXT, _TEXT)),
    "parameter": (ctypes.c_int, (_HANDLE, _TEXT, ctypes.c_double)),
    "preset": (None, (_HANDLE, ctypes.c_uint8, ctypes.c_uint8, ctypes.c_int32)),
    "start": (ctypes.c_int, (_HANDLE, ctypes.c_uint64, ctypes.c_uint32, ctypes.c_uint32, ctypes.c_int32)),
    "sent": (_HANDLE, (_HANDLE,)),
    "run": (ctypes.c_uint64, (_HANDLE, ctypes.c_uint32, ctypes.c_int)),
    "ticks": (ctypes.c_uint64, (_HANDLE,)),
    "receive": (None, (_HANDLE, _TEXT, ctypes.c_uint32)),
    "purge": (None, (_HANDLE,)),
    "break": (None, (_HANDLE,)),
    "reset": (None, (_HANDLE, ctypes.c_uint8)),
    "fault": (ctypes.c_int, (_HANDLE, _TEXT, ctypes.c_uint8, ctypes.c_double)),
    "store": (_HANDLE, (_HANDLE,)),
    "store_bytes": (ctypes.c_uint32, ()),
    "took_stored": (ctypes.c_int, (_HANDLE,)),
    "watch_new": (_HANDLE, (ctypes.c_uint32, ctypes.c_uint32)),
    "watch_free": (None, (_HANDLE,)),
    "watch_hold": (None, (_HANDLE, ctypes.c_uint32, ctypes.c_uint32)),
    "watch_take": (_HANDLE, (_HANDLE, _HANDLE)),
    "run_watched": (ctypes.c_uint64, (_HANDLE, ctypes.c_uint32, ctypes.c_int, _HANDLE)),
    "set_winding": (None, (_HANDLE, ctypes.c_uint8, ctypes.c_double)),
}


def defines(board: Board) -> tuple[str, ...]:
    """The sizes of a board as the core's build options; raises UsageError for a board the core cannot be."""
    if board.axes < 1 or board.queue > QUEUE_MAX or board.trail % 4:
        raise UsageError(
            f"the firmware core cannot be a board with {board.axes} axes, a queue of {board.queue} and a trail of "
            f"{board.trail}; it has 1 axis or more, at most {QUEUE_MAX} orders and a multiple of 4 records"
        )
    sizes = {
        "RR_AXES": board.axes,
        "RR_SERVOS": board.servos,
        "RR_MAX_DUTY": board.max_duty,
        "RR_QUEUE": board.queue,
        "RR_TRAIL": board.trail,
        "RR_KEEP": board.keep,
        "RR_TICK_US": board.tick_us,
        "RR_CAPS": int(board.caps),
    }
    return tuple(f"-D{name}={value}" for name, value in sizes.items())


@cache
def load(options: tuple[str, ...]) -> ctypes.CDLL:
    """The library built with these options; raises UsageError where it cannot be."""
    root = firmware() or Path()
    sources = [*simulated_sources(root), root / "ports" / "library" / "library.c"]
    path = build("core", sources, options, shared=True)
    try:
        library = ctypes.CDLL(str(path))
    except OSError as error:
        raise UsageError(f"the firmware core was built but cannot be loaded: {error}") from error
    for name, (result, arguments) in _SIGNATURES.items():
        function = getattr(library, f"library_{name}")
        function.restype = result
        function.argtypes = arguments
    return library


class Handle:
    """One board of a library: calls `library_NAME` with the board as its first argument; freed with this object."""

    def __init__(self, board: Board) -> None:
        self.library = load(defines(board))
        self.board = self.library.library_new()
        if not self.board:
            raise MemoryError

    def __del__(self) -> None:
        board, self.board = getattr(self, "board", None), None
        if board:
            self.library.library_free(board)

    def call(self, name: str, *arguments: object) -> int:
        """What the function gives, 0 for one that gives nothing."""
        return int(getattr(self.library, f"library_{name}")(self.board, *arguments) or 0)

    @property
    def store(self) -> bytes:
        """The bytes of the board's store."""
        return ctypes.string_at(self.call("store"), self.library.library_store_bytes())

    @store.setter
    def store(self, content: bytes) -> None:
        assert len(content) == self.library.library_store_bytes()
        ctypes.memmove(self.call("store"), content, len(content))
