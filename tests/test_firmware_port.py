"""`core:` ports: the board in C sends what the mock in Python sends, byte for byte, under every fault."""

from __future__ import annotations

import ctypes
import os
import shutil
import subprocess
import sys
import zipfile
from collections.abc import Iterator
from pathlib import Path

import pytest
from hatchling.builders.wheel import WheelBuilder

from ramprig.bench import load_bench
from ramprig.errors import FileError, UsageError
from ramprig.mock import FAULTS, Board, LimitStore, MockSetup, open_mock
from ramprig.mock.core import CorePort, SimulatedDevice, build, open_core, rehearsal_on, why_not
from ramprig.mock.core.__main__ import main as plant_main
from ramprig.mock.core.build import NO_COMPILER
from ramprig.mock.core.parameters import plant_text
from ramprig.mock.from_bench import plant_of_bench
from ramprig.mock.port import MockPort
from ramprig.port.base import Port
from ramprig.port.clock import VirtualClock
from ramprig.port.open import open_port
from ramprig_link.check import seal

needs_compiler = pytest.mark.skipif(why_not() is not None, reason=why_not() or "")

SCRIPTS = Path(__file__).resolve().parent.parent / "scripts"
BENCH = SCRIPTS / "vent_bench.yaml"
MASK = Board().mask


def digest(limits: dict[tuple[str, int], int]) -> str:
    return LimitStore(Board(), values=limits).digest()


def conversation() -> Iterator[tuple[float, str]]:
    """When a host says what: it arms, logs, drives the motor to and fro and the servo, and ends in a stop."""
    quick = {
        ("lease_ms", 0): 3000, ("dwell_ticks", 0): 20, ("slew_up_duty", 0): 200, ("slew_down_duty", 0): 400,
        ("pulse_slew_ns", 0): 20_000,
    }  # fmt: skip
    at_s, tag = 0.4, 0  # a board that was reset when the port opened is up by then
    for (name, index), value in quick.items():
        yield at_s, f"{tag:02x} limit {name} {index} {value}"
        at_s, tag = at_s + 0.012, tag + 1
    yield at_s, f"{tag:02x} log 3 {MASK} packed"
    yield at_s + 0.03, f"{tag + 1:02x} arm 3000 {digest(quick)}"
    for number, (line, after_s) in enumerate(
        (
            ("ramp 0 3000 60 @30", 0.3), ("swing 0 1720 10 @5", 0.2), ("state", 0.1), ("ramp 0 -2500 100 @40", 0.6),
            ("rest 0 brake @9", 0.05), ("ramp 0 0 20 @10", 0.3), ("counters", 0.05), ("again 3", 0.05),
            ("stop 1", 0.3), ("log 0 0 packed", 0.05),
        )
    ):  # fmt: skip
        at_s += after_s
        yield at_s, f"{tag + 2 + number:02x} {line}"


def played(port: Port) -> bytes:
    """Everything that reaches the host in the conversation; starts are told from the host's own clock."""
    start_s = port.clock.now()
    data = b""
    for at_s, line in conversation():
        data += read_until(port, start_s + at_s)
        words = [
            str(round((port.clock.now() - start_s) * 1000) + int(word[1:])) if word.startswith("@") else word
            for word in line.split(" ")
        ]
        port.write(seal(" ".join(words).encode()))
    return data + read_until(port, start_s + 3.4)


def read_until(port: Port, until_s: float) -> bytes:
    data = b""
    while until_s - port.clock.now() > 1e-9:
        data += port.read(until_s - port.clock.now())
    return data


@needs_compiler
@pytest.mark.parametrize("baud", [0, 115200, 1_000_000])
@pytest.mark.parametrize("fault", ["", *(name for name in FAULTS if name not in ("unplug", "encoders_exchanged"))])
def test_the_board_in_c_sends_what_the_mock_sends(fault: str, baud: int) -> None:
    options = f"?pace=virtual&seed=7&baud={baud}" + (f"&fault={fault}" if fault else "")
    said = [played(opened) for opened in (open_mock(f"mock:{options}"), open_core(f"core:{options}"))]
    assert len(said[0]) > (0 if fault == "deaf" else 700)
    assert said[1] == said[0]


@needs_compiler
def test_timed_faults_come_and_go_at_the_same_ticks() -> None:
    from ramprig.mock import MockDevice
    from ramprig.mock.setup import TimedFault

    timed = (TimedFault(text="encoder_dead", from_s=0.5, until_s=0.9), TimedFault(text="lead_open", from_s=1.1))
    setup = MockSetup(timed_faults=timed)
    mock = played(MockPort(MockDevice(setup), clock=VirtualClock()))
    core = played(CorePort(SimulatedDevice(setup), clock=VirtualClock()))
    assert core == mock


@needs_compiler
def test_open_port_knows_core_texts(tmp_path: Path) -> None:
    clock = VirtualClock(start_s=3.0)
    with open_port(f"core:?pace=virtual&bench={BENCH}&seed=4", clock=clock) as port:
        assert isinstance(port, CorePort)
        assert port.clock is clock
        assert port.read(1.0).startswith(b"N00 boot 0 1 power")
        port.write(b"who\n")
        assert b"core-1 ramprig-mock" in port.read(1.0)
    for wrong in ("core:x", "core:?seed=-1", "core:?speed=3"):
        with pytest.raises(UsageError):
            open_port(wrong)


