"""The whole device: the same bytes for the same doings, its wire, its resets, and every fault by what it does."""

from __future__ import annotations

from dataclasses import replace

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ramprig.errors import FileError, UsageError
from ramprig.mock import FAULTS, Board, LimitStore, MockDevice, MockSetup
from ramprig.mock.faults import parse_fault
from ramprig.mock.setup import TimedFault
from ramprig.mock.transmit import SAID_BYTES_MAX, Transmitter
from ramprig_link.check import seal
from ramprig_link.messages import Answer, Notice, parse_device_line

QUICK = {
    ("ceiling_duty", 0): 6000, ("slew_up_duty", 0): 60, ("slew_down_duty", 0): 100, ("dwell_ticks", 0): 20,
    ("lease_ms", 0): 5000, ("still_ticks", 0): 10, ("trip_ma", 0): 4000, ("rated_ma", 0): 0,
}  # fmt: skip
INSTANT = MockSetup(baud=0, limits=QUICK)


class Host:
    """Asks a device and lets it run."""

    def __init__(self, device: MockDevice) -> None:
        self.device = device
        self.heard: list[tuple[int, bytes]] = []
        self._tag = 0

    def run(self, ticks: int) -> list[tuple[int, bytes]]:
        """Let ticks pass; the lines that came, with the device's `ticks` when each came."""
        came = []
        end = self.device.ticks + ticks
        while self.device.ticks < end:
            self.device.advance(end - self.device.ticks)
            came += [(self.device.ticks, line) for line in self.device.transmit().split(b"\n") if line]
        self.heard += came
        return came

    def ask(self, body: str, *, ticks: int = 40) -> Answer | None:
        self._tag = (self._tag + 1) % 0xFF
        self.device.receive(seal(f"{self._tag:02x} {body}".encode("ascii")))
        for _, line in self.run(ticks):
            message = parse_device_line(line)
            if isinstance(message, Answer) and message.tag == self._tag:
                return message
        return None

    def ok(self, body: str, *, ticks: int = 40) -> tuple[str, ...]:
        answer = self.ask(body, ticks=ticks)
        assert answer is not None, f"{body}: no answer"
        assert answer.ok, f"{body}: {answer.fields}"
        return answer.fields

    def drive(self, duty: int, *, ticks: int = 600) -> None:
        """Arm, where it is not yet, and drive for a while."""
        controller = self.device.controller
        assert controller is not None
        if controller.state.word == "off":
            self.ok(f"arm 5000 {controller.limits.digest()}")
        self.ok(f"ramp 0 {duty} 0 {controller.age + 20}")
        self.run(ticks)

    def notices(self, word: str) -> list[tuple[str, ...]]:
        messages = [parse_device_line(line) for _, line in self.heard]
        return [message.fields for message in messages if isinstance(message, Notice) and message.word == word]

    @property
    def counts(self) -> int:
        return int(self.ok("state")[6])


def host(setup: MockSetup = INSTANT, *, seed: int = 0) -> Host:
    found = Host(MockDevice(setup, seed=seed))
    found.run(30)
    return found


MOVES = [
    seal(f"03 arm 500 {LimitStore(Board(), values=QUICK).digest()}".encode("ascii")),
    *(seal(f"{tag:02x} ramp 0 {tag * 300 - 3000} 40 {tag * 15}".encode("ascii")) for tag in range(4, 16)),
    seal(b"10 swing 0 1700 50 120"),
]
CHUNKS = st.lists(
    st.tuples(
        st.sampled_from(MOVES)
        | st.sampled_from((b"who\n", seal(b"01 log 3 458759 packed"), seal(b"02 state"), b"stop\n"))
        | st.binary(),
        st.integers(1, 60),
    ),
    max_size=12,
)


