"""The application on a terminal that is none: half-typed text survives, a stop works at any moment, and in 50 ms."""

from __future__ import annotations

import asyncio
import io
import os
import sys
import threading
import time
from collections.abc import Awaitable, Callable
from functools import partial
from pathlib import Path
from typing import cast

import pytest
from prompt_toolkit.application import create_app_session
from prompt_toolkit.data_structures import Size
from prompt_toolkit.output import DummyOutput, Output
from prompt_toolkit.output.vt100 import Vt100_Output

from held_up import held_up_s
from ramprig.shell import commands as c
from ramprig.shell.hold import Hold
from ramprig.shell.keeper import NO_LINK
from ramprig.shell.live import Snapshot
from ramprig.shell.outbox import Outbox
from ramprig.shell.screen import Screen
from ramprig.shell.stopkeys import StopKey
from ramprig.shell.taps import TappedInput, tapping
from ramprig.shell.worker import Job, Worker
from shell_bench import BENCH

WAIT_S = 20.0
"""Longest a test waits for something that must come."""


class FakeWorker:
    """A worker without a session: keeps what is posted and when a stop came."""

    def __init__(self) -> None:
        self.snapshot = Snapshot(state="armed", known=True)
        self.posted: list[Job] = []
        self.stops: list[tuple[int, float]] = []
        self.busy = ""
        self.ended = False

    def post(self, command: c.Command, text: str) -> Job | None:
        if self.busy:
            return None
        job = Job(command, text)
        self.posted.append(job)
        return job

    def panic(self, category: int) -> bool:
        self.stops.append((category, time.monotonic()))
        return True


class Rig:
    """A screen with a fake worker; `send` types bytes as a terminal would."""

    def __init__(self, output: Output, history_file: Path | None = None) -> None:
        self.worker = FakeWorker()
        self.outbox = Outbox()
        self.stop_key = StopKey(self.worker)
        self.keys = TappedInput(self.stop_key.press)
        self.screen = Screen(
            BENCH,
            cast("Worker", self.worker),
            self.outbox,
            self.stop_key,
            keys=self.keys,
            output=output,
            history_file=history_file,
        )

    def send(self, data: bytes) -> None:
        """From the tap."""
        self.keys.take(data)

    def stopped_more_than(self, count: int) -> bool:
        """Whether more stops than these have come."""
        return len(self.worker.stops) > count

    def emptied_after(self, lines: int) -> bool:
        """Whether so many lines were entered, and the last one has left nothing behind."""
        return not self.screen.buffer.text and len(self.screen.buffer.history.get_strings()) == lines

    async def until(self, holds: Callable[[], object]) -> None:
        """Wait for something that must come."""
        bound_s = time.monotonic() + WAIT_S
        while not holds():
            assert time.monotonic() < bound_s, "it did not come"
            await asyncio.sleep(0.005)


def run(
    story: Callable[[Rig], Awaitable[None]], *, output: Output | None = None, history_file: Path | None = None
) -> Rig:
    """Run a screen while `story` is told; it is left at the end."""
    out = DummyOutput() if output is None else output
    rigs: list[Rig] = []

    async def both() -> None:
        rig = Rig(out, history_file)
        rigs.append(rig)
        shown = asyncio.ensure_future(rig.screen.run())
        await rig.until(lambda: rig.screen.app.is_running)
        try:
            await story(rig)
        finally:
            rig.screen._leave()
            await asyncio.wait_for(shown, WAIT_S)

    with create_app_session(output=out):
        asyncio.run(both())
    return rigs[0]


def test_a_line_becomes_a_command() -> None:
    async def story(rig: Rig) -> None:
        rig.send(b"ramp vent 10 %\r")
        await rig.until(lambda: rig.worker.posted)

    rig = run(story)
    assert rig.worker.posted[0].command == c.RampTo(BENCH.motor("vent"), 1000)


def test_tab_completes_at_once() -> None:
    async def story(rig: Rig) -> None:
        rig.send(b"ra\tve\t5 \t\r")
        await rig.until(lambda: rig.worker.posted)

    assert run(story).worker.posted[0].text == "ramp vent 5 %"


