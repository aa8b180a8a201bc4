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
from ramprig_link.samples import SampleBlock
from ramprig_link.words import AXES_MAX, BLOCK_SAMPLES_MAX, SERVOS_MAX

from .build import build, firmware

HEAD_WORDS = 6
"""Before the values: number, first tick, period, mask, rows, channels."""
CHANNELS_MAX = 3 * AXES_MAX + SERVOS_MAX + 3

DataReader = Callable[[bytes], tuple[int, SampleBlock] | None]
"""Number and samples of a data line without its LF; None for anything else, however wrong it is."""


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
        function = _library().dataline_read
    except (UsageError, OSError):
        return None
    function.restype = ctypes.c_int
    function.argtypes = (ctypes.c_char_p, ctypes.c_uint32, ctypes.c_void_p)
    read: Callable[[bytes, int, int], int] = function
    room = np.zeros(HEAD_WORDS + CHANNELS_MAX * BLOCK_SAMPLES_MAX, np.uint32)
    head, values, address = room[:HEAD_WORDS].data, room[HEAD_WORDS:].view(np.int32), room.ctypes.data

    def read_data(line: bytes) -> tuple[int, SampleBlock] | None:
        if not read(line, len(line), address):
            return None
        number, first_tick, period, mask, rows, channels = head
        columns = values[: rows * channels].reshape(channels, rows).copy()
        return number, SampleBlock(first_tick, period, mask, rows, columns)

    return read_data
