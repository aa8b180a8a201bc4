"""Limits survive power-off: a cut at any byte of a write, and a byte spoilt by it, leave the old or the new value."""

from __future__ import annotations

import ctypes
from binascii import crc_hqx
from dataclasses import dataclass

import pytest

from agreement import BOARDS
from core_device import COMPILER, defines, library
from ramprig_link.check import seal
from ramprig_link.words import LIMITS, Cause, Per

pytestmark = pytest.mark.skipif(COMPILER is None, reason="no C compiler: install gcc (Debian: apt-get install gcc)")

RECORD_BYTES = 7
NEVER = 0xFFFF_FFFF
POWER = int(Cause.POWER)


@dataclass(frozen=True)
class Cut:
    """Power goes after `whole` bytes; the byte after them is spoilt: its bits `spoilt` are the other way round."""

    whole: int
    spoilt: int = 0


class Board:
    """The core with a store that can be cut short; it is started again on the same store."""

    def __init__(self) -> None:
        self._c = library(defines(BOARDS["double"]))
        self._c.scripted_store.restype = ctypes.c_void_p
        self._c.scripted_store.argtypes = [ctypes.c_void_p, ctypes.POINTER(ctypes.c_uint32)]
        self._c.scripted_tear.argtypes = [ctypes.c_void_p, ctypes.c_uint8]
        self._s = self._c.scripted_new(b"f", b"b", b"s")
        self._tag = 0
        self.start()

    def __del__(self) -> None:
        self._c.scripted_free(self._s)

    def start(self, cut: Cut | None = None) -> int:
        """Power on, to go off again during the first write where there is a cut; the boot number told."""
        if cut is None:
            self._c.scripted_cut_store_after(self._s, NEVER)
        else:
            self.cut(cut)
        self._c.scripted_start(self._s, POWER, 0)
        return int(self._tick().split(" ")[3])

    def _tick(self) -> str:
        length = ctypes.c_uint32()
        self._c.scripted_tick(self._s)
        start = self._c.scripted_take(self._s, ctypes.byref(length))
        return ctypes.string_at(start, length.value).decode()

    def ask(self, words: str) -> str:
        """The answer's fields after its tick."""
        self._tag = (self._tag + 1) % 255
        line = seal(f"{self._tag:02x} {words}".encode())
        self._c.scripted_feed(self._s, line, len(line))
        fields = self._tick().split("\n")[0].split(" ")
        return " ".join([fields[1], *fields[3:-1]])

    def cut(self, cut: Cut) -> None:
        """Let the power go during the coming write."""
        self._c.scripted_cut_store_after(self._s, cut.whole)
        self._c.scripted_tear(self._s, cut.spoilt)

    def preset(self, name: str, index: int, value: int) -> None:
        """Have a value in the store that no request could put there."""
        self._c.scripted_preset(self._s, LIMITS[name].number, index, value)

    @property
    def store(self) -> bytes:
        length = ctypes.c_uint32()
        start = self._c.scripted_store(self._s, ctypes.byref(length))
        return ctypes.string_at(start, length.value)

    @store.setter
    def store(self, content: bytes) -> None:
        length = ctypes.c_uint32()
        ctypes.memmove(self._c.scripted_store(self._s, ctypes.byref(length)), content, len(content))


def places() -> list[tuple[str, int]]:
    """Every limit of the board by name and index."""
    fitted = {Per.DEVICE: 1, Per.AXIS: 2, Per.SERVO: 2}
    return [(limit.name, index) for limit in LIMITS.values() for index in range(fitted[limit.per])]


def values_of(name: str) -> tuple[int, int, int]:
    """Three values that the limit may have, whatever the others are."""
    limit = LIMITS[name]
    low, high = {"ceiling_duty": (0, 7000), "pulse_min_us": (400, 1500), "pulse_max_us": (1500, 2600)}.get(
        name, (limit.lowest, limit.highest)
    )
    return low, (low + high) // 2, high


