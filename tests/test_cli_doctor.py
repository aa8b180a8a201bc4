"""`ramprig doctor`: findings on ports, on the machine and on the link, each with its remedy."""

from __future__ import annotations

from pathlib import Path

import pytest

from ramprig.cli import main
from ramprig.cli.doctor import (
    Found,
    Grade,
    intruders,
    latency_findings,
    permission_findings,
    running_programs,
    unsure_names,
)
from ramprig.port.find import PortSeen

BENCH = Path(__file__).resolve().parent.parent / "scripts" / "vent_bench.yaml"
VIRTUAL = f"mock:?pace=virtual&bench={BENCH}"


def test_a_port_that_may_not_be_opened_is_bad_and_has_a_remedy() -> None:
    ports = [PortSeen("/dev/ttyUSB0"), PortSeen("/dev/ttyUSB1")]
    found = permission_findings(ports, may_open=lambda name: name.endswith("0"), remedy=lambda name: f"join {name}")
    assert list(found) == [Found(Grade.BAD, "/dev/ttyUSB1 may not be opened by this user", "join /dev/ttyUSB1")]


def test_adapters_without_a_number_of_their_own_are_named_by_their_place() -> None:
    ports = [
        PortSeen("/dev/ttyUSB0", serial_number="A", location="1-1"),
        PortSeen("/dev/ttyUSB1", serial_number="0001", location="1-2"),
        PortSeen("/dev/ttyUSB2", serial_number="0001", location="1-3"),
        PortSeen("/dev/ttyUSB3", location="1-4"),
        PortSeen("/dev/ttyS0"),
    ]
    found = list(unsure_names(ports))
    assert [one.text for one in found] == [
        "the adapter of /dev/ttyUSB1 shares its number 0001",
        "the adapter of /dev/ttyUSB2 shares its number 0001",
        "the adapter of /dev/ttyUSB3 has no serial number",
    ]
    assert found[2].remedy == 'name it by its place: usb path: "1-4"'


def test_programs_that_take_ports_are_named(tmp_path: Path) -> None:
    for number, name in (("1", "init"), ("22", "ModemManager"), ("self", "brltty")):
        (tmp_path / number).mkdir()
        (tmp_path / number / "comm").write_text(name + "\n", "utf-8")
    programs = running_programs(tmp_path)
    assert programs == {"init", "ModemManager"}
    assert [found.text for found in intruders(programs)] == ["ModemManager is running"]


@pytest.mark.parametrize(
    ("median_s", "worst_s", "grade", "remedy"),
    [
        (0.003, 0.01, Grade.OK, ""),
        (0.016, 0.02, Grade.NOTE, "latency timer of 16 ms"),
        (0.003, 0.2, Grade.NOTE, "the lease is 0.5 s"),
    ],
)
def test_round_trips_are_judged(median_s: float, worst_s: float, grade: Grade, remedy: str) -> None:
    (found,) = latency_findings(median_s, worst_s, lease_s=0.5)
    assert found.grade is grade
    assert remedy in found.remedy


def test_a_good_bench_ends_with_0(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["doctor", "--bench", str(BENCH), "--port", VIRTUAL]) == 0
    said = capsys.readouterr().out
    assert "ok   ramprig-mock MOCK-0001 answers" in said
    assert "ok   no request was repeated and no line was unreadable" in said


def test_a_noisy_line_is_told(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["doctor", "--bench", str(BENCH), "--port", VIRTUAL + "&fault=bit_errors=3e-3"]) == 0
    assert "shorten the cable" in capsys.readouterr().out


def test_a_delivery_grid_is_recognised(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["doctor", "--bench", str(BENCH), "--port", VIRTUAL + "&fault=delivery_grid=16"]) == 0
    assert "latency timer of 16 ms" in capsys.readouterr().out


def test_a_deaf_board_ends_with_4(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["doctor", "--bench", str(BENCH), "--port", VIRTUAL + "&fault=deaf"]) == 4
    assert "BAD  " in capsys.readouterr().out


def test_a_port_that_is_not_there_ends_with_2(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["doctor", "--bench", str(BENCH), "--port", "/dev/ttyNONE9"]) == 2
    assert "BAD  there is no port /dev/ttyNONE9" in capsys.readouterr().out


def test_a_port_without_a_bench_is_refused(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["doctor", "--port", "mock:"]) == 2
    assert "--port needs --bench" in capsys.readouterr().err
