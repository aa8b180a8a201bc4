"""Random sessions for two devices that must answer alike, tick for tick: how one is made, run, compared and cut down.

A session is plain data: a board, its first limits, and steps. `*` in a line stands for the digest that the first device
has then, `@5` for the tick five later than the one under way.
"""

from __future__ import annotations

import random
import re
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field, replace
from typing import Protocol

from ramprig_link.check import seal
from ramprig_link.words import CHANNELS, HORIZON_TICKS, LIMITS, NOTICES, WORDS, Limit, Per
from scripted_device import TICKS, Device, InputsScript, Rule, ScriptedDevice

AFTER_TICKS = 5
"""Ticks that a session goes on after its last step."""

# None measures a temperature: RUN-2 leaves it open when that is read.
BOARDS: dict[str, Device] = {
    "plain": {
        "firmware": "1.0.0", "board": "vent-rig", "serial": "A0042", "boot": 7, "cause": "power", "self_test": 0,
        "start_tick": 0, "tick_us": 1000, "axes": 1, "servos": 1, "max_duty": 10000, "queue": 16, "trail": 32,
        "keep": 4, "caps": 55,
    },
    "double": {
        "firmware": "core", "board": "two", "serial": "x", "boot": 1, "cause": "brownout", "self_test": 0,
        "start_tick": TICKS - 150, "tick_us": 700, "axes": 2, "servos": 2, "max_duty": 7000, "queue": 8, "trail": 64,
        "keep": 2, "caps": 55,
    },
    "bare": {
        "firmware": "1", "board": "b", "serial": "s", "boot": 4294967295, "cause": "software", "self_test": 0,
        "start_tick": 31, "tick_us": 2000, "axes": 1, "servos": 0, "max_duty": 9000, "queue": 8, "trail": 32, "keep": 0,
        "caps": 3,
    },
}  # fmt: skip


@dataclass(frozen=True)
class Step:
    """After `gap` ticks: one `line` (its check added), `raw` bytes, a `BREAK`, or other inputs."""

    gap: int
    line: str | None = None
    raw: bytes = b""
    broken: bool = False
    inputs: InputsScript = field(default_factory=InputsScript)


@dataclass(frozen=True)
class Session:
    """A board of `BOARDS`, limits over the defaults, and what is done to it."""

    board: str
    limits: dict[str, int]
    steps: tuple[Step, ...]


class Agreed(Protocol):
    """A device that a session can be played on: `ScriptedDevice`, `CoreDevice`."""

    tick: int

    def change(self, inputs: InputsScript) -> None: ...
    def send_raw(self, text: str) -> None: ...
    def send_break(self) -> None: ...
    def step(self) -> list[str]: ...


Maker = Callable[[Device, dict[str, int], InputsScript], Agreed]


# ---- playing ---------------------------------------------------------------------------------------------------------


def first_difference(session: Session, other: Maker) -> str | None:
    """What another device did otherwise than the mock's controller, None where all lines of all ticks are equal."""
    board = BOARDS[session.board]
    mock = ScriptedDevice(board, session.limits, {})
    core = other(board, session.limits, {})
    for step in (*session.steps, Step(AFTER_TICKS)):
        for _ in range(step.gap):
            tick = mock.tick
            ours, theirs = mock.step(), core.step()
            if ours != theirs:
                return f"tick {tick}: the mock says {ours}, the other {theirs}"
        data = step.raw
        if step.line is not None:
            data = seal(resolved(step.line, mock).encode("latin-1"))
        for device in (mock, core):
            device.change(step.inputs)
            device.send_raw(data.decode("latin-1"))
            if step.broken:
                device.send_break()
    return None


def resolved(line: str, mock: ScriptedDevice) -> str:
    line = line.replace("*", mock.controller.limits.digest())
    return re.sub(r"@(-?\d+)", lambda match: str((mock.tick + int(match[1])) % TICKS), line)


def cut_down(session: Session, other: Maker) -> Session:
    """The session without the steps that its first difference does not need."""
    at = 0
    while at < len(session.steps):
        steps = list(session.steps)
        gone = steps.pop(at)
        later = [replace(step, gap=step.gap + (gone.gap if i == 0 else 0)) for i, step in enumerate(steps[at:])]
        for tail in (steps[at:], later):
            shorter = replace(session, steps=(*steps[:at], *tail))
            if first_difference(shorter, other) is not None:
                session = shorter
                break
        else:
            at += 1
    return session


