"""What a run folder tells beside its samples, gathered in one pass and in bounded memory however long the run was."""

from __future__ import annotations

import json
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from ramprig.bench import Bench, bench_of_text
from ramprig.errors import FileError, RecordError
from ramprig.quantity import show
from ramprig.record.appendfile import is_held
from ramprig.record.folder import EVENTS_FILE, SAMPLES_FILE
from ramprig.record.reading import files_by_part, read_manifest
from ramprig.sequence.steps import What
from ramprig_link.words import Per

Document = dict[str, Any]  # JSON as it comes: what is in it is checked where it is used

KEPT_MAX = 2000
"""So many events of one kind are kept with their fields; all are counted."""
PASSES_MAX = 100_000
FAILURES_MAX = 200
"""Failed judgements of one expectation that are kept with their values."""
UNDER_WAY, BROKEN_OFF = "under way", "broken off"
"""Verdicts of runs that wrote none."""
SIMULATED = ("mock:", "core:")
"""Ports that are no real board."""
CYCLES_FILE = "cycles.jsonl"
NOTES_FILE = "notes.jsonl"

KEPT_KINDS = frozenset(
    {
        *("run_started", "run_resumed", "run_finished", "opened", "armed", "limit_written"),
        *("tripped", "restarted", "device_exchanged", "stop_begun", "stopped", "stop_asked", "stop_judged"),
        *("gap_found", "late_host", "host_slept", "wall_clock_set", "link_trouble", "notices_missed", "disk_trouble"),
        *("marked", "order_overdue", "noticed", "check_begun", "cycle_interrupted"),
        *("wear_found", "wear_unjudged"),
    }
)


@dataclass(slots=True)
class Expectation:
    """One expectation of the sequence over all its judgements. `failures` are the first that did not hold."""

    place: str
    text: str
    held: int = 0
    failed: int = 0
    least: float | None = None
    most: float | None = None
    last_found: str = ""
    failures: list[Document] = field(default_factory=list)

    @property
    def judged(self) -> int:
        """How often it was judged."""
        return self.held + self.failed

    @property
    def what(self) -> str:
        """What is measured, such as `speed of vent`."""
        return self.text.partition(" is ")[0]

    @property
    def limit(self) -> str:
        """What it must be, such as `38 rpm +- 10 % over 500 ms`."""
        return self.text.partition(" is ")[2] or self.text

    @property
    def span(self) -> str:
        """From the least to the greatest value found, in units as the values themselves are told; empty without any."""
        if self.least is None or self.most is None:
            return ""
        kind = next((what.kind for what in What if self.text.startswith(f"{what} ")), None)
        least, most = (f"{value:.4g}" if kind is None else show(value, kind) for value in (self.least, self.most))
        return least if least == most else f"{least} to {most}"

    def take(self, event: Document) -> None:
        """Count one judgement."""
        value = event.get("value")
        if isinstance(value, int | float):
            self.least = value if self.least is None else min(self.least, value)
            self.most = value if self.most is None else max(self.most, value)
        self.last_found = str(event.get("found", ""))
        if event.get("held"):
            self.held += 1
            return
        self.failed += 1
        if len(self.failures) < FAILURES_MAX:
            self.failures.append(event)


