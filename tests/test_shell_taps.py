"""The stop keys, found in raw bytes before any parser: in a paste, across pieces, with the event loop blocked."""

from __future__ import annotations

import asyncio
import os
import sys
import threading
import time
from collections.abc import Callable

import pytest
from hypothesis import given
from hypothesis import strategies as st
from prompt_toolkit.keys import Keys

from held_up import held_up_s
from ramprig.shell.stopkeys import F12, StopBytes, StopKey
from ramprig.shell.taps import PASTE_MAX, WAITING_MAX, TappedInput, tapped_terminal, tapping

posix = pytest.mark.skipif(sys.platform == "win32", reason="selects on a pipe")


class Counted:
    """Counts calls; a target for stops."""

    def __init__(self) -> None:
        self.categories: list[int] = []

    def __call__(self) -> None:
        self.categories.append(1)

    def panic(self, category: int) -> bool:
        self.categories.append(category)
        return True


def test_again_within_a_second_cuts() -> None:
    target, times = Counted(), iter([0.0, 0.9, 2.5, 4.0])
    key = StopKey(target, now=lambda: next(times))
    for _ in range(4):
        key.press()
    assert target.categories == [1, 0, 1, 1]
    assert key.pressed == 4


@given(st.binary(max_size=60), st.binary(max_size=60), st.sampled_from([b"\x03", b"\x1c", F12]), st.data())
def test_a_stop_key_is_found_in_any_bytes_cut_anywhere(
    before: bytes, after: bytes, key: bytes, data: st.DataObject
) -> None:
    stream = before + key + after
    at = data.draw(st.integers(0, len(stream)))
    stops = Counted()
    taker = StopBytes(stops)
    left = b"".join(taker.take(piece)[0] for piece in (stream[:at], stream[at:]))
    assert stops.categories
    assert left == bytes(byte for byte in stream if byte not in (0x03, 0x1C))


@given(st.binary(max_size=60).filter(lambda data: not set(data) & {0x03, 0x1C} and F12 not in data))
def test_other_bytes_pass_and_stop_nothing(data: bytes) -> None:
    stops = Counted()
    assert StopBytes(stops).take(data) == (data, False)
    assert stops.categories == []


def keys_of(feed: Callable[[TappedInput], None], *, now: Callable[[], float] = lambda: 0.0) -> list[tuple[str, str]]:
    """What an application would read after `feed`."""
    stops = Counted()

    async def run() -> list[tuple[str, str]]:
        tapped = TappedInput(stops, now=now)
        with tapped.attach(lambda: None):
            feed(tapped)
            await asyncio.sleep(0)
            await asyncio.sleep(0)
            return [(str(press.key), press.data) for press in tapped.read_keys()]

    return asyncio.run(run())


def pieces(*data: bytes) -> Callable[[TappedInput], None]:
    """Feeds these bytes, one piece after the other."""

    def feed(tapped: TappedInput) -> None:
        for piece in data:
            tapped.take(piece)

    return feed


def test_keys_come_through_in_order() -> None:
    found = keys_of(pieces(b"a\x1b[", b"C", b"\xc3", b"\xa9"))
    assert [key for key, _ in found] == ["a", str(Keys.Right), "é"]


def test_a_stop_inside_an_unfinished_paste_gives_the_keyboard_back() -> None:
    found = keys_of(pieces(b"\x1b[200~junk", b"\x03", b"ok"))
    assert [data for _, data in found] == ["o", "k"]


def test_a_paste_whose_end_does_not_come_is_given_up() -> None:
    clock = [0.0]

    def feed(tapped: TappedInput) -> None:
        tapped._arrive(b"\x1b[200~junk", False, False)
        assert not tapped.expire_paste()
        clock[0] = 1.5
        assert tapped.expire_paste()
        tapped._arrive(b"ok", False, False)

    assert [data for _, data in keys_of(feed, now=lambda: clock[0])] == ["o", "k"]


def test_a_paste_without_end_is_bounded() -> None:
    def feed(tapped: TappedInput) -> None:
        tapped._arrive(b"\x1b[200~" + b"x" * PASTE_MAX, False, False)
        tapped._arrive(b"x", False, False)
        tapped._arrive(b"ok", False, False)

    assert [data for _, data in keys_of(feed)][-2:] == ["o", "k"]


def test_what_waits_for_the_event_loop_is_bounded_and_what_is_dropped_is_counted() -> None:
    stops = Counted()
    dropped = []

    async def run() -> None:
        tapped = TappedInput(stops)
        with tapped.attach(lambda: None):
            for _ in range(WAITING_MAX // 1000 + 10):
                tapped.take(b"x" * 1000)
            tapped.take(b"\x03")
            dropped.append(tapped.dropped_bytes)
            await asyncio.sleep(0)

    asyncio.run(run())
    assert 0 < dropped[0] <= 10_000
    assert stops.categories


@posix
@pytest.mark.process
def test_a_blocked_event_loop_does_not_delay_a_stop() -> None:
    """The event loop sleeps for as long as it takes; the stop comes from the tap's own thread."""
    stopped = threading.Event()
    tapped = TappedInput(stopped.set)
    reader, writer = os.pipe()
    took_s: list[float] = []

    async def run() -> None:
        with tapped.attach(lambda: None), tapping(reader, tapped):
            held_s, begin_s = held_up_s(), time.monotonic()
            os.write(writer, b"\x1b[200~half a paste\x03")
            assert stopped.wait(10.0)  # blocks the event loop
            took_s.append(time.monotonic() - begin_s - (held_up_s() - held_s))

    asyncio.run(run())
    os.close(reader)
    os.close(writer)
    assert took_s[0] < 0.05


@posix
def test_the_end_of_the_terminal_closes_the_input() -> None:
    tapped = TappedInput(lambda: None)
    reader, writer = os.pipe()

    async def run() -> None:
        over = asyncio.Event()
        with tapped.attach(over.set), tapping(reader, tapped):
            os.close(writer)
            await asyncio.wait_for(over.wait(), 10.0)

    asyncio.run(run())
    os.close(reader)
    assert tapped.closed


@posix
def test_after_a_suspension_the_terminal_is_raw_again_and_at_the_end_as_it_was() -> None:
    import pty
    import signal
    import termios

    local = 3  # the place of the local modes in what tcgetattr gives

    def waits_for_enter(descriptor: int) -> bool:
        return bool(termios.tcgetattr(descriptor)[local] & termios.ICANON)

    near, far = pty.openpty()
    before = signal.getsignal(signal.SIGCONT)
    try:
        cooked = termios.tcgetattr(far)
        with tapped_terminal(far, TappedInput(lambda: None)):
            assert not waits_for_enter(far)
            termios.tcsetattr(far, termios.TCSANOW, cooked)  # as a command line does to which the terminal falls back
            os.kill(os.getpid(), signal.SIGCONT)
            assert not waits_for_enter(far)
        assert waits_for_enter(far)
        assert signal.getsignal(signal.SIGCONT) == before
    finally:
        os.close(near)
        os.close(far)