def test_a_refused_line_stays_in_the_history(tmp_path: Path) -> None:
    history = tmp_path / "history"

    async def story(rig: Rig) -> None:
        rig.send(b"jgo vent\r")
        await rig.until(lambda: history.exists() and len(rig.screen.buffer._working_lines) > 1)
        rig.send(b"\x1b[A")
        await rig.until(lambda: rig.screen.buffer.text)
        assert rig.screen.buffer.text == "jgo vent"

    rig = run(story, history_file=history)
    assert rig.worker.posted == []
    assert "+jgo vent" in history.read_text("utf-8")


def test_a_history_that_cannot_be_kept_is_told_once_and_no_line_is_done_twice(tmp_path: Path) -> None:
    seen = io.StringIO()

    async def story(rig: Rig) -> None:
        for at, line in enumerate(("arm", "who", "state")):
            rig.send(line.encode() + b"\r")
            await rig.until(partial(rig.emptied_after, at + 1))
        await rig.until(lambda: "typed lines are kept for this shell only" in seen.getvalue())

    size = Size(rows=30, columns=150)
    rig = run(story, output=Vt100_Output(seen, lambda: size), history_file=tmp_path)  # a folder takes no lines
    assert [job.text for job in rig.worker.posted] == ["arm", "who", "state"]
    assert seen.getvalue().count("typed lines are kept") == 1


def test_several_pasted_lines_are_refused_as_one() -> None:
    async def story(rig: Rig) -> None:
        rig.send(b"\x1b[200~arm\njog vent 20 % for 1 s\n\x1b[201~\r")
        await rig.until(lambda: not rig.screen.buffer.text and rig.screen.buffer.history.get_strings())

    assert run(story).worker.posted == []


@pytest.mark.parametrize("text", ["x" * 10_000, "\n".join(["jog vent 5 % for 1 s"] * 400)])
def test_a_paste_that_is_refused_does_not_fill_the_screen(text: str) -> None:
    seen = io.StringIO()

    async def story(rig: Rig) -> None:
        said: list[str] = []
        take = rig.outbox.take
        rig.outbox.take = lambda: said.extend(new := take()) or new  # type: ignore[method-assign, func-returns-value]
        rig.send(b"\x1b[200~" + text.encode() + b"\x1b[201~\r")
        await rig.until(lambda: any("at most 400 are read" in line or "pasted at once" in line for line in said))
        assert sum(map(len, said)) < 400

    size = Size(rows=30, columns=100)
    run(story, output=Vt100_Output(seen, lambda: size))


def test_a_line_typed_while_another_is_under_way_is_refused() -> None:
    async def story(rig: Rig) -> None:
        rig.worker.busy = "wait 1 h"
        rig.send(b"arm\r")
        await rig.until(lambda: rig.screen.buffer.history.get_strings())
        rig.send(b"stop\r")
        await rig.until(lambda: rig.worker.stops)

    rig = run(story)
    assert rig.worker.posted == []
    assert [category for category, _ in rig.worker.stops] == [1]


@pytest.mark.parametrize(
    ("keys", "categories"),
    [
        (b"\x03", [1]),
        (b"\x1c", [1]),
        (b"\x1b[24~", [1]),
        (b"\x03\x03", [1, 0]),
        (b"half\x11\x03", [1]),  # after quoted insert
        (b"\x12jo\x03", [1]),  # in a search
        (b"\x1b[200~half a paste\x03", [1]),
        (b"\x18\x03", [1]),  # after a prefix key
    ],
)
def test_a_stop_key_stops_at_any_moment(keys: bytes, categories: list[int]) -> None:
    async def story(rig: Rig) -> None:
        rig.send(keys)
        await rig.until(lambda: len(rig.worker.stops) == len(categories))
        rig.send(b"\x07\x15who\r")  # leave a search, empty the line: the keyboard still works
        await rig.until(lambda: rig.worker.posted)

    rig = run(story)
    assert [category for category, _ in rig.worker.stops] == categories


