"""S1 to S7 hold for any requests and any readings, as a host sees it: SPEC S1, S2, S3, S4, S5, S6 and S7."""

from __future__ import annotations

import random
from collections.abc import Callable

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from mock_host import QUICK
from ramprig.accept.invariants import Key, Witness, digest_of
from ramprig.mock import Board, Controller, LimitStore, MockDevice, MockSetup, ScriptedInputs
from ramprig.mock.drive import Drive
from ramprig.mock.servos import ServoPulse
from ramprig_link.check import seal
from ramprig_link.messages import Request
from ramprig_link.words import LIMITS, Reason

MASK = Board().mask
ROOMY = Board(transmit_bytes=1 << 20)
LIVELY: dict[Key, int] = {**QUICK, ("lease_ms", 0): 150, ("trip_ma", 0): 2900, ("stall_ticks", 0): 120}

DUTIES = st.integers(-10000, 10000) | st.sampled_from((-6000, -3000, -100, 0, 100, 3000, 6000, 6001, -6001))
LIMIT_VALUES = st.one_of(
    [st.tuples(st.just(name), st.integers(row.lowest, row.highest)) for name, row in LIMITS.items()]
)
STEPS = st.one_of(
    st.tuples(st.just("ramp"), DUTIES, st.integers(0, 60), st.integers(-1, 40)),
    st.tuples(st.just("ramp"), DUTIES, st.integers(0, 60), st.integers(1, 10)),
    st.tuples(st.just("swing"), st.integers(1000, 2000) | st.just(0), st.integers(0, 40), st.integers(1, 20)),
    st.tuples(st.just("rest"), st.sampled_from(("coast", "brake")), st.integers(1, 20)),
    st.tuples(st.just("limit"), LIMIT_VALUES),
    st.tuples(st.sampled_from(("arm", "arm", "arm badly", "beat", "clear", "disarm", "state"))),
    st.tuples(st.sampled_from(("stop 0", "stop 1", "bare stop", "break", "repeat", "urgent"))),
    st.tuples(st.just("bytes"), st.binary(max_size=20)),
    st.tuples(st.just("wait"), st.integers(1, 150)),
    st.tuples(st.just("wait"), st.integers(1, 12)),
)


class Rig:
    """Something with ticks and bytes, the host of the random requests, and the witness."""

    def __init__(self, controller: Callable[[], Controller], tick: Callable[[], bytes], send: Callable[[bytes], None]):
        self._controller = controller
        self._tick = tick
        self._send = send
        store = controller().limits
        self.witness = Witness({key: store[key] for key in store})
        self._tag = 0
        self._line = b""
        self.ask(f"log 1 {MASK} packed")

    def ask(self, body: str) -> None:
        self._tag = (self._tag + 1) % 0xFF
        request = Request.of(self._tag, *_split(body))
        self._line = seal(request.body.encode("ascii"))
        self.witness.sent(request)
        self._send(self._line)
        self.run(1)

    def run(self, ticks: int) -> None:
        for _ in range(ticks):
            self.witness.received(self._tick())

    def step(self, step: tuple[object, ...]) -> None:
        controller = self._controller()
        tick = controller.age + 1
        match step:
            case ("ramp", duty, ticks, int(ahead)):
                self.ask(f"ramp 0 {duty} {ticks} {max(0, tick + ahead)}")
            case ("swing", pulse, int(ticks), int(ahead)):
                self.ask(f"swing 0 {pulse} {ticks if pulse else 0} {tick + ahead}")
            case ("rest", mode, int(ahead)):
                self.ask(f"rest 0 {mode} {tick + ahead}")
            case ("limit", (name, value)):
                self.ask(f"limit {name} 0 {value}")
            case ("arm",):
                store = controller.limits
                self.ask(f"arm {min(100, store['lease_ms', 0])} {store.digest()}")
            case ("arm badly",):
                self.ask("arm 100 00000000")
            case ("bare stop",):
                self._send(b"stop\n")
            case ("urgent",):
                self._send(b"\n" + seal(b"ff stop 1"))
            case ("break",):
                controller.line_break()
            case ("repeat",):
                self._send(self._line)
            case ("bytes", bytes(data)):
                self._send(data + b"\n")
            case ("wait", int(ticks)):
                self.run(ticks)
            case (str(body),):
                self.ask(body)

    def verdict(self) -> list[str]:
        self.run(300)
        return [str(violation) for violation in self.witness.judge()]


def _split(body: str) -> tuple[str, tuple[str, ...]]:
    word, *args = body.split(" ")
    return word, tuple(args)


def rig_of_plant(seed: int) -> Rig:
    device = MockDevice(MockSetup(board=ROOMY, limits=LIVELY, baud=0), seed=seed)

    def tick() -> bytes:
        device.tick()
        return device.transmit()

    def controller() -> Controller:
        assert device.controller is not None
        return device.controller

    return Rig(controller, tick, device.receive)


def rig_of_whims(seed: int) -> Rig:
    """Readings that wander at random, calm and wild by turns, and never follow the duty."""
    inputs = ScriptedInputs()
    controller = Controller(ROOMY, inputs, LimitStore(ROOMY, values=LIVELY))
    chance = random.Random(seed)
    pace = 1

    def tick() -> bytes:
        nonlocal pace
        if controller.age < 0:
            pace = 0
        elif chance.random() < 0.02:
            pace = chance.choice((0, 0, 1, 3, 40))
        inputs.counts[0] += chance.randint(-pace, pace) * (chance.random() < 0.3)
        if chance.random() < 0.01:
            inputs.set(current_ma=[chance.choice((0, 100, -2000, 3000))], supply_mv=chance.choice((12000, 12000, 7000)))
        controller.tick()
        return controller.take_output()

    return Rig(lambda: controller, tick, controller.receive)