@needs_compiler
def test_the_store_outlives_the_port(tmp_path: Path) -> None:
    store = tmp_path / "store"
    text = f"core:?pace=virtual&limits={store}"
    first = open_core(text)
    first.read(0.1)
    first.write(seal(b"01 limit trip_ma 0 1234"))
    assert first.read(1.0).startswith(b"01 ok ")
    second = open_core(text)
    assert second.read(0.1).startswith(b"N00 boot 0 2 power")
    second.write(seal(b"01 limit trip_ma 0"))
    assert b" 1234 " in second.read(1.0)
    store.write_bytes(b"short")
    with pytest.raises(FileError, match="no store of this board"):
        open_core(text)


@needs_compiler
def test_presets_are_in_force_from_the_start() -> None:
    device = SimulatedDevice(MockSetup(limits={("trip_ma", 0): 777}, baud=0))
    device.tick()
    device.transmit()
    device.receive(seal(b"01 limit trip_ma 0"))
    device.tick()
    assert b" 777 " in device.transmit()


@needs_compiler
def test_a_board_that_the_core_cannot_be_is_refused() -> None:
    with pytest.raises(UsageError, match="cannot be a board"):
        SimulatedDevice(MockSetup(board=Board(queue=300)))


@needs_compiler
def test_a_paced_port_follows_its_clock() -> None:
    port = open_core("core:")
    assert port.read(1.0).startswith(b"N00 boot")
    port.close()


def test_the_plant_of_a_bench_file_can_be_printed(capsys: pytest.CaptureFixture[str]) -> None:
    assert plant_main([str(BENCH)]) == 0
    assert capsys.readouterr().out == plant_text(plant_of_bench(load_bench(BENCH)))
    assert plant_main(["absent.yaml"]) == 2
    assert "absent.yaml" in capsys.readouterr().err
    assert plant_main([]) == 2


def test_a_rehearsal_says_what_it_runs_on(monkeypatch: pytest.MonkeyPatch) -> None:
    bench = load_bench(BENCH)
    assert rehearsal_on(bench, wanted="mock").scheme == "mock:"
    if why_not() is None:
        assert rehearsal_on(bench).scheme == "core:"
    monkeypatch.setattr(build, "compiler", lambda: None)
    monkeypatch.setattr("ramprig.mock.core.url.load", lambda options: build.build("core", [], options, shared=True))
    without = rehearsal_on(bench)
    assert (without.scheme, NO_COMPILER in without.on) == ("mock:", True)
    with pytest.raises(UsageError, match="no C compiler"):
        rehearsal_on(bench, wanted="core")


@needs_compiler
def test_a_compiler_that_refuses_is_told_of(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(build, "cache_folder", lambda: tmp_path)
    wrong = tmp_path / "wrong.c"
    wrong.write_text("int main(void) { return }\n")
    with pytest.raises(UsageError, match=r"wrong\.c"):
        build.build("wrong", [wrong], (), shared=False)
    assert [path.name for path in tmp_path.iterdir()] == ["wrong.c"]


@needs_compiler
def test_what_is_built_is_kept_for_the_next_time(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(build, "cache_folder", lambda: tmp_path / "cache")
    right = tmp_path / "right.c"
    right.write_text("int main(void) { return 0; }\n")
    first = build.build("right", [right], (), shared=False)
    right.unlink()
    assert build.build("right", [right], (), shared=False) == first
    right.write_text("int main(void) { return X; }\n")
    assert build.build("right", [right], ("-DX=1",), shared=False) != first


@needs_compiler
def test_a_compiler_that_cannot_see_all_files_at_once_builds_them_one_by_one(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(build, "cache_folder", lambda: tmp_path / "cache")
    monkeypatch.setattr(build, "WHOLE", ("--no-such-option",))
    right = tmp_path / "right.c"
    right.write_text("int right(void) { return 7; }\n")
    path = build.build("right", [right], (), shared=True)
    assert ctypes.CDLL(str(path)).right() == 7


@needs_compiler
@pytest.mark.process
def test_an_installed_wheel_has_the_sources_it_builds_from(tmp_path: Path) -> None:
    wheel = next(WheelBuilder(str(SCRIPTS.parent)).build(directory=str(tmp_path), versions=["standard"]))
    installed = tmp_path / "installed"
    with zipfile.ZipFile(wheel) as archive:
        archive.extractall(installed)
    program = (
        "import ramprig; from ramprig.mock.core import build, open_core\n"
        "print(ramprig.__file__, build.firmware(), open_core('core:?pace=virtual').read(1.0))"
    )
    environment = {**os.environ, "PYTHONPATH": str(installed), "XDG_CACHE_HOME": str(tmp_path / "cache")}
    done = subprocess.run(
        [sys.executable, "-c", program], env=environment, cwd=tmp_path, capture_output=True, text=True, check=False
    )
    assert done.stdout.split()[:2] == [
        str(installed / "ramprig" / "__init__.py"), str(installed / "ramprig" / "_firmware")
    ], done.stderr  # fmt: skip
    assert "N00 boot 0 1 power" in done.stdout


@needs_compiler
def test_the_cache_keeps_what_was_used_last(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(build, "cache_folder", lambda: tmp_path / "cache")
    monkeypatch.setattr(build, "BUILDS_MAX", 2)
    right = tmp_path / "right.c"
    right.write_text("int main(void) { return 0; }\n")
    built = []
    for number in range(3):
        built.append(build.build("right", [right], (f"-DX={number}",), shared=False))
        os.utime(built[-1], (number, number))
    assert [path.exists() for path in built] == [False, True, True]


def test_the_compiler_is_the_one_the_environment_names(monkeypatch: pytest.MonkeyPatch) -> None:
    named = shutil.which("sh")
    monkeypatch.setenv("CC", "sh")
    assert build.compiler() == named
    monkeypatch.setenv("CC", "no-such-compiler")
    assert build.compiler() == next(filter(None, map(shutil.which, build.COMPILERS)), None)