@dataclass(slots=True)
class Facts:
    """A run: its manifest, its bench where the copy can be read, and its events by kind.

    `events` keeps the first KEPT_MAX of each kind that matters, `counts` counts all. `passes` are the begins of the
    repeat that went on for longest, in s of the run, or of the cycles where there are any, `pass_numbers` what they are
    called: a cycle that was commanded and never begun has no entry. `outlived` counts the events
    of each kind that came before the outputs were last enabled: what they tell of did not end the run. `is_held` says
    whether a program is still writing it, None where that cannot be told.
    """

    folder: Path
    manifest: Document
    bench: Bench | None = None
    bench_trouble: str = ""
    events: dict[str, list[Document]] = field(default_factory=dict)
    counts: Counter[str] = field(default_factory=Counter)
    expectations: dict[tuple[str, str], Expectation] = field(default_factory=dict)
    passes: list[float] = field(default_factory=list)
    pass_numbers: list[int] = field(default_factory=list)
    cycles: list[Document] = field(default_factory=list)
    notes: list[Document] = field(default_factory=list)
    outlived: Counter[str] = field(default_factory=Counter)
    is_held: bool | None = False
    last_event: Document | None = None

    def of(self, kind: str) -> list[Document]:
        """The events of a kind that were kept, in order."""
        return self.events.get(kind, [])

    @property
    def is_simulated(self) -> bool:
        """Whether the board was one in software."""
        return str(self.manifest.get("port", "")).startswith(SIMULATED)

    def since_armed(self, kind: str) -> list[Document]:
        """The events of a kind, of those kept, since the outputs were last enabled, or all where they never were."""
        return self.of(kind)[self.outlived[kind] :]

    def was_outlived(self, trip: Document) -> bool:
        """Whether the run was gone on with after this trip, one of its events."""
        return any(trip is each for each in self.of("tripped")[: self.outlived["tripped"]])

    @property
    def carried_out(self) -> bool | None:
        """Whether every step was carried out; None where the run did not write that down."""
        if self.verdict in ("passed", BROKEN_OFF):
            return self.verdict == "passed"
        found = (self.manifest.get("results") or {}).get("carried_out")
        return None if found is None else bool(found)

    def blocks(self) -> dict[tuple[int, int], tuple[int, str]]:
        """Number and name of the block of each cycle and check that was done, by its part and the tick it begins at."""
        return {
            (int(line.get("part") or 1), int(line["begin_tick"])): (
                int(line["block"]),
                str(line.get("name") or "cycle"),
            )
            for line in self.cycles
            if "begin_tick" in line and "block" in line
        }

    @property
    def name(self) -> str:
        """The run's folder name, its identifier."""
        return str(self.manifest.get("run") or self.folder.name)

    @property
    def verdict(self) -> str:
        """As `run.json` has it; `under way` where it is still being written, `broken off` where it never ended."""
        if self.manifest.get("status") != "finished":
            return UNDER_WAY if self.is_held else BROKEN_OFF
        return str(self.manifest.get("verdict") or "none")

    @property
    def parts(self) -> list[Document]:
        """An entry for each part of the run; one where it was never gone on with."""
        whole = dict(self.manifest) | {"samples_file": SAMPLES_FILE, "part": 1}
        return list(self.manifest.get("parts") or [whole])

    @property
    def files_of_parts(self) -> dict[int, list[Path]]:
        """The samples files that are there, of each part by its number, in order."""
        return files_by_part(self.manifest, self.folder)

    @property
    def last_files(self) -> list[Path]:
        """The samples files of the last part that has any."""
        return next((paths for paths in reversed(self.files_of_parts.values()) if paths), [])

    @property
    def tick_us(self) -> int:
        """The board's tick."""
        return int((self.manifest.get("clocks") or {}).get("tick_us") or 1000)

    @property
    def period_s(self) -> float:
        """The longest time between two samples of a logging; 0 where none was accounted for."""
        loggings = (self.manifest.get("samples") or {}).get("loggings") or []
        return max((float(each["period_ticks"]) for each in loggings), default=0.0) * self.tick_us / 1e6

    @property
    def columns(self) -> list[str]:
        """The columns of the samples."""
        return [str(name) for name in self.manifest.get("columns") or []]

    @property
    def motors(self) -> list[str]:
        """The motors in the order of their columns."""
        return [name.removesuffix(".duty_pct") for name in self.columns if name.endswith(".duty_pct")]

    def has_encoder(self, motor: str) -> bool:
        """Whether the shaft of a motor was measured; taken for granted without the bench file's copy."""
        found = None if self.bench is None else next((each for each in self.bench.motors if each.name == motor), None)
        return found is None or found.encoder is not None

    @property
    def servos(self) -> list[str]:
        """The servos in the order of their columns."""
        return [name.removesuffix(".pulse_us") for name in self.columns if name.endswith(".pulse_us")]

    def motor_on(self, axis: int) -> str:
        """The motor on an axis of the board, by its name."""
        if self.bench is not None:
            return next((motor.name for motor in self.bench.motors if motor.axis == axis), f"axis {axis}")
        return self.motors[axis] if axis < len(self.motors) else f"axis {axis}"

    def servo_on(self, channel: int) -> str:
        """The servo on an output of the board, by its name."""
        if self.bench is not None:
            return next((servo.name for servo in self.bench.servos if servo.channel == channel), f"servo {channel}")
        return self.servos[channel] if channel < len(self.servos) else f"servo {channel}"

    def owner_of(self, per: Per, index: int) -> str:
        """Whom a limit of the board belongs to."""
        match per:
            case Per.AXIS:
                return self.motor_on(index)
            case Per.SERVO:
                return self.servo_on(index)
            case _:
                return "board"

    @property
    def limits(self) -> dict[tuple[str, int], int]:
        """All limits of the board as the bench file asks for them, in protocol units; empty without its copy."""
        if self.bench is None:
            return {}
        device = self.manifest.get("device") or {}
        try:
            return self.bench.limits(tick_us=self.tick_us, axes=device.get("axes"), servos=device.get("servos"))
        except FileError:
            return {}