@settings(max_examples=40, deadline=None)
@given(chunks=CHUNKS, seed=st.integers(0, 9), cut=st.integers(1, 17))
def test_the_same_seed_and_bytes_at_the_same_ticks_give_the_same_bytes(
    chunks: list[tuple[bytes, int]], seed: int, cut: int
) -> None:
    setup = MockSetup(limits=QUICK, faults=("noisy_counts",))

    def heard(step: int) -> list[bytes]:
        device = MockDevice(setup, seed=seed)
        lines = []
        for data, ticks in chunks:
            device.receive(data)
            end = device.ticks + ticks
            while device.ticks < end:
                device.advance(min(step, end - device.ticks))
                lines.append(device.transmit())
        return [line for line in lines if line]

    assert heard(1) == heard(cut) == heard(10_000)


def test_another_seed_gives_other_noise() -> None:
    def log(seed: int) -> bytes:
        quiet = host(seed=seed)
        quiet.ok("log 5 4 packed")
        return b"".join(line for _, line in quiet.run(300))

    assert log(1) == log(1) != log(2)


@settings(max_examples=200, deadline=None)
@given(data=st.lists(st.binary(max_size=120) | st.just(b"\n"), max_size=20))
def test_any_bytes_lead_to_lines_or_nothing(data: list[bytes]) -> None:
    # SPEC BAD-1
    device = MockDevice(INSTANT)
    for piece in data:
        device.receive(piece + b"\n")
        device.tick()
        for line in device.transmit().split(b"\n")[:-1]:
            assert isinstance(parse_device_line(line), Notice)


def test_a_flood_without_line_ends_needs_no_more_memory_than_the_buffers() -> None:
    # SPEC BAD-1, LINE-5
    device = MockDevice(INSTANT)
    for _ in range(200):
        device.receive(b"x" * 5000)
        device.tick()
    assert device.controller is not None
    assert device.controller.overrun == 200 * (5000 - device.board.receive_bytes)
    assert len(device.controller._received) == 0


def test_a_flood_of_questions_is_answered_as_far_as_the_wire_carries() -> None:
    transmitter = Transmitter(data_bytes_max=512)
    for _ in range(1000):
        transmitter.say(b"x" * 99 + b"\n")
    assert transmitter.unsaid == 1000 - SAID_BYTES_MAX // 100
    assert len(transmitter.take_all()) <= SAID_BYTES_MAX


# ---- the wire ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("baud", "us_per_byte"), [(115200, 86.8), (9600, 1041.7), (1_000_000, 10.0)])
def test_lines_take_the_time_of_their_bits(baud: int, us_per_byte: float) -> None:
    # SPEC LINE-1; 10 bit times a character: arithmetic, agrees with the character times in AVR UART data sheets' tables
    device = MockDevice(replace(INSTANT, baud=baud))
    asking = Host(device)
    asking.run(400)
    start = device.ticks
    line = seal(b"01 beat")
    device.receive(line)
    (came, answer), *_ = asking.run(100)
    wire_ticks = (len(line) + len(answer) + 1) * us_per_byte / 1000
    assert wire_ticks <= came - start <= wire_ticks + 3.01  # each way may wait for a tick, and one tick is spent on it


def test_a_saturated_wire_carries_its_rate_and_drops_whole_lines() -> None:
    # SPEC KIND-4, KIND-3
    busy = host(MockSetup(limits=QUICK))
    busy.ok("log 1 458759 plain")
    start = busy.device.ticks
    came = busy.run(1000)
    sent = sum(len(line) + 1 for _, line in came)
    assert 11520 * 0.97 < sent <= 11520
    assert all(line.startswith(b"D") and line.count(b" ") == 10 for _, line in came)
    assert busy.device.controller is not None
    assert busy.device.controller.sampling.dropped > 0
    asked = busy.device.ticks
    answer = busy.ask("beat")
    assert answer is not None
    assert answer.tick - asked <= 2, "an answer does not wait behind the data that is queued"
    assert start < asked


def test_an_answer_begins_within_its_time_of_a_full_line() -> None:
    # SPEC KIND-3
    busy = host(MockSetup(limits=QUICK))
    busy.ok("log 1 458759 packed")
    busy.run(500)
    asked = busy.device.ticks
    busy.device.receive(seal(b"f0 beat"))
    came = next(tick for tick, line in busy.run(60) if line.startswith(b"f0 ok"))
    assert came - asked <= 20 + 3


# ---- starts --------------------------------------------------------------------------------------------------------


