"""A served mock: the loop step by step on a scripted endpoint, and in a process of its own over a terminal and TCP."""

from __future__ import annotations

import contextlib
import io
import os
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from ramprig.errors import FileError, LinkLost
from ramprig.mock import MockDevice, MockSetup
from ramprig.mock.__main__ import fault_help, main
from ramprig.mock.core import why_not
from ramprig.mock.core.device import SimulatedDevice
from ramprig.mock.faults import FAULTS
from ramprig.mock.limits import LimitStore
from ramprig.mock.serve import LAG_MAX_NS, Server, TraceFile
from ramprig.port.base import Port
from ramprig.port.open import open_port
from ramprig_link.check import seal

INSTANT = MockSetup(baud=0, limits={("dwell_ticks", 0): 20, ("still_ticks", 0): 10, ("slew_up_duty", 0): 100})
MS = 1_000_000


class ScriptedEndpoint:
    """An endpoint without any host but the test. `incoming` is what the next polls bring."""

    def __init__(self) -> None:
        self.name = "scripted"
        self.incoming: list[tuple[bytes, bool]] = []
        self.sent = b""
        self.plugs: list[str] = []

    def poll(self, timeout_s: float) -> tuple[bytes, bool]:
        return self.incoming.pop(0) if self.incoming else (b"", False)

    def send(self, data: bytes) -> None:
        self.sent += data

    def take(self) -> bytes:
        sent, self.sent = self.sent, b""
        return sent

    def unplug(self) -> None:
        self.plugs.append("out")

    def plug(self) -> None:
        self.plugs.append("in")

    def close(self) -> None:
        self.plugs.append("closed")


class Stage:
    """A server with hand-moved time."""

    def __init__(self, setup: MockSetup = INSTANT, *, pace: str = "real") -> None:
        self.now_ns = 5 * MS
        self.said: list[str] = []
        self.endpoint = ScriptedEndpoint()
        self.device = MockDevice(setup)
        self.server = Server(
            self.device,
            self.endpoint,
            pace="real" if pace == "real" else "virtual",
            say=self.said.append,
            now_ns=lambda: self.now_ns,
        )

    def pass_ms(self, ms: int) -> bytes:
        for _ in range(ms):
            self.now_ns += MS
            self.server.step()
        return self.endpoint.take()

    def type(self, data: bytes) -> bytes:
        self.endpoint.incoming.append((data, False))
        self.server.step()
        return self.endpoint.take()


def test_the_device_keeps_to_the_clock() -> None:
    stage = Stage()
    assert stage.pass_ms(3).startswith(b"N00 boot")
    stage.pass_ms(500)
    assert stage.device.ticks == 503


def test_a_request_is_answered_at_once_and_time_does_not_run_ahead() -> None:
    stage = Stage()
    stage.pass_ms(10)
    for n in range(50):
        assert stage.type(seal(f"{n:02x} beat".encode("ascii"))).startswith(b"%02x ok " % n) or n > 0
    assert stage.device.ticks == 11, "one tick ahead of the clock at the most"
    assert stage.pass_ms(2)
    assert stage.device.ticks == 12


def test_a_host_that_has_vanished_leaves_the_lease_to_run_out() -> None:
    # SPEC S4
    stage = Stage()
    stage.pass_ms(50)
    digest = LimitStore(stage.device.board, values=INSTANT.limits).digest()
    stage.type(seal(f"01 arm 100 {digest}".encode("ascii")))
    stage.type(seal(f"02 ramp 0 2000 0 {stage.device.ticks + 5}".encode("ascii")))
    stage.pass_ms(60)
    assert stage.device.plant.axes[0].duty == 2000
    stage.pass_ms(140)
    assert stage.device.plant.axes[0].duty == 0