def gather(folder: Path) -> Facts:
    """Read a run folder; raises RecordError where it is none."""
    facts = Facts(folder, read_manifest(folder))
    if facts.manifest.get("status") != "finished":
        facts.is_held = is_held(folder / EVENTS_FILE)
    _read_bench(facts)
    series: dict[str, list[tuple[float, int]]] = {}
    for event in lines_of(folder / EVENTS_FILE):
        _take(facts, event, series)
    if series:
        begins = max(series.items(), key=lambda entry: (entry[0] == "cycle", entry[1][-1][0] - entry[1][0][0]))[1]
        facts.passes = [time_s for time_s, _ in begins]
        facts.pass_numbers = [number for _, number in begins]
    facts.cycles = list(lines_of(folder / CYCLES_FILE)) if (folder / CYCLES_FILE).is_file() else []
    facts.notes = list(lines_of(folder / NOTES_FILE)) if (folder / NOTES_FILE).is_file() else []
    return facts


def lines_of(path: Path) -> Iterator[Document]:
    """The objects of a file of JSON lines, one after another; a torn last line is left out, as the audit tells."""
    try:
        with open(path, "rb") as file:
            for line in file:
                if not line.endswith(b"\n"):
                    return
                yield json.loads(line)
    except (OSError, ValueError) as error:
        raise RecordError(f"{path} cannot be read as an event log: {error}") from error


def _take(facts: Facts, event: Document, series: dict[str, list[tuple[float, int]]]) -> None:
    kind = str(event.get("kind"))
    facts.last_event = event
    if kind == "tripped" and _is_told_again(facts, event):
        return
    if kind == "armed":
        facts.outlived = facts.counts.copy()
    facts.counts[kind] += 1
    if kind in KEPT_KINDS:
        kept = facts.events.setdefault(kind, [])
        if len(kept) < KEPT_MAX:
            kept.append(event)
    elif kind == "judged":
        key = str(event.get("place")), str(event.get("expectation"))
        facts.expectations.setdefault(key, Expectation(*key)).take(event)
    if kind in ("pass_begun", "cycle_begun") and isinstance(event.get("time_s"), int | float):
        begins = series.setdefault("cycle" if kind == "cycle_begun" else str(event.get("place")), [])
        if len(begins) < PASSES_MAX:
            number = event.get("number") if kind == "cycle_begun" else None
            begins.append((float(event["time_s"]), number if isinstance(number, int) else len(begins) + 1))


def _is_told_again(facts: Facts, trip: Document) -> bool:
    """Whether a trip is the last one, which the board holds latched and tells anew when the run is gone on with."""
    known = facts.of("tripped")
    alike = ("tick", "trip", "index", "value")
    return bool(facts.of("run_resumed") and known) and all(known[-1].get(name) == trip.get(name) for name in alike)


def _read_bench(facts: Facts) -> None:
    entry = next((entry for entry in facts.manifest.get("inputs") or [] if entry.get("role") == "bench"), None)
    if entry is None:
        facts.bench_trouble = "the run folder has no copy of a bench file"
        return
    try:
        facts.bench = bench_of_text((facts.folder / entry["file"]).read_text("utf-8"), str(entry["name"]))
    except (OSError, ValueError, FileError) as error:
        facts.bench_trouble = f"the copy of the bench file cannot be read: {error}"
