"""Status lines, prompt, outbox and cautions: what is seen, at any width, by text alone."""

from __future__ import annotations

import threading

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ramprig.cautions import CAUTIONS, cautions_lines
from ramprig.shell.live import MotorLive, ServoLive, Snapshot
from ramprig.shell.outbox import Outbox
from ramprig.shell.statusline import LINES_MAX, prompt_of, segments, status_lines

FULL = Snapshot(
    state="tripped",
    known=True,
    motors=(MotorLive(name="vent", duty=-2000, rpm=-12.34, turns=1.256, current_ma=350),),
    servos=(ServoLive("latch", 20.04), ServoLive("flap")),
    supply_mv=12_050,
    round_trip_s=0.0065,
    lost_lines=3,
    log="120 rows",
    last_trip="stall",
    doing="jog vent 20 % for 1 s",
)


def test_everything_that_is_known_is_told() -> None:
    assert segments(FULL) == [
        "TRIPPED",
        "vent -20.0 %  -12.3 rpm  350 mA  1.26 turns",
        "latch 20 deg commanded",
        "flap no pulses",
        "supply 12.05 V",
        "link 6.5 ms, 3 lines lost",
        "log 120 rows",
        "last trip: stall",
        "doing: jog vent 20 % for 1 s",
    ]


def test_what_is_not_measured_is_not_shown() -> None:
    bare = Snapshot(state="off", known=True, motors=(MotorLive(name="vent", duty=0),))
    assert segments(bare) == ["off", "vent +0.0 %", "link 0 s, 0 lines lost", "last trip: none"]


@pytest.mark.parametrize(
    ("state", "prompt"),
    [("off", "off> "), ("armed", "armed> "), ("tripped", "TRIPPED> "), ("no link", "no link> ")],
)
def test_the_prompt_tells_the_state_by_its_text(state: str, prompt: str) -> None:
    assert prompt_of(Snapshot(state=state)) == prompt


@given(st.integers(0, 300))
def test_status_lines_never_pass_the_width_or_their_number(width: int) -> None:
    lines = status_lines(FULL, width)
    assert 1 <= len(lines) <= LINES_MAX
    assert all(len(line) <= width for line in lines)


def test_what_is_said_too_fast_is_dropped_and_counted() -> None:
    outbox = Outbox(lines_max=3)
    for number in range(5):
        outbox.say(f"line {number}")
    outbox.say("a\nb")
    lines = outbox.take()
    assert lines[0].startswith("(4 lines were dropped")
    assert lines[1:] == ["line 4", "a", "b"]
    assert outbox.take() == []


def test_a_closed_outbox_ends_every_wait() -> None:
    outbox = Outbox()
    done = threading.Event()

    def wait() -> None:
        outbox.wait(60.0)
        done.set()

    thread = threading.Thread(target=wait)
    thread.start()
    outbox.close()
    assert done.wait(10.0)
    thread.join()


def test_the_cautions_name_each_thing_and_fit_the_width() -> None:
    text = " ".join(CAUTIONS).lower()
    for word in ("guard", "fuse", "power cut", "not an emergency stop", "not a safety function", "qualified people"):
        assert word in text
    for width in (40, 80, 120):
        assert all(len(line) <= width for line in cautions_lines(width))
