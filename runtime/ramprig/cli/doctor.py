"""`ramprig doctor`: why a bench cannot be reached, or how well it is, each finding with its remedy."""

from __future__ import annotations

import argparse
import os
import sys
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from enum import Enum
from pathlib import Path
from typing import TYPE_CHECKING

from ramprig.cli.say import say
from ramprig.errors import LinkError, RamprigError

if TYPE_CHECKING:
    from ramprig.bench import Bench
    from ramprig.port.find import PortSeen
    from ramprig.session import Session

ROUND_TRIPS = 20
GRID_S = (0.013, 0.019)
"""A median in this range is a USB adapter's latency timer of 16 ms (the FTDI driver's default)."""
LATE_SHARE = 0.25
"""A worst round trip above this share of the lease is worth a word: two in a row and the board may stop."""
INTRUDERS = {
    "ModemManager": "it probes new serial ports with modem commands: give the board's adapter a udev rule with "
    "ID_MM_DEVICE_IGNORE=1, or stop the service",
    "brltty": "it takes CH340, CP210x and FTDI adapters for Braille displays: remove the package if nobody needs it",
}
"""Programs that are known to take serial ports for themselves, as `/proc` names them, with the remedy."""
BAD_CODE = 2


class Grade(Enum):
    """How a finding is meant."""

    OK = "ok"
    NOTE = "note"
    BAD = "BAD"


@dataclass(frozen=True, slots=True)
class Found:
    """One finding in a sentence, with its remedy where there is something to do."""

    grade: Grade
    text: str
    remedy: str = ""

    def lines(self) -> list[str]:
        """As printed."""
        first = f"{self.grade.value:<5}{self.text}"
        return [first, f"     {self.remedy}"] if self.remedy else [first]


def declare(parser: argparse.ArgumentParser) -> None:
    """What is looked at."""
    parser.add_argument("--bench", type=Path, metavar="FILE", help="open the bench's port too and measure the link")
    parser.add_argument("--port", metavar="URL", help="with --bench: the port, instead of the bench's")
    parser.epilog = (
        "Without --bench nothing is opened. With it the board is opened as for a run: its outputs are switched\n"
        "off and nothing moves, but opening can restart the board. Exits with 2 where something is bad."
    )


def carry_out(args: argparse.Namespace) -> int:
    """Look, and print every finding."""
    from ramprig.errors import UsageError

    if args.port is not None and args.bench is None:
        raise UsageError("--port needs --bench: without it nothing is known of the board that should answer")
    code = 0
    for found in machine_findings():
        code = max(code, _told(found))
    if args.bench is not None:
        code = max(code, _look_at_bench(args.bench, args.port))
    return code


def _told(found: Found) -> int:
    for line in found.lines():
        say(line)
    return BAD_CODE if found.grade is Grade.BAD else 0


def _look_at_bench(path: Path, url: str | None) -> int:
    from ramprig.bench import load_bench
    from ramprig.cli.running import SIMULATED, Way, mock_url, open_port_for
    from ramprig.session import Session, Wanted

    bench = load_bench(path)
    url = bench.port.url if url is None else url
    if url.startswith(SIMULATED):
        url = mock_url(url, path)
    try:
        port = open_port_for(Way(url=url, virtual=False, runs=None), bench)
        board = bench.board
        wanted = Wanted(board=board.name, serial=board.serial, axes=bench.axes, servos=bench.channels)
        with Session.open(port, wanted=wanted) as session:  # without limits: a look changes nothing
            return max([_told(found) for found in link_findings(session, bench)])
    except RamprigError as error:
        _told(Found(Grade.BAD, str(error)))
        return error.exit_code if isinstance(error, LinkError) else BAD_CODE


# ---- this machine --------------------------------------------------------------------------------------------------


