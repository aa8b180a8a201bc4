"""Seeded faults on the mock, each with the cause that is true: run in virtual time, recorded, and read back."""

from __future__ import annotations

import random
import re
from collections.abc import Callable
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


TIGHT = (("current: {at most: 2.5 A, for: 5 ms}", "current: {at most: 950 mA, for: 5 ms}"),)
STEEP = (*TIGHT, ("slew: 100 %/s", "slew: 2000 %/s"))
QUICK_FALL = (*TIGHT, ("fall: 200 %/s", "fall: 2000 %/s"))
MANY = "\n".join(["- ramp: {motor: vent, to: 60 %, in: 700 ms}", "- ramp: {motor: vent, to: 40 %, in: 300 ms}"] * 6)
NO_SINK = (("can sink: yes", "can sink: no"), ("fall: 200 %/s", "fall: 400 %/s"))


def case_of(kind: str, rng: Random) -> Case:
    """A case of this kind with duty, times and strengths drawn at random."""
    duty = rng.randrange(40, 75, 5) * rng.choice((1, -1))
    ramp_ms = rng.randrange(400, 900, 100)
    at_s = rng.uniform(1.4, 2.6)
    common = {"duty": duty, "ramp_ms": max(ramp_ms, abs(duty) * 10 + 10)}
    match kind:
        case "jam":
            return Case("jam", later=("jammed_shaft",), at_s=at_s, **common)
        case "held":
            return Case("held", faults=("jammed_shaft",), **common)
        case "encoder_dead":
            return Case("encoder_dead", faults=("encoder_dead",), **common)
        case "encoder_dies":
            return Case("encoder_dead", later=("encoder_dead",), at_s=at_s, **common)
        case "one_channel":
            return Case("one_channel", faults=("one_channel",), **common)
        case "open_lead":
            return Case("open_lead", faults=("lead_open",), **common)
        case "lead_comes_off":
            return Case("open_lead", later=("lead_open",), at_s=at_s, hold_ms=8000, **common)
        case "leads":
            return Case("swapped", faults=("leads_swapped",), **common)
        case "phases":
            return Case("swapped", faults=("phases_swapped",), **common)
        case "exchanged":
            return Case("encoders_exchanged", faults=("encoders_exchanged",), **common)
        case "sensor":
            return Case("current_sensor", faults=(f"current_offset={rng.randrange(2600, 4000)}",), **common)
        case "sensor_overload":
            slow = (("time constant: 60 s", "time constant: 1 s"),)
            return Case("current_sensor", faults=(f"current_offset={rng.randrange(1000, 1800)}",), change=slow,
                        **common)  # fmt: skip
        case "overload":
            rated = (("rated: {current: 900 mA", "rated: {current: 60 mA"), ("time constant: 60 s", "time constant: 1 s"))
            return Case("overload", change=rated, hold_ms=6000, **common)
        case "inrush":
            return Case("inrush", change=STEEP, duty=duty, ramp_ms=rng.choice((50, 60, 80)))
        case "dead_band":
            low = (("stall: {duty: 15 %", "stall: {duty: 1 %"), ("breakaway friction: 2.2 mN m", "breakaway friction: 14 mN m"),
                   ("running friction: 1.5 mN m", "running friction: 10 mN m"))  # fmt: skip
            return Case("dead_band", change=low, duty=rng.choice((6, 8, 10, 12)) * rng.choice((1, -1)))
        case "overspeed":
            low_rpm = rng.choice((20, 25, 30))
            limit = (("      duty: 80 %", f"      speed: {low_rpm} rpm\n      duty: 80 %"),)
            return Case("limit_low", change=limit, duty=rng.choice((60, 65, 70)), ramp_ms=900)
        case "regeneration":
            more = (("allowed: 9 V to 16 V", f"allowed: 9 V to {rng.choice(('12.6', '12.8', '13'))} V"),)
            steps = "- ramp: {motor: vent, to: 75 %, in: 900 ms}\n- hold: 1500 ms\n- ramp: {motor: vent, to: 0 %, in: 200 ms}\n- hold: 2 s"
            return Case("regeneration", change=(*NO_SINK, *more), steps=steps)
        case "supply_high":
            return Case("supply_high", change=(("allowed: 9 V to 16 V", "allowed: 9 V to 13 V"),),
                        real=(("voltage: 12 V", f"voltage: {rng.choice(('13.2', '13.6', '14'))} V"),), **common)  # fmt: skip
        case "supply_low":
            return Case("supply_low", real=(("voltage: 12 V", f"voltage: {rng.choice(('6', '7.5', '8.6'))} V"),), **common)
        case "sag":
            steep = (("slew: 100 %/s", "slew: 1000 %/s"), ("voltage: 12 V\n", "voltage: 12 V\n  trip after: 2 ms\n"))
            return Case("sag", faults=(f"weak_supply={rng.randrange(60, 140)}",), change=steep, duty=duty, ramp_ms=80)
        case "brownout":
            return Case("brownout", faults=(f"brownout_on_start={rng.randrange(3, 60)}",), **common)
        case "unplug":
            return Case("unplugged", later=("unplug",), at_s=at_s, **common)
        case "deaf":
            return Case("silent", later=("deaf",), at_s=at_s, **common)
        case "noise":
            rate = 10 ** rng.uniform(-1.6, -0.8)
            return Case("noise", later=(f"{rng.choice(('bit_errors', 'dropped_bytes'))}={rate:.3g}",), at_s=at_s,
                        **common)  # fmt: skip
        case "hang":
            return Case("host_hung", meddle=_once(at_s, _hang(rng.uniform(0.8, 3.0))), **common)
        case "hang_late":
            return Case("host_hung", change=(("lease: 500 ms", "lease: 4 s"),), steps=MANY,
                        meddle=_once(at_s, _hang(rng.uniform(1.6, 3.0))))  # fmt: skip
        case "braking":
            steps = f"- ramp: {{motor: vent, to: {abs(duty)} %, in: 900 ms}}\n- hold: 1500 ms\n- ramp: {{motor: vent, to: 0 %, in: 40 ms}}\n- hold: 2 s"
            return Case("braking", change=QUICK_FALL, steps=steps)
        case "line_break":
            return Case("line_break", meddle=_once(at_s, _break), **common)
        case "user":
            return Case("user", meddle=_once(at_s, _panic), **common)
        case "other_board":
            return Case("other_board", later=("second_board",), at_s=at_s, **common)
    raise AssertionError(kind)


KINDS = (
    *("jam", "held", "encoder_dead", "encoder_dies", "one_channel", "open_lead", "lead_comes_off", "leads", "phases"),
    *("exchanged", "sensor", "sensor_overload", "overload", "inrush", "dead_band", "overspeed", "regeneration"),
    *("supply_high", "supply_low", "sag", "brownout", "unplug", "deaf", "noise", "hang", "hang_late", "braking", "line_break", "user"),
    "other_board",
)


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

    def guard(session: Session) -> Session:
        sessions.append(session)
        from contextlib import nullcontext

        return nullcontext(session)  # type: ignore[return-value]  # run_sequence only enters and leaves it

    wish = RunWish(sequence=read_sequence(path), bench=bench, runs=folder / "runs", virtual=True, seed=seed)
    result = run_sequence(wish, port, progress=progress, guard=guard)  # type: ignore[arg-type]  # as above
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
