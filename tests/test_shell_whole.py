"""The whole shell on the paced mock: piped lines with their exit codes, a stop on the wire, a real terminal."""

from __future__ import annotations

import io
import os
import shutil
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from functools import partial
from pathlib import Path

import pytest
from prompt_toolkit.application import create_app_session
from prompt_toolkit.data_structures import Size
from prompt_toolkit.output.vt100 import Vt100_Output

from held_up import held_up_s
from ramprig.errors import Bug, LinkLost
from ramprig.shell import run_shell
from ramprig.shell.desk import Desk
from ramprig.shell.outbox import Outbox
from ramprig.shell.plain import Printer
from ramprig.shell.screen import Screen
from ramprig.shell.stopkeys import StopKey
from ramprig.shell.taps import TappedInput, tapping
from ramprig.shell.terminal import default_history
from ramprig.shell.worker import Worker
from shell_bench import BENCH, BENCH_FILE, mock_port

pytestmark = pytest.mark.process
posix = pytest.mark.skipif(sys.platform == "win32", reason="POSIX terminals and signals")

WAIT_S = 30.0
"""Longest a test waits for something that must come."""


def until(holds: Callable[[], object], what: str) -> None:
    """Wait for something that must come."""
    bound_s = time.monotonic() + WAIT_S
    while not holds():
        assert time.monotonic() < bound_s, f"it did not come: {what}"
        threading.Event().wait(0.02)


def piped(lines: str, runs: Path, *faults: str, once_moving: Callable[[], None] | None = None) -> tuple[int, str]:
    """The exit code and the output of plain lines on a paced mock; `once_moving` is called when the motor is driven."""
    out = io.StringIO()
    port = mock_port(*faults, pace="real")

    def watch() -> None:
        until(lambda: (board := port.device.controller) is not None and board.drives[0].duty != 0, "motion")
        if once_moving is not None:
            once_moving()

    if once_moving is not None:
        threading.Thread(target=watch).start()
    code = run_shell(BENCH, port, runs=runs, lines=io.StringIO(lines), out=out, seed=1)
    controller = port.device.controller
    assert controller is not None
    assert [drive.duty for drive in controller.drives] == [0]
    return code, out.getvalue()


@pytest.mark.parametrize(
    ("lines", "code", "said"),
    [
        ("arm\njog vent 20 % for 300 ms\nleave\n", 0, "vent: 20 % for 300 ms"),
        ("arm\nramp vent 10 %\nwait 100 ms\n", 0, "stop confirmed"),
        ("", 0, "left: all outputs are off"),
        ("# nothing\n\nwho\n", 0, "serial MOCK-0001"),
        ("jgo vent\nwho\n", 2, "line 1: no word is called 'jgo'"),
        ("jog vent 10 % for 1 s\narm\n", 2, "'arm' enables them"),
        ("arm\nramp vent 10 %\nwait 300 ms\ndisarm\n", 3, "moving"),
    ],
)
def test_piped_lines_end_with_the_outputs_off_and_an_exit_code(
    tmp_path: Path, lines: str, code: int, said: str
) -> None:
    found, out = piped(lines, tmp_path)
    assert found == code
    assert said in out
    assert "left: all outputs are off" in out
    assert "Guard moving parts" in out


def test_a_trip_of_piped_lines_is_exit_code_3(tmp_path: Path) -> None:
    code, out = piped("arm\njog vent 40 % for 2 s\nwho\n", tmp_path, "jammed_shaft")
    assert code == 3
    assert "stall on vent" in out
    assert "> who" not in out


def test_a_device_that_does_not_answer_is_raised(tmp_path: Path) -> None:
    with pytest.raises(LinkLost):
        piped("arm\n", tmp_path, "unplug")


def test_outputs_of_a_device_that_does_not_answer_are_not_called_off(tmp_path: Path) -> None:
    out = io.StringIO()
    with pytest.raises(LinkLost):
        run_shell(BENCH, mock_port("deaf"), runs=tmp_path, lines=io.StringIO(""), out=out, seed=1)
    assert "all outputs are off" not in out.getvalue()
    assert "NOT CONFIRMED off; cut the power" in out.getvalue()