def test_a_reset_takes_the_outputs_at_once_and_the_counts_with_it() -> None:
    # SPEC RUN-1, WHO-3
    running = host()
    running.drive(3000)
    assert running.counts != 0
    from ramprig_link.words import Cause

    running.device.restart(Cause.EXTERNAL)
    assert running.device.plant.axes[0].duty == 0
    running.device.receive(seal(b"01 who"))
    assert running.run(299) == []
    assert [line[:20] for _, line in running.run(1000)] == [b"N00 boot 0 2 externa"]
    assert abs(running.counts) < 100_000
    assert running.ok("who")[4] == "2"
    assert running.ok("limit ceiling_duty 0") == ("6000",)


def test_a_supply_below_the_boards_own_least_resets_it() -> None:
    weak = host()
    weak.device.plant.supply.volts = 3.0
    weak.run(2000)
    assert weak.notices("boot")[-1][1] == "brownout"
    assert weak.notices("trip")[-1] == ("restarted", "0", "2", "0")


# ---- faults --------------------------------------------------------------------------------------------------------


def trip_of(fault: str, *, duty: int = 3000, ticks: int = 1500) -> str:
    """The trip that driving with a fault ends in."""
    broken = host()
    if fault == "brownout_on_start":
        broken.device.faults.set(fault)
    broken.drive(duty, ticks=0)
    broken.device.faults.set_all([fault] if fault else [])
    broken.run(ticks)
    return broken.ok("why")[0]


@pytest.mark.parametrize(
    ("fault", "trip"),
    [
        ("", "none"),
        ("phases_swapped", "wrong_way"),
        ("leads_swapped", "wrong_way"),
        ("encoder_dead", "stall"),
        ("one_channel", "stall"),
        ("jammed_shaft", "stall"),
        ("current_offset=5000", "overcurrent"),
        ("brownout_on_start", "restarted"),
    ],
)
def test_a_fault_of_the_plant_ends_in_its_trip(fault: str, trip: str) -> None:
    assert trip_of(fault) == trip


def test_noisy_counts_are_never_still() -> None:
    noisy = host(replace(INSTANT, limits={**QUICK, ("still_counts", 0): 0}))
    noisy.device.faults.set("noisy_counts")
    noisy.drive(3000, ticks=300)
    assert noisy.ok("state")[5] == "0"
    assert noisy.device.controller is not None
    assert noisy.device.controller.drives[0].demand.value == 3000


def test_a_weak_supply_sags_under_load() -> None:
    def lowest(fault: str) -> int:
        loaded = host(replace(INSTANT, limits={**QUICK, ("under_mv", 0): 0}))
        loaded.device.faults.set_all([fault] if fault else [])
        loaded.drive(6000, ticks=0)
        supply = []
        for _ in range(300):
            loaded.device.tick()
            supply.append(loaded.device.plant.read_supply_mv())
        return min(supply)

    assert lowest("weak_supply") < lowest("") - 1000


def test_a_brown_out_on_start_is_a_reboot() -> None:
    # SPEC RUN-1, WHO-3
    sagging = host()
    sagging.device.faults.set("brownout_on_start", 3)
    sagging.drive(3000, ticks=1000)
    assert sagging.notices("boot") == [("1", "power"), ("2", "brownout")]
    assert sagging.notices("trip") == [("restarted", "0", "2", "0")]
    assert sagging.ok("state")[:2] == ("tripped", "restarted")
    assert abs(sagging.counts) < 10
    sagging.ok("clear")
    sagging.drive(3000, ticks=1000)
    assert sagging.notices("boot")[-1] == ("3", "brownout"), "it happens at every start while the fault is on"


def test_a_deaf_board_runs_its_lease_out() -> None:
    # SPEC LEASE-2, S4
    deaf = host()
    deaf.drive(2000)
    deaf.device.faults.set("deaf")
    assert deaf.ask("beat") is None
    deaf.run(5600)
    assert deaf.device.plant.axes[0].duty == 0
    deaf.device.faults.set("deaf", False)
    assert deaf.ok("why")[0] == "link_lost"


