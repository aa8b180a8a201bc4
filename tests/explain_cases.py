"""Seeded faults on the mock, each with the cause that is true: run in virtual time, recorded, and read back."""

from __future__ import annotations

import random
import re
from collections.abc import Callable
from contextlib import AbstractContextManager, nullcontext
from dataclasses import dataclass
from pathlib import Path

from ramprig.bench import Bench, bench_of_text
from ramprig.mock.device import MockDevice
from ramprig.mock.from_bench import setup_of_bench
from ramprig.mock.port import MockPort
from ramprig.report.explain import Explanation, explain_folder
from ramprig.sequence.executive import Progress
from ramprig.sequence.reading import read_sequence
from ramprig.sequence.running import RunResult, RunWish, run_sequence
from ramprig.session.session import Session
from sequence_rig import BENCH

Meddle = Callable[[Progress, MockDevice, MockPort, Session], None]
Random = random.Random


@dataclass(frozen=True)
class Case:
    """What is wrong: `truth` is the key of the cause that must come first.

    `faults` hold from the start, `later` from `at_s` of the run on. `change` alters the text of the bench file, and
    `real` is what the board's plant is made from where it differs from the file.
    """

    truth: str
    faults: tuple[str, ...] = ()
    later: tuple[str, ...] = ()
    at_s: float = 0.0
    duty: int = 60
    ramp_ms: int = 600
    hold_ms: int = 3000
    change: tuple[tuple[str, str], ...] = ()
    real: tuple[tuple[str, str], ...] = ()
    meddle: Meddle | None = None
    steps: str = ""


def changed(text: str, changes: tuple[tuple[str, str], ...]) -> str:
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new)
    return text


def _once(at_s: float, act: Callable[[MockDevice, MockPort, Session], None]) -> Meddle:
    done: list[bool] = []

    def meddle(now: Progress, device: MockDevice, port: MockPort, session: Session) -> None:
        if now.elapsed_s >= at_s and not done:
            done.append(True)
            act(device, port, session)

    return meddle


def _hang(seconds: float) -> Callable[[MockDevice, MockPort, Session], None]:
    """The program does nothing for so long while the board goes on, as when the system suspends it."""

    def act(device: MockDevice, port: MockPort, session: Session) -> None:
        del device, session
        until_s = port.clock.now() + seconds
        held = b""
        while until_s - port.clock.now() > 1e-6:
            held += port.read(until_s - port.clock.now())
        original = port.read
        rest = [held]

        def read(timeout_s: float) -> bytes:
            return rest.pop() if rest else original(timeout_s)

        port.read = read  # type: ignore[method-assign]  # what came meanwhile waits in the system's buffer

    return act


def _panic(device: MockDevice, port: MockPort, session: Session) -> None:
    del device, port
    session.panic(1)


def _break(device: MockDevice, port: MockPort, session: Session) -> None:
    del device, session
    port.send_break()


Change = tuple[str, str]

TIGHT: Change = ("current: {at most: 2.5 A, for: 5 ms}", "current: {at most: 950 mA, for: 5 ms}")
STEEP: Change = ("slew: 100 %/s", "slew: 2000 %/s")
QUICK_FALL: Change = ("fall: 200 %/s", "fall: 2000 %/s")
SHORT_HEAT: Change = ("time constant: 60 s", "time constant: 1 s")
RATED_LOW: Change = ("rated: {current: 900 mA", "rated: {current: 60 mA")
STICKY: tuple[Change, ...] = (
    ("stall: {duty: 15 %", "stall: {duty: 1 %"),
    ("breakaway friction: 2.2 mN m", "breakaway friction: 14 mN m"),
    ("running friction: 1.5 mN m", "running friction: 10 mN m"),
)
NO_SINK: tuple[Change, ...] = (("can sink: yes", "can sink: no"), ("fall: 200 %/s", "fall: 400 %/s"))
MANY = "\n".join(["- ramp: {motor: vent, to: 60 %, in: 700 ms}", "- ramp: {motor: vent, to: 40 %, in: 300 ms}"] * 6)


def allowed(least: str, most: str) -> Change:
    return "allowed: 9 V to 16 V", f"allowed: {least} V to {most} V"


def volts(value: str) -> Change:
    return "voltage: 12 V", f"voltage: {value} V"


