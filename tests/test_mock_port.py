"""The mock as a port: virtual time moves by reading only, real time by the clock, and the cable's faults."""

from __future__ import annotations

from pathlib import Path

import pytest

from ramprig.errors import LinkLost, UsageError
from ramprig.mock import MockDevice, MockPort, MockSetup, open_mock
from ramprig.mock.cable import Cable
from ramprig.mock.core import SimulatedDevice, open_core, why_not
from ramprig.mock.port import URGENTS_MAX, DevicePort
from ramprig.mock.url import name_of, parse_mock
from ramprig.port.base import PatientPort, Port
from ramprig.port.clock import VirtualClock
from ramprig.port.open import open_port
from ramprig_link.check import seal

INSTANT = MockSetup(baud=0)


def virtual(*faults: str, baud: int = 115200, seed: int = 0) -> MockPort:
    device = MockDevice(MockSetup(baud=baud, faults=faults), seed=seed)
    return MockPort(device, seed=seed, clock=VirtualClock(start_s=50.0))


def read_all(port: Port, seconds: float) -> bytes:
    end = port.clock.now() + seconds
    data = b""
    while (left := end - port.clock.now()) > 1e-9:
        data += port.read(left)
    return data


def test_reading_moves_the_clock_to_the_first_bytes_or_to_the_end_of_the_wait() -> None:
    port = virtual()
    assert port.read(1.0).startswith(b"N00 boot")
    assert port.clock.now() == pytest.approx(50.004)
    assert port.read(0.5) == b""
    assert port.clock.now() == pytest.approx(50.504)
    assert port.read(0.0) == b""
    assert port.clock.now() == pytest.approx(50.504)


def test_many_short_waits_let_as_much_time_pass_as_one_long_one() -> None:
    port = virtual()
    port.read(0.1)
    start = port.clock.now()
    for _ in range(1000):
        assert port.read(0.0003) == b""
    assert port.clock.now() - start == pytest.approx(0.3)
    assert port.device.ticks == 304


def test_a_request_is_answered_after_its_way_there_and_back() -> None:
    port = virtual()
    port.read(0.1)
    start = port.clock.now()
    port.write(seal(b"01 beat"))
    assert port.read(1.0).startswith(b"01 ok ")
    assert 0.003 <= port.clock.now() - start <= 0.006


def test_urgent_overtakes_what_is_still_on_the_wire() -> None:
    port = virtual(baud=9600)
    port.read(0.1)
    port.write(seal(b"01 state") * 20)
    assert port.urgent(b"\n" + seal(b"ff stop 0"))
    assert port.read(1.0).startswith(b"ff ok ")
    assert port.clock.now() < 50.2


def test_a_break_reaches_the_board() -> None:
    port = virtual(baud=0)
    port.read(0.1)
    assert port.device.controller is not None
    port.write(seal(f"01 arm 500 {port.device.controller.limits.digest()}".encode("ascii")))
    port.read(0.1)
    assert port.send_break()
    assert b"trip" in read_all(port, 0.01)


def test_a_pulled_cable_is_a_lost_link_and_the_board_runs_on() -> None:
    port = virtual()
    port.read(0.1)
    port.device.faults.set("unplug")
    for use in (lambda: port.read(1.0), lambda: port.write(b"x"), port.send_break):
        with pytest.raises(LinkLost, match="pulled out"):
            use()
    assert port.urgent(b"x") is False
    cable = Cable(port.device)
    cable.run(2_000_000_000)
    assert port.device.ticks > 1900


def test_a_closed_port_says_so() -> None:
    with virtual() as port:
        port.read(0.1)
    assert port.urgent(b"x") is False
    with pytest.raises(LinkLost, match="closed"):
        port.read(0.1)


def test_the_delivery_grid_holds_back_to_its_multiples() -> None:
    port = virtual("delivery_grid")
    port.write(seal(b"01 log 7 1 plain"))
    times = [round((port.clock.now() - 50.0) * 1000, 3) for _ in range(20) if port.read(0.5)]
    assert len(times) > 10
    assert [time % 16 for time in times] == [0.0] * len(times)


@pytest.mark.parametrize("fault", ["bit_errors=0.05", "dropped_bytes=0.05"])
def test_the_wire_spoils_both_ways_and_the_same_with_the_same_seed(fault: str) -> None:
    def talk(seed: int) -> bytes:
        port = virtual(fault, seed=seed)
        data = b""
        for n in range(60):
            port.write(seal(f"{n:02x} beat".encode("ascii")))
            data += read_all(port, 0.02)
        return data

    clean = sum(line.startswith(b"%02x ok " % n) for n, line in enumerate(talk(1).split(b"\n")))
    assert clean < 55
    assert b"garbled" in talk(1)
    assert talk(1) == talk(1) != talk(2)