def test_a_server_held_up_for_long_does_not_race_after_the_lost_time() -> None:
    stage = Stage()
    stage.pass_ms(10)
    stage.now_ns += 3600 * 1000 * MS
    stage.server.step()
    assert stage.device.ticks == 10 + LAG_MAX_NS // MS


def test_faults_are_switched_by_lines_of_control() -> None:
    stage = Stage()
    assert stage.server.obey("fault jammed_shaft on\n") == "ok fault jammed_shaft on"
    assert stage.server.obey("fault current_offset:0 120") == "ok fault current_offset:0 120"
    assert stage.server.obey("fault bit_errors=0.01") == "ok fault bit_errors=0.01"
    assert stage.server.obey("faults") == "faults jammed_shaft:0=1 current_offset:0=120 bit_errors:0=0.01"
    assert stage.server.obey("fault jammed_shaft off") == "ok fault jammed_shaft off"
    assert stage.device.faults.get("jammed_shaft") == 0.0
    assert "did you mean 'deaf'" in stage.server.obey("fault daef on")
    assert "is not 'fault NAME" in stage.server.obey("explode")
    assert stage.server.obey("reset") == "ok reset"
    assert b"boot 0 2 external" in stage.pass_ms(320)


def test_unplugging_takes_the_endpoint_away_and_plugging_in_says_its_name() -> None:
    stage = Stage()
    stage.pass_ms(10)
    stage.server.obey("fault unplug on")
    stage.pass_ms(5)
    stage.server.obey("fault unplug off")
    stage.pass_ms(5)
    assert stage.endpoint.plugs == ["out", "in"]
    assert stage.said == ["scripted"]
    assert stage.device.ticks == 20


def test_commands_are_obeyed_between_two_steps() -> None:
    stage = Stage()
    lines = ["fault deaf on", "faults"]
    turns = iter((False, False, True))
    stage.server.run(lambda: next(turns), commands=lambda: lines.pop(0) if lines else None)
    assert stage.said == ["ok fault deaf on", "faults deaf:0=1"]


def test_the_trace_has_a_row_for_each_change() -> None:
    stage = Stage()
    file = io.StringIO()
    stage.device.trace = TraceFile(file, axes=1)
    stage.pass_ms(30)
    stage.server.obey("reset")
    stage.pass_ms(310)
    rows = [row.split(",") for row in file.getvalue().splitlines()]
    assert rows[0] == ["host_s", "elapsed_ticks", "tick", "state", "duty_0"]
    assert [row[1:] for row in rows[1:]] == [
        ["1", "0", "off", "0"],
        ["31", "0", "booting", "0"],
        ["331", "0", "off", "0"],
    ]


# ---- in a process of its own ---------------------------------------------------------------------------------------

process = pytest.mark.process
posix = pytest.mark.skipif(os.name != "posix", reason="pseudo-terminals and these signals are POSIX only")
PATIENCE_S = 20.0


@contextlib.contextmanager
def served(*options: str) -> Iterator[tuple[subprocess.Popen[str], str]]:
    """A served mock and what a host opens; it is ended by SIGTERM and must then leave well."""
    child = subprocess.Popen(
        [sys.executable, "-m", "ramprig.mock", *options], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    )
    try:
        assert child.stdout is not None
        yield child, child.stdout.readline().strip()
    finally:
        child.terminate()
        assert child.wait(PATIENCE_S) in (0, 1)
        for stream in (child.stdin, child.stdout):
            assert stream is not None
            stream.close()


def ask(url: str, body: bytes) -> bytes:
    """Open the port, ask until it is answered, and leave."""
    with open_port(url) as port:
        deadline_s = time.monotonic() + PATIENCE_S
        heard = b""
        while time.monotonic() < deadline_s:
            port.write(b"\n" + seal(body))
            heard += port.read(0.2)
            for line in heard.split(b"\n")[:-1]:
                if line.startswith(body[:2] + b" "):
                    return line
    raise AssertionError(f"no answer to {body!r} in {heard!r}")