def check(session: Session, other: Maker) -> None:
    """Fail with the shortest session found, and the difference, where the two do not agree."""
    if first_difference(session, other) is not None:
        short = cut_down(session, other)
        steps = "\n".join(f"    {step}" for step in short.steps)
        raise AssertionError(f"board {short.board}, {short.limits}:\n{steps}\n{first_difference(short, other)}")


# ---- making ----------------------------------------------------------------------------------------------------------


def make_session(drawn: random.Random, *, steps: int = 20) -> Session:
    """A random session: mostly a host that gets something done, with all else a line may carry mixed in."""
    name = drawn.choice(["plain", "plain", "double", "bare"])
    maker = SessionMaker(drawn, BOARDS[name])
    return Session(board=name, limits=maker.limits(), steps=tuple(maker.steps(steps)))


class SessionMaker:
    """Draws the parts of one session."""

    def __init__(self, drawn: random.Random, board: Device) -> None:
        self.drawn = drawn
        self.board = board
        self.tag = 0
        self.last = "00 who"
        self.wild = drawn.choice(["", "", "", "counts", "counts", "current", "supply", "all"])
        """What does not do as it is told: were it always all, most sessions would spend their time tripped."""

    def limits(self) -> dict[str, int]:
        """Limits that make something happen within some hundred ticks."""
        drawn = self.drawn
        chosen = {
            "lease_ms": 5000, "stop_ticks": drawn.choice([1, 5, 40, 500]), "supply_ticks": drawn.choice([1, 3]),
            "dwell_ticks": drawn.choice([1, 4, 30]), "still_ticks": drawn.choice([1, 3, 20]),
            "still_counts": drawn.choice([0, 2, 50]), "slew_up_duty": drawn.choice([1, 20, 300, 10000]),
            "slew_down_duty": drawn.choice([1, 40, 500, 10000]), "ceiling_duty": drawn.choice([0, 50, 3000, 7000]),
            "trip_ticks": drawn.choice([1, 3]), "stall_ticks": drawn.choice([1, 7, 60]),
            "stall_duty": drawn.choice([0, 1, 1500]), "stall_counts": drawn.choice([1, 4, 30]),
            "wrong_counts": drawn.choice([1, 24]), "speed_counts": drawn.choice([0, 1, 400]),
            "rated_ma": drawn.choice([0, 1, 800]), "thermal_s": drawn.choice([1, 60]),
            "offset_ma": drawn.choice([0, -40, 5000]), "sense": drawn.choice([-1, 0, 1, 1]),
            "under_mv": drawn.choice([0, 9000]), "pulse_slew_ns": drawn.choice([1, 500, 40_000, 2_000_000]),
            "pulse_home_us": drawn.choice([400, 1500, 2000]),
        }  # fmt: skip
        if not self.wild:
            for name in ("trip_ticks", "stall_ticks", "wrong_counts", "speed_counts", "rated_ma", "offset_ma", "sense"):
                del chosen[name]
            chosen["under_mv"] = 0
        fitted = {Per.DEVICE: 1, Per.AXIS: self.board["axes"], Per.SERVO: self.board["servos"]}
        kept = {
            key: value
            for key, value in chosen.items()
            if fitted[LIMITS[key].per] and (key == "lease_ms" or drawn.random() < 0.6)
        }
        if "ceiling_duty" in kept:
            kept["ceiling_duty"] = min(kept["ceiling_duty"], self.board["max_duty"])
        return kept

    def steps(self, count: int) -> Iterator[Step]:
        drawn = self.drawn
        yield Step(drawn.choice([0, 1, 3]), line=f"{self.next_tag()} arm {drawn.choice([50, 300, 3000, 3000])} *")
        lines_in_tick = 1
        for _ in range(count):
            if drawn.random() < 0.2:
                yield Step(1, line=f"{self.next_tag()} clear")
                yield Step(1, line=f"{self.next_tag()} arm 3000 *")
                lines_in_tick = 1
            gap = drawn.choice([0, 1, 1, 1, 2, 3, 7, 15, 30] if drawn.random() < 0.97 else [120, 400])
            if lines_in_tick >= 3:  # KIND-4 and the room for notices are no part of an agreement
                gap = max(gap, 1)
            lines_in_tick = 1 if gap else lines_in_tick + 1
            yield replace(self.step(), gap=gap)

    def step(self) -> Step:
        draw = self.drawn.random()
        if draw < 0.7:
            return Step(0, line=self.request())
        if draw < 0.85:
            return Step(0, inputs=self.inputs())
        if draw < (0.87 if self.wild else 0.855):
            return Step(0, broken=True)
        return Step(0, raw=self.raw())

    def next_tag(self) -> str:
        if self.drawn.random() < 0.98:
            self.tag = (self.tag + 1) % 255
        return "ff" if self.drawn.random() < 0.03 else f"{self.tag:02x}"

    def request(self) -> str:
        """A line of a host: a new one, the last once more, or one with a wrong argument."""
        drawn = self.drawn
        if drawn.random() < 0.06:
            return self.last
        word = drawn.choice([*WORDS, "arm", *["ramp"] * 6, *["swing"] * 4, "rest", "log", "limit"])
        if drawn.random() < 0.02:
            word = drawn.choice(["", "halt", "Beat", "beat-", *NOTICES])
        arguments = self.arguments(word)
        if drawn.random() < 0.05:
            arguments = self.spoilt(arguments)
        tag = "ff" if word == "stop" and drawn.random() < 0.5 else self.next_tag()
        line = " ".join([tag, word, *arguments])
        if tag != "ff":
            self.last = line
        return line

    def spoilt(self, arguments: list[str]) -> list[str]:
        drawn = self.drawn
        wrong = drawn.choice(["", "-0", "01", "+1", "x", "4294967296", "-2147483649", "9" * 12, "1.0", "-"])
        if not arguments or drawn.random() < 0.4:
            return [*arguments, wrong] if drawn.random() < 0.7 else arguments[:-1]
        arguments[drawn.randrange(len(arguments))] = wrong
        return arguments

    def start(self) -> str:
        ahead = self.drawn.choice([1, 1, 2, 5, 20, 60, 60, 150])
        if self.drawn.random() < 0.04:
            ahead = self.drawn.choice([0, -1, -500, HORIZON_TICKS, HORIZON_TICKS + 1, 1 << 31])
        return f"@{ahead}"

    def ticks(self) -> str:
        usual = self.drawn.choice([0, 0, 1, 3, 17, 100])
        return str(self.drawn.choice([HORIZON_TICKS, HORIZON_TICKS + 1]) if self.drawn.random() < 0.03 else usual)

    def axis(self) -> str:
        return str(self.drawn.randrange(self.board["axes"] + (self.drawn.random() < 0.05)))

    def servo(self) -> str:
        return str(self.drawn.randrange(max(1, self.board["servos"] + (self.drawn.random() < 0.05))))

    def arguments(self, word: str) -> list[str]:
        drawn = self.drawn
        match word:
            case "arm":
                lease = drawn.choice([50, 300, 3000, 3000, 5000, 49, 5001])
                return [str(lease), "00000000" if drawn.random() < 0.05 else "*"]
            case "ramp":
                return [self.axis(), str(self.duty()), self.ticks(), self.start()]
            case "swing":
                pulse = drawn.choice([0, 0, 1100, 1499, 1500, 1501, 1700, 1900, 1099, 4294967])
                return [self.servo(), str(pulse), self.ticks() if pulse or drawn.random() < 0.1 else "0", self.start()]
            case "rest":
                return [self.axis(), drawn.choice(["coast", "brake"]), self.start()]
            case "stop":
                return [drawn.choice("011111112")]
            case "limit":
                return self.limit(drawn.choice(list(LIMITS.values())))
            case "log":
                return self.log()
            case "again":
                return [str(drawn.choice([0, 1, 2, 3, 4, 5, 255, 256, drawn.randrange(64)]))]
            case "trail":
                return [self.axis(), str(drawn.choice([0, 0, 1, 8, 31, 32, 63, 1 << 20]))]
            case _:
                return []

    def duty(self) -> int:
        usual = self.drawn.choice([0, 0, 1, -1, 40, -50, 900, -900, 3000, -3000, 2999])
        return self.drawn.choice([10_000, -10_001, 2147483647, -2147483648]) if self.drawn.random() < 0.05 else usual

    def limit(self, limit: Limit) -> list[str]:
        drawn = self.drawn
        fitted = {Per.DEVICE: 1, Per.AXIS: self.board["axes"], Per.SERVO: self.board["servos"]}[limit.per]
        at = [limit.name, str(drawn.randrange(fitted + 1) if drawn.random() < 0.1 else 0)]
        if drawn.random() < 0.2:
            return at
        near = [limit.default, limit.lowest, limit.highest, max(limit.lowest, limit.default // 2)]
        near += [min(limit.highest, limit.default + 1), drawn.randint(limit.lowest, limit.highest), limit.highest + 1]
        if limit.name in ("lease_ms", "under_mv"):  # else nothing lives long
            near = [limit.default, limit.default, *near]
        return [*at, str(drawn.choice(near))]

    def log(self) -> list[str]:
        drawn = self.drawn
        if drawn.random() < 0.15:
            return ["0", "0", "packed"] if drawn.random() < 0.8 else ["0", "7", "plain"]
        period = drawn.choice([1, 1, 1, 2, 5, 17, 65535, 65536])
        every = list(CHANNELS.values())
        bits = [channel.first_bit + drawn.randrange(2) * channel.step for channel in drawn.choices(every, k=4)]
        bits = [bit for bit in bits if self.has(bit) or drawn.random() < 0.03]
        return [str(period), str(sum(1 << bit for bit in set(bits))), drawn.choice(["packed", "packed", "plain"])]

    def has(self, bit: int) -> bool:
        if bit < 12:
            return bit // 3 < self.board["axes"]
        return bit - 12 < self.board["servos"] if bit < 16 else bit == 18 or (bit == 16 and self.board["caps"] == 55)

    def inputs(self) -> InputsScript:
        drawn, axes = self.drawn, self.board["axes"]
        follows: Rule = {"rule": "follows", "counts": 1, "per_duty": drawn.choice([20, 100])}
        given: InputsScript = {"counts": [follows] * axes}
        if self.wild in ("counts", "all"):
            given["counts"] = [self.rule() for _ in range(axes)]
        if self.wild in ("current", "all"):
            currents = [0, 240, -240, 1999, 2001, -2001, 900, 6000, 131_072, -200_000]
            given["current_ma"] = [drawn.choice(currents) for _ in range(axes)]
        if self.wild in ("supply", "all"):
            given["supply_mv"] = drawn.choice([12_000, 12_000, 8_999, 16_001, 0, 65_001, 200_000])
        return given

    def rule(self) -> Rule | int:
        drawn = self.drawn
        match drawn.randrange(4):
            case 0:
                return drawn.choice([0, 1, -1, 3, 2147483647, -2147483648, 100_000])
            case 1:
                return {"rule": "turns", "counts_per_tick": drawn.choice([0, 1, -1, 13, -40, 1 << 29])}
            case _:
                return {"rule": "follows", "counts": drawn.choice([1, 1, 1, -1]), "per_duty": drawn.choice([50, 400])}

    def raw(self) -> bytes:
        """Bytes that are no right line, or one of the bare words."""
        drawn = self.drawn
        right = seal(b"%02x beat" % self.tag)
        match drawn.randrange(9):
            case 0:
                return drawn.choice([b"stop\n", b"who\n", b"stop\r\n", b"who \n", b"Stop\n"])
            case 1:
                return drawn.randbytes(drawn.randrange(1, 30))
            case 2:
                at = drawn.randrange(len(right))
                return right[:at] + bytes([right[at] ^ 1 << drawn.randrange(8)]) + right[at + 1 :]
            case 3:
                return right[: drawn.randrange(len(right))]
            case 4:
                return b"x" * drawn.choice([78, 79, 80, 81, 200]) + drawn.choice([b"\n", b"\r\n", b""])
            case 5:
                return drawn.choice([b"\n", b"\r\n", b"\r", b"\n\n", b" \n", b"\0\n"])
            case 6:
                tag = b"%02x" % self.tag
                return drawn.choice([tag, *map(seal, (b"0g beat", b"01", b"01  beat", b"1 beat", b"01 beat "))])
            case 7:
                return seal(b"01 " + b"y" * drawn.choice([70, 71, 72, 73]))
            case _:
                return b"\n" + right