def run_and_stop(duty: int, fall_ms: int) -> str:
    return (
        f"- ramp: {{motor: vent, to: {duty} %, in: 900 ms}}\n- hold: 1500 ms\n"
        f"- ramp: {{motor: vent, to: 0 %, in: {fall_ms} ms}}\n- hold: 2 s"
    )


@dataclass(frozen=True)
class Draw:
    """What is drawn at random for every case."""

    rng: Random
    duty: int
    ramp_ms: int
    at_s: float

    def lasting(self, truth: str, fault: str, *changes: Change) -> Case:
        return Case(truth, faults=(fault,), duty=self.duty, ramp_ms=self.ramp_ms, change=changes)

    def later(self, truth: str, fault: str, *, hold_ms: int = 3000) -> Case:
        return Case(truth, later=(fault,), at_s=self.at_s, duty=self.duty, ramp_ms=self.ramp_ms, hold_ms=hold_ms)

    def changed(self, truth: str, *changes: Change, real: tuple[Change, ...] = (), hold_ms: int = 3000) -> Case:
        return Case(truth, change=changes, real=real, duty=self.duty, ramp_ms=self.ramp_ms, hold_ms=hold_ms)

    def doing(self, truth: str, act: Callable[[MockDevice, MockPort, Session], None]) -> Case:
        return Case(truth, duty=self.duty, ramp_ms=self.ramp_ms, meddle=_once(self.at_s, act))

    def either(self, *choices: str) -> str:
        return self.rng.choice(choices)


def _inrush(draw: Draw) -> Case:
    duty = draw.rng.choice((60, 65, 70)) * draw.rng.choice((1, -1))
    return Case("inrush", change=(TIGHT, STEEP), duty=duty, ramp_ms=draw.rng.choice((50, 60, 80)))


def _dead_band(draw: Draw) -> Case:
    return Case("dead_band", change=STICKY, duty=draw.rng.choice((6, 8, 10, 12)) * draw.rng.choice((1, -1)))


def _overspeed(draw: Draw) -> Case:
    limit = ("      duty: 80 %", f"      speed: {draw.either('20', '25', '30')} rpm\n      duty: 80 %")
    return Case("limit_low", change=(limit,), duty=draw.rng.choice((60, 65, 70)), ramp_ms=900)


def _regeneration(draw: Draw) -> Case:
    change = (*NO_SINK, allowed("9", draw.either("12.6", "12.8", "13")))
    return Case("regeneration", change=change, steps=run_and_stop(75, 200))


def _sag(draw: Draw) -> Case:
    change = (("slew: 100 %/s", "slew: 1000 %/s"), ("voltage: 12 V\n", "voltage: 12 V\n  trip after: 2 ms\n"))
    fault = f"weak_supply={draw.rng.randrange(90, 160)}"
    return Case("sag", faults=(fault,), change=change, duty=draw.duty, ramp_ms=80)


def _noise(draw: Draw) -> Case:
    rate = 10 ** draw.rng.uniform(-1.6, -0.8)
    return draw.later("noise", f"{draw.either('bit_errors', 'dropped_bytes')}={rate:.3g}")


def _hang_late(draw: Draw) -> Case:
    act = _once(draw.at_s, _hang(draw.rng.uniform(1.6, 3.0)))
    return Case("host_hung", change=(("lease: 500 ms", "lease: 4 s"),), steps=MANY, meddle=act)