@pytest.mark.parametrize("keys", [b"stop\r", b"cut\r", b"\x03", b"\x1c"])
def test_a_stop_that_cannot_be_sent_is_never_met_with_silence(keys: bytes) -> None:
    seen = io.StringIO()

    async def story(rig: Rig) -> None:
        rig.worker.snapshot = Snapshot(state=NO_LINK)
        rig.send(keys)
        await rig.until(lambda: "NOT SENT: there is no link to the board" in seen.getvalue())

    size = Size(rows=30, columns=150)
    assert len(run(story, output=Vt100_Output(seen, lambda: size)).worker.stops) == 1


def test_half_typed_text_survives_a_stop_and_a_flood() -> None:
    async def story(rig: Rig) -> None:
        rig.send(b"ramp ve")
        await rig.until(lambda: rig.screen.buffer.text == "ramp ve")
        for number in range(300):
            rig.outbox.say(f"event {number}")
        rig.send(b"\x03")
        await rig.until(lambda: not rig.outbox.take())
        assert rig.screen.buffer.text == "ramp ve"
        rig.send(b"nt 1 %\r")
        await rig.until(lambda: rig.worker.posted)

    assert run(story).worker.posted[0].text == "ramp vent 1 %"


def test_arrow_keys_jog_and_other_keys_stop() -> None:
    async def story(rig: Rig) -> None:
        rig.send(b"jog vent\r")
        await rig.until(lambda: rig.screen._hold)
        (job,) = rig.worker.posted
        assert isinstance(job.command, c.JogHold)
        hold = job.command.hold
        assert isinstance(hold, Hold)
        rig.send(b"\x1b[A\x1b[C")
        await rig.until(lambda: hold.wanted(time.monotonic()) == 1100)
        rig.send(b"x")
        await rig.until(lambda: hold.wanted(time.monotonic()) == 0)
        rig.send(b"\x1b[D")
        await rig.until(lambda: hold.wanted(time.monotonic()) == -1100)
        rig.send(b"q")
        await rig.until(lambda: hold.left)
        job.done.set()
        await rig.until(lambda: rig.screen._hold is None)
        assert rig.screen.buffer.text == ""

    run(story)


@pytest.mark.parametrize(
    "key",
    [
        b"x",
        b" ",
        b"\r",
        b"\n",
        b"\t",
        b"\x7f",
        b"\x01",
        b"\x1a",
        b"\x12",
        b"\x1b[3~",
        b"\x1b[H",
        b"\x1b[200~up\x1b[201~",
    ],
)
def test_each_key_that_jogs_nothing_stops_and_leaves_the_line_empty(key: bytes) -> None:
    async def story(rig: Rig) -> None:
        rig.send(b"jog vent\r")
        await rig.until(lambda: rig.screen._hold)
        hold = rig.screen._hold
        assert hold is not None
        rig.screen._now = lambda: 0.0  # so that no time passes after which the key would count as let go anyway
        rig.send(b"\x1b[C")
        await rig.until(lambda: hold.wanted(0.0))
        rig.send(key)
        await rig.until(lambda: not hold.wanted(0.0))
        assert rig.screen.buffer.text == ""

    run(story)


def test_what_a_terminal_answers_by_itself_stops_no_jog() -> None:
    """It tells where its cursor is, when it is asked at a redraw, among the keys."""

    async def story(rig: Rig) -> None:
        rig.send(b"jog vent\r")
        await rig.until(lambda: rig.screen._hold)
        hold = rig.screen._hold
        assert hold is not None
        rig.screen._now = lambda: 0.0
        rig.send(b"\x1b[C\x1b[12;1R\x1b[A")
        await rig.until(lambda: hold.duty == 1100)
        assert hold.wanted(0.0) == 1100

    run(story)