def read_until_lost(port: Port) -> None:
    deadline_s = time.monotonic() + PATIENCE_S
    while time.monotonic() < deadline_s:
        port.read(0.1)


@process
@posix
def test_a_terminal_serves_one_host_after_another(tmp_path: Path) -> None:
    link = tmp_path / "bench"
    with served("--link", str(link), "--seed", "3") as (_, name):
        assert name == str(link)
        assert b" ok " in ask(name, b"01 who")
        assert b" ok " in ask(name, b"02 who")
    assert not link.is_symlink()


@process
@posix
def test_a_pulled_cable_is_a_lost_link_at_the_host_and_comes_back(tmp_path: Path) -> None:
    link = tmp_path / "bench"
    with served("--link", str(link)) as (child, name):
        assert child.stdin is not None
        assert child.stdout is not None
        ask(name, b"01 who")
        with open_port(name) as port:
            child.stdin.write("fault unplug on\n")
            child.stdin.flush()
            assert child.stdout.readline() == "ok fault unplug on\n"
            with pytest.raises(LinkLost):
                read_until_lost(port)
        child.stdin.write("fault unplug off\n")
        child.stdin.flush()
        assert child.stdout.readline() == "ok fault unplug off\n"
        assert child.stdout.readline().strip() == name
        assert b" ok " in ask(name, b"02 who")


@process
@posix
def test_the_bridge_is_off_in_time_when_the_host_is_killed(tmp_path: Path) -> None:
    # SPEC S4
    trace = tmp_path / "trace.csv"
    host = (
        "import sys, time; from ramprig.port.open import open_port; from ramprig_link.check import seal\n"
        "port = open_port(sys.argv[1]); tag = 0\n"
        "def ask(body):\n"
        "    global tag; tag = tag % 250 + 1; heard = b''\n"
        "    while True:\n"
        "        port.write(b'\\n' + seal(f'{tag:02x} {body}'.encode()))\n"
        "        end = time.monotonic() + 0.2\n"
        "        while time.monotonic() < end:\n"
        "            heard += port.read(0.05)\n"
        "            for line in heard.split(b'\\n')[:-1]:\n"
        "                if line.startswith(b'%02x ok ' % tag): return int(line.split()[2])\n"
        "time.sleep(0.3); ask('arm 200 ' + sys.argv[2]); tick = ask('beat'); ask(f'ramp 0 2000 0 {tick + 200}')\n"
        "while True: ask('beat'); print('alive', flush=True); time.sleep(0.05)\n"
    )
    digest = LimitStore(MockDevice().board).digest()
    with served("--baud", "0", "--trace", str(trace)) as (_, name):
        with subprocess.Popen([sys.executable, "-c", host, name, digest], stdout=subprocess.PIPE, text=True) as victim:
            assert victim.stdout is not None
            deadline_s = time.monotonic() + PATIENCE_S
            while ",2000" not in trace.read_text() and time.monotonic() < deadline_s:
                assert victim.stdout.readline() == "alive\n"
            killed_s = time.monotonic()
            victim.send_signal(signal.SIGKILL)
        while "tripped" not in trace.read_text() and time.monotonic() < deadline_s:
            ask_nothing = socket.socketpair()  # a pause without sleep: nothing ever arrives here
            ask_nothing[0].settimeout(0.05)
            with contextlib.suppress(TimeoutError):
                ask_nothing[0].recv(1)
            for end in ask_nothing:
                end.close()
        rows = [row.split(",") for row in trace.read_text().splitlines()[1:]]
        last = rows[-1]
        assert last[3:] == ["tripped", "0"]
        assert float(last[0]) - killed_s <= 0.2 + 0.5 + 0.5, "lease, stop time, and a slow test machine"
        assert b" link_lost " in ask(name, b"77 why")