MAKERS: dict[str, Callable[[Draw], Case]] = {
    "jam": lambda draw: draw.later("jam", "jammed_shaft"),
    "held": lambda draw: draw.lasting("held", "jammed_shaft"),
    "encoder_dead": lambda draw: draw.lasting("encoder_dead", "encoder_dead"),
    "encoder_dies": lambda draw: draw.later("encoder_dead", "encoder_dead"),
    "one_channel": lambda draw: draw.lasting("one_channel", "one_channel"),
    "open_lead": lambda draw: draw.lasting("open_lead", "lead_open"),
    "lead_comes_off": lambda draw: draw.later("open_lead", "lead_open", hold_ms=8000),
    "leads": lambda draw: draw.lasting("swapped", "leads_swapped"),
    "phases": lambda draw: draw.lasting("swapped", "phases_swapped"),
    "exchanged": lambda draw: draw.lasting("encoders_exchanged", "encoders_exchanged"),
    "sensor": lambda draw: draw.lasting("current_sensor", f"current_offset={draw.rng.randrange(2600, 4000)}"),
    "sensor_overload": lambda draw: draw.lasting(
        "current_sensor", f"current_offset={draw.rng.randrange(1000, 1800)}", SHORT_HEAT
    ),
    "overload": lambda draw: draw.changed("overload", RATED_LOW, SHORT_HEAT, hold_ms=6000),
    "inrush": _inrush,
    "braking": lambda draw: Case("braking", change=(TIGHT, QUICK_FALL), steps=run_and_stop(abs(draw.duty), 40)),
    "dead_band": _dead_band,
    "overspeed": _overspeed,
    "regeneration": _regeneration,
    "supply_high": lambda draw: draw.changed(
        "supply_high", allowed("9", "13"), real=(volts(draw.either("13.2", "13.6", "14")),)
    ),
    "supply_low": lambda draw: draw.changed("supply_low", real=(volts(draw.either("6", "7.5", "8.6")),)),
    "sag": _sag,
    "brownout": lambda draw: draw.lasting("brownout", f"brownout_on_start={draw.rng.randrange(3, 60)}"),
    "unplug": lambda draw: draw.later("unplugged", "unplug"),
    "deaf": lambda draw: draw.later("silent", "deaf"),
    "noise": _noise,
    "hang": lambda draw: draw.doing("host_hung", _hang(draw.rng.uniform(0.8, 3.0))),
    "hang_late": _hang_late,
    "line_break": lambda draw: draw.doing("line_break", _break),
    "user": lambda draw: draw.doing("user", _panic),
    "other_board": lambda draw: draw.later("other_board", "second_board"),
}
"""A case of each kind, its strengths drawn at random."""


def case_of(kind: str, rng: Random) -> Case:
    """A case of this kind with duty, times and strengths drawn at random."""
    duty = rng.randrange(40, 75, 5) * rng.choice((1, -1))
    ramp_ms = max(rng.randrange(400, 900, 100), abs(duty) * 10 + 10)
    return MAKERS[kind](Draw(rng, duty, ramp_ms, rng.uniform(1.4, 2.6)))


def run_case(folder: Path, case: Case, *, seed: int) -> tuple[RunResult, Explanation | None]:
    """Run it, and have the run folder explained."""
    folder.mkdir(parents=True, exist_ok=True)
    text = changed(BENCH, case.change)
    bench = bench_of_text(text, "bench.yaml")
    device = MockDevice(setup_of_bench(_real(text, case), faults=case.faults), seed=seed)
    port = MockPort(device, pace="virtual", seed=seed)
    path = folder / "s.yaml"
    path.write_text(f"sequence: t\nlog: {{period: 10 ms}}\nsteps:\n{_indented(case)}\n", encoding="utf-8")
    later = _once(case.at_s, lambda device, port, session: device.faults.set_all(case.later)) if case.later else None
    sessions: list[Session] = []

    def progress(now: Progress) -> None:
        for meddle in (later, case.meddle):
            if meddle is not None:
                meddle(now, device, port, sessions[0])

    def guard(session: Session) -> AbstractContextManager[object]:
        sessions.append(session)
        return nullcontext()

    wish = RunWish(sequence=read_sequence(path), bench=bench, runs=folder / "runs", virtual=True, seed=seed)
    result = run_sequence(wish, port, progress=progress, guard=guard)
    assert result.folder is not None
    return result, explain_folder(result.folder)


def _real(text: str, case: Case) -> Bench:
    """The bench as it really is."""
    if not case.real:
        return bench_of_text(text, "bench.yaml")
    wide = re.sub(r"allowed: .*", "allowed: 5 V to 20 V", changed(text, case.real))
    return bench_of_text(wide, "bench.yaml")


def _indented(case: Case) -> str:
    steps = case.steps or (
        f"- hold: 400 ms\n- ramp: {{motor: vent, to: {case.duty} %, in: {case.ramp_ms} ms}}\n- hold: {case.hold_ms} ms"
    )
    return "\n".join("  " + line for line in steps.splitlines())
