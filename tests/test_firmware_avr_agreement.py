"""The firmware core and the ATmega328P's program agree, tick for tick, in random sessions.

The mock's controller plays each session first, which says what the sensors read; `test_firmware_agreement.py` holds
it and the core together. Here the core has the board's sizes of lines and records, so that data lines too are alike to
the letter.
"""

from __future__ import annotations

import random
from collections.abc import Iterator
from dataclasses import replace
from itertools import zip_longest
from pathlib import Path

import pytest

from agreement import Session, SessionMaker, Step, resolved
from avr_builds import WHY_NOT
from avr_scripted import (
    AFTER_TICKS,
    CURRENT_MA,
    MOST_BYTES,
    PAYLOAD,
    SUPPLY_MV,
    Inputs,
    Script,
    by_kind,
    changes,
    inputs_of,
    play,
)
from core_device import COMPILER, CoreDevice
from ramprig_link.check import seal
from scripted_device import InputsScript, ScriptedDevice
from test_vectors_exchanges import VECTORS

pytestmark = [
    pytest.mark.skipif(bool(WHY_NOT), reason=WHY_NOT),
    pytest.mark.skipif(COMPILER is None, reason="no C compiler: install gcc (Debian: apt-get install gcc)"),
    pytest.mark.process,
]

SESSIONS = 60
SOAK_SESSIONS = 2000
BATCH = 20
BOARD = VECTORS["device"]
WORST_FIELD = 8
"""In an answer to `counters`: tag, ok, tick, lines, garbled, overlong, overrun, repeats, worst_us."""
COUNTERS_FIELDS = 12


class BoardSessionMaker(SessionMaker):
    """Sessions for a board that carries out one request a tick and has sensors of 16 bits."""

    def steps(self, count: int) -> Iterator[Step]:
        trail = False
        for step in super().steps(count):
            least = 2 if trail else 1  # its answer is a long one, and a host waits for it
            trail = step.line is not None and " trail " in step.line
            raw = step.raw if step.raw.count(b"\n") < 2 else step.raw.lstrip(b"\n")  # it may end a line of before
            yield replace(step, gap=max(step.gap, least), raw=raw[-MOST_BYTES:])

    def inputs(self) -> InputsScript:
        given = super().inputs()
        if "current_ma" in given:
            given["current_ma"] = [max(-CURRENT_MA, min(CURRENT_MA, current)) for current in given["current_ma"]]
        if "supply_mv" in given:
            given["supply_mv"] = min(SUPPLY_MV, given["supply_mv"])
        return given

    def has(self, bit: int) -> bool:
        return bit in (0, 1, 2, 12, 16, 17, 18)


class AlikeCore(CoreDevice):
    """The core with the board's sizes of lines and records, which SPEC.md leaves to each board."""

    build_options: tuple[str, ...] = (
        f"-DRR_PAYLOAD={PAYLOAD}",
        "-DRR_TRAIL_COUNTS=uint16_t",
        "-DRR_TRAIL_CURRENT=int16_t",
        "-DRR_TRAIL_SUPPLY=uint16_t",
    )


def session_of(seed: int) -> Session:
    maker = BoardSessionMaker(random.Random(seed), BOARD)
    return Session(board="plain", limits=maker.limits(), steps=tuple(maker.steps(20)))


def script_of(session: Session) -> Script:
    """What is done before each tick, and what the sensors read: as the mock has it."""
    mock = ScriptedDevice(BOARD, session.limits, {})
    data: dict[int, bytes] = {}
    breaks = set()
    read: list[Inputs] = []
    for step in (*session.steps, Step(1 + AFTER_TICKS)):
        for _ in range(step.gap):
            mock.step()
            read.append(inputs_of(mock))
        sent = step.raw if step.line is None else seal(resolved(step.line, mock).encode("latin-1"))
        mock.change(step.inputs)
        mock.send_raw(sent.decode("latin-1"))
        if step.broken:
            mock.send_break()
            breaks.add(mock.tick)
        if sent:
            data[mock.tick] = sent
    return Script(BOARD, session.limits, mock.tick - AFTER_TICKS, data, frozenset(breaks), changes(read))


class BuggedCore(AlikeCore):
    """The same with the duty growing by twice the slew limit (`firmware_ref/core/seeded.h`)."""

    build_options = (*AlikeCore.build_options, "-DRR_SEEDED_BUG=2")


def play_core(script: Script, kind: type[CoreDevice]) -> list[str]:
    """All lines that the core makes."""
    core = kind(BOARD, script.limits, {})
    lines: list[str] = []
    for tick in range(script.ticks + AFTER_TICKS):
        if tick in script.inputs:
            counts, current_ma, supply_mv, temperature_dc = script.inputs[tick]
            rule: InputsScript = {"counts": [counts], "current_ma": [current_ma], "supply_mv": supply_mv}
            core.change({**rule, "temperature_dc": temperature_dc})
        core.send_raw(script.data.get(tick, b"").decode("latin-1"))
        if tick in script.breaks:
            core.send_break()
        lines += core.step()
    return lines


def without_worst(line: str, counters_tags: set[str]) -> str:
    """An answer to `counters` without the worst time of a tick, which only the board measures."""
    fields = line.split(" ")
    if fields[0] in counters_tags and fields[1] == "ok" and len(fields) == COUNTERS_FIELDS:
        fields[WORST_FIELD] = "*"
    return " ".join(fields)


def disagreement(seed: int, folder: Path, kind: type[CoreDevice] = AlikeCore) -> str:
    """Where core and board differ in a session; "" where they do not."""
    script = script_of(session_of(seed))
    tags = {data[:2].decode("latin-1") for data in script.data.values() if data[2:12] == b" counters "}
    made = by_kind(play(script, folder))
    for name, lines in by_kind(play_core(script, kind)).items():
        ours, theirs = [[without_worst(line, tags) for line in some] for some in (lines, made[name])]
        if ours != theirs:
            pairs = zip_longest(ours, theirs, fillvalue="nothing")
            core, board = next(pair for pair in pairs if pair[0] != pair[1])
            return f"seed {seed}: the core says {core}, the board {board}"
    return ""


@pytest.mark.parametrize("first", range(0, SESSIONS, BATCH))
def test_core_and_board_agree_on_random_sessions(first: int, tmp_path: Path) -> None:
    found = [text for seed in range(first, first + BATCH) if (text := disagreement(seed, tmp_path))]
    assert found == []


def test_a_bug_in_one_of_the_two_is_found(tmp_path: Path) -> None:
    assert any(disagreement(seed, tmp_path, BuggedCore) for seed in range(BATCH))


@pytest.mark.soak
@pytest.mark.parametrize("first", range(10_000, 10_000 + SOAK_SESSIONS, 10 * BATCH))
def test_core_and_board_agree_on_very_many_sessions(first: int, tmp_path: Path) -> None:
    found = [text for seed in range(first, first + 10 * BATCH) if (text := disagreement(seed, tmp_path))]
    assert found == []
