"""Reading packed data lines in C, where the machine has a C compiler: what a rehearsal spends its time on otherwise.

The codec in `ramprig_link` is the one that counts; this one takes exactly the lines that it takes, with the same
samples, and leaves every other line to it.
"""

from __future__ import annotations

import ctypes
from collections.abc import Callable
from functools import cache

import numpy as np

from ramprig.errors import UsageError
from ramprig_link.host import DataReader, ReadLines
from ramprig_link.samples import SampleBlock
from ramprig_link.words import AXES_MAX, SERVOS_MAX

from .build import build, firmware

HEAD_WORDS = 7
"""Before the values: numbers of the first line and the last, first tick, period, mask, rows, channels."""
CHANNELS_MAX = 3 * AXES_MAX + SERVOS_MAX + 3
ROWS_MAX = 1024
"""The C side's: so many samples are read together at most."""


@cache
def _library() -> ctypes.CDLL:
    root = firmware()
    assert root is not None  # `build` has looked
    sources = [root / "ports" / "library" / "dataline.c", root / "core" / "check.c"]
    return ctypes.CDLL(str(build("dataline", sources, (), shared=True)))


def data_reader() -> DataReader | None:
    """A reader of data lines, for one thread; None where it cannot be built.

    Its blocks have `columns` as an array, (channels, rows) int32.
    """
    if firmware() is None:
        return None
    try:
        function = _library().datalines_read
    except (UsageError, OSError):
        return None
    function.restype = ctypes.c_uint32
    function.argtypes = (ctypes.c_char_p, ctypes.c_uint32, ctypes.c_uint32, ctypes.c_void_p)
    read: Callable[[bytes, int, int, int], int] = function
    room = np.zeros(HEAD_WORDS + CHANNELS_MAX * ROWS_MAX, np.uint32)
    head, address = room[:HEAD_WORDS].data, room.ctypes.data
    values = room[HEAD_WORDS:].view(np.int32).reshape(CHANNELS_MAX, ROWS_MAX)

    def read_lines(text: bytes, begin: int) -> ReadLines | None:
        end = read(text, len(text), begin, address)
        if end == begin:
            return None
        first, last, first_tick, period, mask, rows, channels = head
        block = SampleBlock(first_tick, period, mask, rows, values[:channels, :rows].copy())
        return ReadLines(first, last, end, block)

    return read_lines