def test_a_bug_in_a_command_ends_in_a_stop(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def broken(*_: object) -> None:
        raise ZeroDivisionError("a bug")

    monkeypatch.setattr("ramprig.shell.replies.who_lines", broken)
    port = mock_port(pace="real")
    with pytest.raises(Bug, match="a bug"):
        run_shell(
            BENCH, port, runs=tmp_path, lines=io.StringIO("arm\nramp vent 10 %\nwho\n"), out=io.StringIO(), seed=1
        )
    controller = port.device.controller
    assert controller is not None
    assert controller.drives[0].duty == 0


@posix
def test_a_signal_stops_piped_lines_with_exit_code_5(tmp_path: Path) -> None:
    code, out = piped(
        "arm\njog vent 20 % for 20 s\n", tmp_path, once_moving=lambda: os.kill(os.getpid(), signal.SIGTERM)
    )
    assert code == 5
    assert "stop confirmed" in out


def test_piped_lines_do_without_a_terminal_library() -> None:
    check = "import sys, ramprig.shell; sys.exit('prompt_toolkit' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", check], check=False).returncode == 0


def test_a_reader_that_is_gone_does_not_hold_the_printer(tmp_path: Path) -> None:
    class Gone(io.StringIO):
        def write(self, text: str) -> int:
            raise BrokenPipeError

    outbox = Outbox()
    outbox.say("a line")
    printer = Printer(outbox, Gone())
    printer.close()
    assert outbox.take() == []