def test_garbage_comes_first_after_opening() -> None:
    port = virtual("garbage_after_open=100")
    first = port.read(1.0)
    assert len(first) == 100
    assert port.read(1.0).startswith(b"N00 boot")


def test_opening_resets_a_board_whose_dtr_does() -> None:
    port = virtual("reset_on_open")
    assert port.read(5.0).startswith(b"N00 boot 0 2 external")
    assert port.clock.now() == pytest.approx(50.304, abs=0.002)


def test_a_drifting_clock_gives_fewer_ticks() -> None:
    port = virtual("clock_drift=1000", baud=0)
    read_all(port, 100.0)
    assert port.device.ticks == pytest.approx(100_000 * (1 - 0.001), abs=2)


@pytest.fixture(params=["mock", "core"])
def logging(request: pytest.FixtureRequest) -> DevicePort[MockDevice] | DevicePort[SimulatedDevice]:
    """A port in virtual time whose board logs, in the Python mock and in C."""
    if request.param == "core" and why_not() is not None:
        pytest.skip(why_not() or "")
    port = open_core("core:?pace=virtual") if request.param == "core" else open_mock("mock:?pace=virtual")
    port.read_until(0.1)
    port.write(seal(b"01 log 10 7 packed"))
    assert port.read_until(0.2).startswith(b"01 ok ")
    assert isinstance(port, PatientPort)
    return port


def lines_of(data: bytes) -> list[str]:
    """The kinds of whole lines."""
    assert data == b"" or data.endswith(b"\n")
    return [chr(line[0]) for line in data.splitlines()]


LoggingPort = DevicePort[MockDevice] | DevicePort[SimulatedDevice]


def test_a_patient_reader_gets_samples_with_what_is_said_next_or_at_the_end(logging: LoggingPort) -> None:
    port, start_s = logging, logging.clock.now()
    assert lines_of(port.read_until(start_s + 0.35)) == ["D"] * 3
    assert port.clock.now() == pytest.approx(start_s + 0.35)
    port.read_until(start_s + 0.46)
    port.write(seal(b"02 beat"))
    assert lines_of(port.read_until(start_s + 0.5)) == ["0"]
    assert port.clock.now() < start_s + 0.47
    port.read_until(start_s + 0.79)
    port.write(seal(b"03 beat"))
    port.write(seal(b"04 state") * 9)
    assert lines_of(port.read_until(start_s + 0.9))[0] == "0"


def test_patience_loses_and_reorders_nothing(logging: LoggingPort) -> None:
    """The bytes are those that an eager reader of the same board gets."""
    port = logging
    eager = (
        open_core("core:?pace=virtual") if isinstance(port.device, SimulatedDevice) else open_mock("mock:?pace=virtual")
    )
    eager.read(0.1)
    eager.write(seal(b"01 log 10 7 packed"))
    assert eager.read(0.1).startswith(b"01 ok ")
    patient, impatient = b"", b""
    for n in range(2, 12):
        for reader in (port, eager):
            reader.write(seal(f"{n:02x} state".encode("ascii")))
        end_s = max(port.clock.now(), eager.clock.now()) + 0.0731 * n
        while port.clock.now() < end_s:
            patient += port.read_until(end_s)
        while eager.clock.now() < end_s:
            impatient += eager.read(max(1e-6, end_s - eager.clock.now()))
    assert patient == impatient
    assert patient.count(b"\nD") > 30


def test_patience_has_a_bound(logging: LoggingPort) -> None:
    data = logging.read_until(logging.clock.now() + 3600.0)
    assert set(lines_of(data)) == {"D"}
    assert 4096 <= len(data) <= 8192


def test_time_is_not_before_the_end_of_a_wait_for_a_time() -> None:
    port = virtual()
    port.read(0.1)
    until_s = port.clock.now()
    for _ in range(500):
        until_s += 0.0503
        port.read_until(until_s)
        assert 0.0 <= port.clock.now() - until_s <= 1.1e-6
    now_s = port.clock.now()
    assert port.read_until(now_s - 1.0) == b""
    assert port.clock.now() == now_s


def test_a_spoilt_cable_is_not_waited_for() -> None:
    port = virtual("bit_errors=1e-9")
    port.write(seal(b"01 log 10 7 packed"))
    port.read_until(51.0)
    port.read_until(51.0)
    assert lines_of(port.read_until(60.0)) == ["D"]
    assert port.clock.now() < 51.0


class HandClock:
    """A real clock for a test: it moves a little whenever it is looked at."""

    def __init__(self) -> None:
        self.time_s = 10.0

    def now(self) -> float:
        self.time_s += 0.0004
        return self.time_s

    def wall(self) -> float:
        return self.time_s