def test_control_z_types_nothing_and_says_why() -> None:
    seen = io.StringIO()

    async def story(rig: Rig) -> None:
        rig.send(b"ar\x1am\r")
        await rig.until(lambda: rig.worker.posted)
        await rig.until(lambda: "Ctrl-Z does nothing here" in seen.getvalue())

    size = Size(rows=30, columns=100)
    assert run(story, output=Vt100_Output(seen, lambda: size)).worker.posted[0].command == c.Arm()


def test_a_lone_escape_leaves_the_jog() -> None:
    async def story(rig: Rig) -> None:
        rig.send(b"jog vent\r")
        await rig.until(lambda: rig.screen._hold)
        command = rig.worker.posted[0].command
        assert isinstance(command, c.JogHold)
        hold = command.hold
        assert hold is not None
        rig.send(b"\x1b")
        await rig.until(lambda: hold.left)

    run(story)


def test_control_d_leaves_on_an_empty_line_only() -> None:
    async def story(rig: Rig) -> None:
        rig.send(b"x\x04")
        await rig.until(lambda: rig.screen.buffer.text == "x")
        assert rig.screen.app.is_running
        rig.send(b"\x08\x04")
        await rig.until(lambda: not rig.screen.app.is_running)

    run(story)


def test_a_handler_that_raises_leaves_the_stop_alive() -> None:
    async def story(rig: Rig) -> None:
        rig.worker.post = None  # type: ignore[assignment]  # calling it raises inside a key handler
        asyncio.get_running_loop().set_exception_handler(lambda loop, context: None)
        rig.send(b"who\r")
        await rig.until(lambda: not rig.keys.read_keys())
        rig.send(b"\x03")
        await rig.until(lambda: rig.worker.stops)

    assert len(run(story).worker.stops) == 1


class Screenful(io.StringIO):
    """A terminal that answers when it is asked where the cursor is."""

    def isatty(self) -> bool:
        return True


def test_what_is_drawn_has_the_prompt_the_state_and_what_was_said() -> None:
    drawn = Screenful()
    output = Vt100_Output(drawn, lambda: Size(rows=24, columns=100), term="xterm")
    answers: list[Rig] = []

    def answer() -> None:
        if answers:
            answers[0].send(b"\x1b[1;1R")

    output.ask_for_cpr = answer  # type: ignore[method-assign]  # the terminal's part of the conversation

    async def story(rig: Rig) -> None:
        answers.append(rig)
        answer()
        rig.outbox.say("something happened \x1b[31m")
        await rig.until(lambda: "something happened" in drawn.getvalue() and "last trip: none" in drawn.getvalue())

    run(story, output=output)
    assert "armed>" in drawn.getvalue()
    assert "\x1b[31m" not in drawn.getvalue()


@pytest.mark.process
@pytest.mark.skipif(sys.platform == "win32", reason="selects on a pipe")
def test_a_stop_reaches_the_wire_within_50_ms_under_a_flood_of_output() -> None:
    """From the byte of Ctrl-C on a file descriptor to the urgent write, with lines said as fast as they can be."""
    reader, writer = os.pipe()
    latencies_s: list[float] = []
    over = threading.Event()

    async def story(rig: Rig) -> None:
        def flood() -> None:
            number = 0
            while not over.wait(0.0002):
                number += 1
                rig.outbox.say(f"event {number} " + "x" * 60)

        thread = threading.Thread(target=flood)
        with tapping(reader, rig.keys):
            thread.start()
            for _ in range(20):
                await asyncio.sleep(0.02)
                count, held_s = len(rig.worker.stops), held_up_s()
                sent_s = time.monotonic()
                os.write(writer, b"\x1b[200~" * 3 + b"\x03")
                await rig.until(partial(rig.stopped_more_than, count))
                latencies_s.append(rig.worker.stops[-1][1] - sent_s - (held_up_s() - held_s))
            over.set()
            thread.join()

    drawn = Screenful()
    output = Vt100_Output(drawn, lambda: Size(rows=24, columns=100), term="xterm", enable_cpr=False)
    run(story, output=output)
    os.close(reader)
    os.close(writer)
    assert "event" in drawn.getvalue()
    assert max(latencies_s) < 0.05, sorted(latencies_s)