def test_a_second_board_has_its_own_serial_limits_and_boot_number() -> None:
    # SPEC WHO-3
    swapped = host()
    swapped.ok("limit trip_ma 0 1500")
    swapped.device.faults.set("second_board")
    swapped.run(400)
    who = swapped.ok("who")
    assert (who[3], who[4]) == ("MOCK-0001-second", "1")
    assert swapped.ok("limit trip_ma 0") == ("2000",)
    swapped.device.faults.set("second_board", False)
    swapped.run(400)
    assert swapped.ok("who")[3:5] == ("MOCK-0001", "2")
    assert swapped.ok("limit trip_ma 0") == ("1500",)


def test_a_timed_fault_comes_and_goes() -> None:
    timed = MockDevice(replace(INSTANT, timed_faults=(TimedFault(text="encoder_dead", from_s=0.1, until_s=0.25),)))
    seen = []
    for _ in range(300):
        timed.tick()
        seen.append(timed.plant.encoders[0].dead)
    assert seen == [False] * 100 + [True] * 150 + [False] * 50


def test_every_fault_can_be_switched_on_and_off_while_running() -> None:
    for name, kind in FAULTS.items():
        device = MockDevice(INSTANT)
        device.faults.set(name)
        assert device.faults.get(name) == kind.default
        device.advance(50)
        device.faults.set(name, False)
        assert device.faults.on() == {}
        device.advance(400)
        assert kind.text == kind.text.strip(". ")


@pytest.mark.parametrize(
    ("text", "parsed"),
    [
        ("jammed_shaft", ("jammed_shaft", 0, 1.0)),
        ("jammed_shaft:1", ("jammed_shaft", 1, 1.0)),
        ("current_offset:0=-20", ("current_offset", 0, -20.0)),
        ("bit_errors=1e-3", ("bit_errors", 0, 0.001)),
        ("delivery_grid", ("delivery_grid", 0, 16.0)),
        ("deaf=off", ("deaf", 0, 0.0)),
    ],
)
def test_faults_are_spelt_with_axis_and_value(text: str, parsed: tuple[str, int, float]) -> None:
    assert parse_fault(text) == parsed


@pytest.mark.parametrize(
    ("text", "part"),
    [
        ("jamed_shaft", "did you mean 'jammed_shaft'"),
        ("deaf:1", "is not of an axis"),
        ("bit_errors=2", "1e-09 to 1"),
        ("bit_errors=nan", "1e-09 to 1"),
        ("deaf=2", "on or off"),
        ("deaf=maybe", "on, off or a number"),
        ("a b", "is no fault"),
    ],
)
def test_a_fault_there_is_not_is_refused_with_what_there_is(text: str, part: str) -> None:
    with pytest.raises(UsageError, match=part):
        parse_fault(text)


def test_a_fault_of_an_axis_there_is_not_is_refused() -> None:
    with pytest.raises(UsageError, match="no axis 1"):
        MockDevice(INSTANT).faults.set("jammed_shaft", axis=1)


def test_a_setup_that_cannot_be_is_refused() -> None:
    with pytest.raises(FileError, match="1 motors"):
        MockSetup(board=Board(axes=2))
    with pytest.raises(FileError, match="baud rate is 5"):
        MockSetup(baud=5)
    with pytest.raises(FileError, match="serial is 'a b'"):
        Board(serial="a b")
    with pytest.raises(FileError, match="queue is 4"):
        Board(queue=4)


def test_a_servo_gets_the_pulse_with_which_its_swing_ends() -> None:
    """The tick that ends a swing was once left out, so a swing of one tick never reached the servo."""
    host = Host(MockDevice(replace(INSTANT, limits={**QUICK, ("pulse_slew_ns", 0): 2_000_000})))
    controller = host.device.controller
    assert controller is not None
    host.ok(f"arm 5000 {controller.limits.digest()}")
    host.ok(f"swing 0 1700 0 {controller.age + 20}")
    host.run(1000)
    servo = host.device.plant.servos[0]
    assert servo.pulse_us == 1700.0
    parameters = servo.parameters
    assert servo.angle_deg == pytest.approx((1700.0 - parameters.neutral_us) / parameters.us_per_deg)