def test_in_real_time_the_device_catches_up_with_the_clock() -> None:
    clock = HandClock()
    port = MockPort(MockDevice(INSTANT), pace="real", clock=clock)
    assert port.read(0.1).startswith(b"N00 boot")
    clock.time_s += 2.0
    port.write(seal(b"01 beat"))
    assert 2000 <= port.device.ticks <= 2020
    assert port.read(0.1).startswith(b"01 ok 20")


def test_of_many_urgent_lines_the_newest_are_kept() -> None:
    port = MockPort(MockDevice(INSTANT))
    for category in (*[1] * 1000, 0):
        assert port.urgent(b"\n" + seal(f"ff stop {category}".encode()))
    assert len(port._urgent) == URGENTS_MAX
    port.read(0.0)
    assert not port._urgent
    assert read_all(port, 0.01).count(b"ff ok") == 1  # each takes back what is before it


@pytest.mark.skipif(why_not() is not None, reason=why_not() or "")
def test_bytes_that_find_no_room_on_the_wire_are_counted_as_overrun() -> None:
    """More than the wire holds at once, and more than the board's receive ring."""
    with open_core("core:?pace=virtual&baud=0") as port:
        port.write(b"x" * 100_000)
        read_all(port, 0.01)
        port.write(b"\n" + seal(b"01 counters"))
        (answer,) = [line for line in read_all(port, 0.1).splitlines() if line.startswith(b"01 ok")]
    assert int(answer.split()[6]) == 100_000 - 1024


def test_virtual_pace_needs_a_virtual_clock() -> None:
    with pytest.raises(ValueError, match="VirtualClock"):
        MockPort(MockDevice(INSTANT), pace="virtual", clock=HandClock())


# ---- the text ------------------------------------------------------------------------------------------------------


def test_a_text_opens_a_mock() -> None:
    with open_port("mock:?pace=virtual&seed=3&fault=jammed_shaft&fault=bit_errors=1e-3") as port:
        assert isinstance(port, MockPort)
        assert port.device.faults.on() == {("jammed_shaft", 0): 1.0, ("bit_errors", 0): 0.001}
        assert port.name.startswith("mock:?pace=virtual")
    assert parse_mock("mock:").pace == "real"
    assert parse_mock("mock:?baud=0&bench=a.yaml").bench == Path("a.yaml")


def test_a_text_with_a_bench_takes_its_motors_and_faults(tmp_path: Path) -> None:
    bench = Path(__file__).resolve().parent.parent / "scripts" / "vent_bench.yaml"
    with open_mock(f"mock:?pace=virtual&bench={bench}&fault=deaf") as port:
        assert [axis.name for axis in port.device.setup.plant.axes] == ["vent"]
        assert port.device.faults.get("deaf")
    timed = tmp_path / "timed.yaml"
    fault = "faults:\n    - {fault: encoder_dead, motor: vent, from: 2 s, until: 3 s}"
    timed.write_text(bench.read_text("utf-8").replace("faults: []", fault), "utf-8")
    with open_mock(f"mock:?pace=virtual&bench={timed}") as port:
        assert [(fault.text, fault.from_s, fault.until_s) for fault in port.device.setup.timed_faults] == [
            ("encoder_dead:0", 2.0, 3.0)
        ]


@pytest.mark.parametrize(
    ("text", "part"),
    [
        ("mock:x", "after 'mock:' come options"),
        ("mock:?pace=slow", "virtual or real"),
        ("mock:?seed=-1", "whole number"),
        ("mock:?fault=nothing", "there is no fault"),
        ("mock:?colour=red", "there is no option 'colour'"),
    ],
)
def test_a_text_that_means_nothing_is_refused(text: str, part: str) -> None:
    with pytest.raises(UsageError, match=part):
        open_mock(text)


def test_limits_live_on_in_their_file(tmp_path: Path) -> None:
    # SPEC LIMIT-4
    text = f"mock:?pace=virtual&baud=0&limits={tmp_path / 'limits.json'}"
    with open_mock(text) as port:
        port.write(seal(b"01 limit trip_ma 0 1717"))
        assert b"01 ok" in read_all(port, 0.01)
    with open_mock(text) as port:
        port.write(seal(b"01 limit trip_ma 0"))
        assert b"1717" in read_all(port, 0.01)


@pytest.mark.parametrize(
    ("text", "name"),
    [
        ("mock:", "mock:"),
        ("mock:?bench=a/vent bench.yaml", "mock:"),
        ("mock:?pace=virtual&bench=b.yaml&seed=3", "mock:?pace=virtual&seed=3"),
        ("core:?bench=b.yaml&fault=deaf", "core:?fault=deaf"),
    ],
)
def test_a_port_is_called_by_what_its_user_may_have_typed(text: str, name: str) -> None:
    """The bench file is put in by the command line, and may be a long path."""
    assert name_of(text) == name