def machine_findings() -> Iterator[Found]:
    """What this machine says of its ports, none of which is opened."""
    from ramprig.port.causes import permission_remedy
    from ramprig.port.find import system_ports

    ports = system_ports()
    if ports:
        yield Found(Grade.OK, f"serial ports: {', '.join(port.device for port in ports)}")
    else:
        yield Found(Grade.NOTE, "no serial port is there", "is the cable in, and does it carry data?")
    yield from permission_findings(ports, may_open=_may_open, remedy=permission_remedy)
    yield from unsure_names(ports)
    yield from intruders(running_programs())


def _may_open(device: str) -> bool:
    return sys.platform == "win32" or os.access(device, os.R_OK | os.W_OK)


def permission_findings(
    ports: Sequence[PortSeen], *, may_open: Callable[[str], bool], remedy: Callable[[str], str]
) -> Iterator[Found]:
    """Ports that this user may not open."""
    for port in ports:
        if not may_open(port.device):
            yield Found(Grade.BAD, f"{port.device} may not be opened by this user", remedy(port.device))


def unsure_names(ports: Sequence[PortSeen]) -> Iterator[Found]:
    """USB adapters that cannot be told apart by a serial number."""
    numbers = [port.serial_number for port in ports if port.location]
    for port in ports:
        if port.location and (not port.serial_number or numbers.count(port.serial_number) > 1):
            what = "has no serial number" if not port.serial_number else f"shares its number {port.serial_number}"
            yield Found(
                Grade.NOTE, f"the adapter of {port.device} {what}", f'name it by its place: usb path: "{port.location}"'
            )


def running_programs(processes: Path = Path("/proc")) -> set[str]:
    """Names of the programs that run, where the system tells them as files (Linux); else none."""
    names: set[str] = set()
    for path in processes.glob("[0-9]*/comm"):
        try:
            names.add(path.read_text("utf-8", "replace").strip())
        except OSError:
            continue  # it has ended meanwhile
    return names


def intruders(programs: set[str]) -> Iterator[Found]:
    """Programs that take serial ports for themselves."""
    for name, remedy in INTRUDERS.items():
        if name in programs:
            yield Found(Grade.NOTE, f"{name} is running", remedy)


# ---- the link ------------------------------------------------------------------------------------------------------


def link_findings(session: Session, bench: Bench) -> Iterator[Found]:
    """Who answers, how fast, and how clean the line is."""
    from ramprig_link.words import Cap

    identity = session.identity
    yield Found(Grade.OK, f"{identity.board} {identity.serial} answers, firmware {identity.firmware}; outputs off")
    for _ in range(ROUND_TRIPS):
        session.ask("beat")
    health, lease_s = session.health, bench.link.lease_ms / 1000
    yield from latency_findings(health.round_trip_median_s, health.round_trip_worst_s, lease_s=lease_s)
    if health.repeats or health.dropped_lines:
        text = f"{health.repeats} requests had to be repeated, {health.dropped_lines} lines were unreadable"
        yield Found(Grade.NOTE, text, "shorten the cable, look at its shield and ground, or lower the speed")
    else:
        yield Found(Grade.OK, "no request was repeated and no line was unreadable")
    for cap, what in ((Cap.ENCODER, "an encoder"), (Cap.CURRENT, "current measurement")):
        if cap not in identity.caps:
            yield Found(Grade.NOTE, f"the board has no {what.removeprefix('an ')}", "a stop is confirmed without it")
    if session.trip is not None:
        yield Found(Grade.NOTE, f"the board is tripped: {session.trip.trip}", "see why, then clear it in the shell")


def latency_findings(median_s: float, worst_s: float, *, lease_s: float) -> Iterator[Found]:
    """What the round trips say."""
    text = f"round trip {median_s * 1e3:.1f} ms at the median, {worst_s * 1e3:.1f} ms at the worst"
    if GRID_S[0] <= median_s <= GRID_S[1]:
        remedy = "that is a USB adapter's latency timer of 16 ms: set it to 1 ms if the driver can"
        yield Found(Grade.NOTE, text, remedy)
    elif worst_s > LATE_SHARE * lease_s:
        yield Found(Grade.NOTE, text, f"the lease is {lease_s:g} s: give it more, or find what holds this machine up")
    else:
        yield Found(Grade.OK, text)