EVERY_CUT = [Cut(whole) for whole in range(RECORD_BYTES + 1)]
SPOILT = [Cut(whole, 1 << bit) for whole in range(RECORD_BYTES) for bit in range(8)]


@pytest.mark.parametrize(("name", "index"), places())
def test_a_cut_at_any_byte_leaves_the_old_or_the_new(name: str, index: int) -> None:
    """Also where the cut comes twice, so that the second write meets the rest of the first."""
    board = Board()
    default = int(board.ask(f"limit {name} {index}").split(" ")[1])
    first, second, third = values_of(name)
    for before in ((), (first,), (first, second)):
        for cut in (*EVERY_CUT, *SPOILT):
            board.store = bytes([0xFF]) * len(board.store)
            board.start()
            old = default
            for value in before:
                assert board.ask(f"limit {name} {index} {value}") == f"ok {value}"
                old = value
            for wanted in (third, second):
                board.cut(cut)
                assert board.ask(f"limit {name} {index} {wanted}") == f"ok {wanted}"
                board.start()
                now = int(board.ask(f"limit {name} {index}").split(" ")[1])
                assert now in (old, wanted), (before, cut, wanted)
                if not cut.spoilt:
                    assert now == (wanted if cut.whole == RECORD_BYTES else old), (before, cut, wanted)
                old = now


def test_a_record_whose_generation_is_not_written_is_not_taken_even_with_a_right_check() -> None:
    board = Board()
    place = 1 + places().index(("trip_ma", 0))
    for copy in (0, 1):
        content = bytearray([0xFF]) * len(board.store)
        value = (777).to_bytes(4, "big")
        check = crc_hqx(bytes([place]) + value + b"\xff", 0xFFFF)
        at = (2 * place + copy) * RECORD_BYTES
        content[at : at + RECORD_BYTES] = value + check.to_bytes(2, "big") + b"\xff"
        board.store = bytes(content)
        board.start()
        assert board.ask("limit trip_ma 0") == "ok 2000"
        check = crc_hqx(bytes([place]) + value + b"\x05", 0xFFFF)
        content[at : at + RECORD_BYTES] = value + check.to_bytes(2, "big") + b"\x05"
        board.store = bytes(content)
        board.start()
        assert board.ask("limit trip_ma 0") == "ok 777"


def test_the_boot_number_grows_or_stays_when_a_start_is_cut_short() -> None:
    board = Board()
    for cut in (*EVERY_CUT, *SPOILT):
        told = board.start(cut)
        assert board.start() in (told, told + 1), cut
        if not cut.spoilt:
            assert board.start() == told + 1 + (cut.whole == RECORD_BYTES), cut


def test_every_limit_is_there_after_many_writes_and_starts() -> None:
    board = Board()
    wanted = {}
    for turn in range(300):
        name, index = places()[turn * 7 % len(places())]
        value = values_of(name)[turn % 3]
        assert board.ask(f"limit {name} {index} {value}") == f"ok {value}"
        wanted[name, index] = value
        if turn % 10 == 0:
            board.start()
    for (name, index), value in wanted.items():
        assert board.ask(f"limit {name} {index}") == f"ok {value}"


def test_more_writes_than_generations_keep_the_last() -> None:
    board = Board()
    for turn in range(600):
        board.ask(f"limit stop_ticks 0 {1 + turn}")
        board.start()
        assert board.ask("limit stop_ticks 0") == f"ok {1 + turn}"


def test_a_kept_value_that_the_board_cannot_have_gives_way_to_the_default() -> None:
    board = Board()
    board.preset("ceiling_duty", 0, 9000)  # kept by a build with more max_duty
    board.preset("thermal_s", 1, 0)
    board.start()
    assert board.ask("limit ceiling_duty 0") == "ok 3000"
    assert board.ask("limit thermal_s 1") == "ok 60"