@posix
def test_a_stop_is_on_the_wire_within_50_ms_while_a_motor_turns_and_output_floods(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """From the byte of Ctrl-C on a file descriptor to the port's urgent write, the real worker pumping a paced mock."""
    import asyncio

    port, outbox = mock_port(pace="real"), Outbox()
    sent: list[float] = []
    plain_urgent = port.urgent

    def urgent(data: bytes) -> bool:
        sent.append(time.monotonic())
        return plain_urgent(data)

    monkeypatch.setattr(port, "urgent", urgent)
    worker = Worker(lambda aside: Desk(BENCH, port, outbox, runs=tmp_path, seed=1, aside=aside), outbox.say)
    key = StopKey(worker)
    keys = TappedInput(key.press)
    reader, writer = os.pipe()
    over = threading.Event()
    latencies_s: list[float] = []
    screenful = io.StringIO()
    output = Vt100_Output(screenful, lambda: Size(rows=24, columns=100), term="xterm", enable_cpr=False)

    def flood() -> None:
        while not over.wait(0.0002):
            outbox.say("x" * 80)

    def story(screen: Screen) -> None:
        until(worker.opened.is_set, "the device")
        for _ in range(4):
            until(lambda: worker.snapshot.state == "off", "outputs off")
            os.write(writer, b"arm\r")
            until(lambda: worker.snapshot.state == "armed", "armed")
            os.write(writer, b"jog vent 30 % for 20 s\r")
            until(lambda: worker.snapshot.motors and worker.snapshot.motors[0].duty > 0, "motion")
            count, held_s, begin_s = len(sent), held_up_s(), time.monotonic()
            os.write(writer, b"\x1b[200~unfinished\x03")
            until(partial(lambda count: len(sent) > count, count), "the stop")
            latencies_s.append(sent[count] - begin_s - (held_up_s() - held_s))
        over.set()
        screen.app.loop.call_soon_threadsafe(screen.app.exit)  # type: ignore[union-attr]  # it runs

    async def run() -> None:
        screen = Screen(BENCH, worker, outbox, key, keys=keys, output=output)
        threads = [threading.Thread(target=flood), threading.Thread(target=story, args=(screen,))]
        with tapping(reader, keys):
            for thread in threads:
                thread.start()
            await screen.run()
            for thread in threads:
                thread.join(WAIT_S)

    worker.start()
    try:
        with create_app_session(output=output):
            asyncio.run(run())
    finally:
        over.set()
        worker.leave()
        worker.join(WAIT_S)
        os.close(reader)
        os.close(writer)
    assert len(latencies_s) == 4
    print("latencies in ms:", [round(latency_s * 1000, 2) for latency_s in latencies_s])
    assert max(latencies_s) < 0.05, latencies_s
    assert worker.off_confirmed


# ---- a real terminal ---------------------------------------------------------------------------------------------

SCRIPT = """
import sys
from pathlib import Path
from ramprig.bench import load_bench
from ramprig.mock import open_mock
from ramprig.shell import run_shell

bench, runs = sys.argv[1], Path(sys.argv[2])
code = run_shell(load_bench(bench), open_mock("mock:?bench=" + bench), runs=runs, history_file=runs / "history")
print("exit code", code)
sys.stdin.readline()
"""


class Tmux:
    """A shell in a terminal of its own."""

    def __init__(self, folder: Path) -> None:
        script = folder / "shell.py"
        script.write_text(SCRIPT, encoding="utf-8")
        self._server = ["tmux", "-L", f"ramprig-{os.getpid()}", "-f", "/dev/null"]
        command = [sys.executable, str(script), str(BENCH_FILE), str(folder)]
        self._run("new-session", "-d", "-s", "shell", "-x", "110", "-y", "40", *command)

    def _run(self, *args: str) -> str:
        return subprocess.run([*self._server, *args], check=True, capture_output=True, text=True).stdout

    def keys(self, *keys: str) -> None:
        """Press keys by tmux's names."""
        self._run("send-keys", "-t", "shell", *keys)

    @property
    def text(self) -> str:
        """What stands on the screen."""
        return self._run("capture-pane", "-p", "-t", "shell")

    def sees(self, what: str) -> None:
        """Wait until this stands on the screen."""
        until(lambda: what in self.text, what + "\n" + self.text)

    def close(self) -> None:
        """End the session, which hangs up the shell."""
        subprocess.run([*self._server, "kill-server"], check=False, capture_output=True)


@pytest.fixture
def tmux(tmp_path: Path) -> Iterator[Tmux]:
    if shutil.which("tmux") is None:
        pytest.skip("tmux is not installed: the shell was not tried on a real terminal")
    terminal = Tmux(tmp_path)
    yield terminal
    terminal.close()


@posix
def test_on_a_real_terminal_one_arms_jogs_stops_and_leaves(tmux: Tmux) -> None:
    tmux.sees("its outputs are off")
    tmux.keys("arm", "Enter")
    tmux.sees("ARMED: vent up to 80 %")
    tmux.keys("jog v", "Tab", "Enter")
    tmux.sees("jog vent at 10 %: stopped")
    tmux.keys("Right")
    tmux.sees("forward")
    tmux.sees("vent +10.0 %")
    tmux.sees("jog vent at 10 %: stopped")  # the key was let go
    tmux.sees("vent +0.0 %")
    tmux.keys("q")
    until(lambda: "jog vent at" not in tmux.text, "the end of the jog")
    tmux.keys("ramp vent 20 %", "Enter")
    tmux.sees("vent +20.0 %")
    tmux.keys("half typ")
    tmux.keys("C-c")
    tmux.sees("stop confirmed")
    tmux.sees("off> half typ")
    tmux.keys("C-u", "C-d")
    tmux.sees("left: all outputs are off")
    tmux.sees("exit code 0")


def test_the_history_lies_in_the_users_state_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    for name in ("XDG_STATE_HOME", "LOCALAPPDATA"):
        monkeypatch.setenv(name, str(tmp_path))
    monkeypatch.setattr(Path, "home", lambda: tmp_path)
    place = default_history()
    assert place is not None
    assert place.name == "shell_history"
    assert tmp_path in place.parents
    assert place.parent.is_dir()