@settings(max_examples=150, deadline=None)
@given(steps=st.lists(STEPS, min_size=5, max_size=40), seed=st.integers(0, 1000))
def test_any_requests_to_the_motor_leave_the_invariants_whole(steps: list[tuple[object, ...]], seed: int) -> None:
    rig = rig_of_plant(seed)
    rig.step(("arm",))
    for step in steps:
        rig.step(step)
    assert rig.verdict() == []


@settings(max_examples=150, deadline=None)
@given(steps=st.lists(STEPS, min_size=5, max_size=40), seed=st.integers(0, 1000))
def test_any_requests_and_any_readings_leave_the_invariants_whole(steps: list[tuple[object, ...]], seed: int) -> None:
    rig = rig_of_whims(seed)
    rig.step(("arm",))
    for step in steps:
        rig.step(step)
    assert rig.verdict() == []


def to_and_fro(rig: Rig) -> list[str]:
    """A fixed sequence that meets every limit of the chain, both ways, and ends by the lease."""
    rig.step(("arm",))
    rig.step(("rest", "brake", 2))
    for duty in (6000, -6000, 4000, -200, 6000):
        rig.step(("ramp", duty, 0, 2))
        rig.step(("swing", 1900 if duty > 0 else 1100, 0, 2))
        for _ in range(8):
            rig.step(("beat",))
            rig.run(40)
    rig.step(("limit", ("ceiling_duty", 2000)))
    rig.step(("limit", ("pulse_max_us", 1700)))
    return rig.verdict()


def test_the_fixed_sequence_reaches_both_signs_and_the_ceiling() -> None:
    rig = rig_of_plant(1)
    assert to_and_fro(rig) == []
    duties = [row.duty[0] for row in rig.witness.history.values()]
    assert max(duties) == 6000
    assert min(duties) == -6000


def _refresh_with(**wrong: int) -> Callable[[Drive, LimitStore], None]:
    right = Drive.refresh

    def refresh(drive: Drive, limits: LimitStore) -> None:
        right(drive, limits)
        for name, value in wrong.items():
            setattr(drive, name, value)

    return refresh


@pytest.mark.parametrize(
    ("wrong", "name"),
    [
        ({"_ceiling": 9000}, "S1"),
        ({"_up": 101}, "S2"),
        ({"_down": 201}, "S2"),
        ({"_dwell_ticks": 19}, "S3"),
    ],
)
def test_a_drive_with_a_wrong_limit_is_found_out(
    wrong: dict[str, int], name: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(Drive, "refresh", _refresh_with(**wrong))
    if name == "S3":  # at standstill all along, so that the dwell alone holds the sign back
        monkeypatch.setattr("ramprig.mock.guard.AxisWatch.still", lambda watch, age: True)
    found = to_and_fro(rig_of_plant(1))
    assert any(what.startswith(name) for what in found), found[:3]


def test_a_drive_that_does_not_wait_for_standstill_is_found_out(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("ramprig.mock.guard.AxisWatch.still", lambda watch, age: True)
    assert any(what.startswith("S3") for what in to_and_fro(rig_of_plant(1)))


def test_a_lease_that_never_ends_is_found_out(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(Controller, "_judge_line", lambda board, age: None)
    assert any(what.startswith("S4") for what in to_and_fro(rig_of_plant(1)))


def test_a_trip_that_stops_nothing_is_found_out(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(Controller, "_switch_off", lambda board: None)
    rig = rig_of_plant(1)
    rig.step(("arm",))
    rig.step(("ramp", 3000, 0, 2))
    rig.run(20)
    rig.step(("break",))
    assert any(what.startswith("S5") for what in rig.verdict())


@pytest.mark.parametrize("body", ["limit ceiling_duty 0 7000", "arm 100 00000000"])
def test_a_device_that_grants_what_it_must_refuse_is_found_out(body: str, monkeypatch: pytest.MonkeyPatch) -> None:
    def lax(store: LimitStore, name: str, index: int, value: int, *, armed: bool) -> Reason | None:
        return None

    monkeypatch.setattr(LimitStore, "refusal", lax)
    if body.startswith("arm"):
        monkeypatch.setattr(LimitStore, "digest", lambda store: "00000000")
    rig = rig_of_plant(1)
    if not body.startswith("arm"):
        rig.step(("arm",))
    rig.step((body,))
    assert any(what.startswith("S6") for what in rig.verdict())


def test_a_servo_that_jumps_is_found_out(monkeypatch: pytest.MonkeyPatch) -> None:
    right = ServoPulse.refresh

    def refresh(pulse: ServoPulse, limits: LimitStore) -> None:
        right(pulse, limits)
        pulse._slew_ns = 7000

    monkeypatch.setattr(ServoPulse, "refresh", refresh)
    assert any(what.startswith("S7") for what in to_and_fro(rig_of_plant(1)))


def test_the_witness_knows_the_digest_the_device_computes() -> None:
    store = LimitStore(Board(axes=2, servos=2))
    assert digest_of({key: store[key] for key in store}) == store.digest()