@process
def test_a_tcp_port_serves_too_and_takes_lines_of_control_on_another() -> None:
    with served("--tcp", "0", "--control", "0", "--fault", "garbage_after_open") as (child, name):
        assert child.stdout is not None
        assert name.startswith("socket://127.0.0.1:")
        control = child.stdout.readline().strip().rpartition(":")[2]
        assert b" ok " in ask(name, b"01 who")
        with socket.create_connection(("127.0.0.1", int(control)), PATIENCE_S) as connection:
            connection.sendall(b"fault deaf on\n")
            assert child.stdout.readline() == "ok fault deaf on\n"


@process
def test_a_host_that_grants_the_time_gets_the_same_bytes_each_time() -> None:
    def talk() -> tuple[bytes, float]:
        with (
            served("--tcp", "0", "--pace", "virtual", "--seed", "5") as (_, name),
            open_port(f"lockstep:{name}") as port,
        ):
            start_s = port.clock.now()
            port.write(seal(b"01 log 10 65539 packed"))
            heard = b""
            while port.clock.now() - start_s < 30.0:
                heard += port.read(1.0)
            return heard, port.clock.now() - start_s

    first, second = talk(), talk()
    assert first[0] == second[0]
    assert first[0].count(b"\nD") >= 270


@pytest.fixture
def own_signals() -> Iterator[None]:
    """What `main` binds to signals is gone after the test."""
    numbers = (signal.SIGTERM, signal.SIGINT)
    before = [signal.getsignal(number) for number in numbers]
    yield
    for number, handler in zip(numbers, before, strict=True):
        signal.signal(number, handler)


@pytest.mark.usefixtures("own_signals")
@pytest.mark.parametrize(
    ("option", "code", "told"),
    [
        ("--trace", 2, "--trace {path}: No such file or directory"),
        pytest.param(
            *("--link", 4, "the link {path} to the terminal cannot be made: No such file or directory"), marks=posix
        ),
    ],
)
def test_a_file_that_cannot_be_made_is_told_with_its_option(
    option: str, code: int, told: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "nowhere" / "file"
    assert main([option, str(path)]) == code
    assert capsys.readouterr().err.splitlines() == [f"ramprig mock: {told.format(path=path)}"]


@pytest.mark.usefixtures("own_signals")
def test_a_place_for_control_that_is_taken_is_told(capsys: pytest.CaptureFixture[str]) -> None:
    with socket.create_server(("127.0.0.1", 0)) as taken:
        place = f"127.0.0.1:{taken.getsockname()[1]}"
        assert main(["--control", place]) == 4
    assert capsys.readouterr().err.startswith(f"ramprig mock: cannot listen for control on {place}: ")


def test_limits_that_cannot_be_kept_are_told_with_the_file(tmp_path: Path) -> None:
    path = tmp_path / "nowhere" / "limits.json"
    store = LimitStore(MockSetup().board, path=path)
    with pytest.raises(FileError, match=f"the board's limits cannot be kept in {path}: No such file"):
        store.set("lease_ms", 0, 400)


@pytest.mark.skipif(why_not() is not None, reason=why_not() or "")
def test_a_store_of_the_core_that_cannot_be_read_or_kept_is_told_with_the_file(tmp_path: Path) -> None:
    with pytest.raises(FileError, match=f"cannot read the board's store {tmp_path}"):
        SimulatedDevice(MockSetup(limits_path=tmp_path))
    path = tmp_path / "nowhere" / "store"
    with pytest.raises(FileError, match=f"the board's limits cannot be kept in {path}: No such file"):
        SimulatedDevice(MockSetup(limits_path=path))


def test_the_help_tells_every_fault(capsys: pytest.CaptureFixture[str]) -> None:
    assert all(kind.text in fault_help() for kind in FAULTS.values())
    assert main(["--faults"]) == 0
    assert "jammed_shaft:AXIS" in capsys.readouterr().out
    assert main(["--tcp", "x"]) == 2
    assert "is no TCP port" in capsys.readouterr().err
