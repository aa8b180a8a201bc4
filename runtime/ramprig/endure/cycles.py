"""The count of cycles read back from a run folder, as a finished run or a crash left it.

What is not known is said: a cycle that was commanded and never written down as done may or may not have moved, so the
true number of cycles done lies between `done` and `done` + 1 for each break.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from ramprig.errors import RecordError
from ramprig.record.events import from_rfc3339
from ramprig.record.folder import CYCLES_FILE
from ramprig.record.reading import read_cycles
from ramprig.sequence.cycle_plan import BlockSoFar
from ramprig.sequence.cycle_run import CycleOutcome, PastStarts
from ramprig.sequence.outcome import Counted
from ramprig.sequence.spacing import HOUR_S

Line = Mapping[str, Any]  # JSON as it comes: what is in it is checked where it is used


@dataclass(frozen=True, slots=True, kw_only=True)
class CycleRecord:
    """What the count of cycles says.

    `open_number` is the cycle that was commanded last and neither done nor told as broken off, None where there is
    none; `counted` has it in `commanded` only. `lines` are those of the file, `torn_bytes` the length of a torn last
    one, which is left out.
    """

    counted: Counted = field(default_factory=Counted)
    blocks: Mapping[int, BlockSoFar] = field(default_factory=dict)
    open_number: int | None = None
    open_block: int | None = None
    lines: Sequence[Line] = ()
    torn_bytes: int = 0

    def cycles(self) -> list[Line]:
        """The cycles that were done, in order, with their begin and end ticks and what became of them."""
        return [line for line in self.lines if line["kind"] == "cycle_done"]

    def checks(self) -> list[Line]:
        """The checks that were done, in order."""
        return [line for line in self.lines if line["kind"] == "check_done"]

    def starts(self, now_unix_s: float) -> tuple[PastStarts, ...]:
        """The starts of the last hour before `now_unix_s`, by the host's wall clock.

        Those of a cycle or check that was broken off are taken as of when that was written down, else as of just now,
        since nothing tells when they were; all of its starts are taken as made.
        """
        found: list[PastStarts] = []
        known: Mapping[str, int] = {}
        under_way: Mapping[str, int] | None = None
        for line in self.lines:
            kind, made = line["kind"], under_way
            if kind in ("cycle_done", "check_done"):
                made = known = line["starts"]
            if made is not None:  # else a cycle or check that this line shows as broken off
                age_s = max(0.0, now_unix_s - from_rfc3339(line["utc"]).timestamp())
                found += _past(made, age_s) if age_s < HOUR_S else []
            under_way = line.get("starts", known) if kind in ("cycle_commanded", "check_commanded") else None
        return (*found, *_past(under_way or {}, 0.0))


def _past(starts: Mapping[str, int], age_s: float) -> list[PastStarts]:
    return [PastStarts(motor, int(count), age_s) for motor, count in starts.items() if count]


def read_cycle_record(folder: Path) -> CycleRecord:
    """The count of cycles of a run. Raises RecordError where it cannot be read or contradicts itself."""
    lines, torn_bytes = read_cycles(folder)
    try:
        return replace(_counted(lines), torn_bytes=torn_bytes)
    except (KeyError, TypeError, ValueError) as error:
        raise RecordError(f"{folder / CYCLES_FILE} cannot be read as a count of cycles: {error}") from error


def _counted(lines: Iterable[Line]) -> CycleRecord:
    record = CycleRecord()
    blocks: dict[int, BlockSoFar] = {}
    kept: list[Line] = []
    for line in lines:
        kept.append(line)
        block = int(line["block"])
        so_far = blocks.setdefault(block, BlockSoFar())
        match line["kind"]:
            case "cycle_commanded":
                record = _commanded(record, line)
            case "cycle_done":
                record = _done(record, line)
                failed = line["outcome"] == CycleOutcome.FAILED
                blocks[block] = replace(
                    so_far, done=so_far.done + 1, failed=so_far.failed + failed, run_s=float(line["run_s"])
                )
            case "check_done":
                blocks[block] = replace(so_far, run_s=float(line["run_s"]))
            case "cycle_interrupted":
                record = _interrupted(record, line)
            case "block_over":
                blocks[block] = replace(so_far, run_s=float(line["run_s"]), over=True)
    return replace(record, blocks=blocks, lines=kept)


def _commanded(record: CycleRecord, line: Line) -> CycleRecord:
    """A cycle that follows one still open shows that this one was broken off."""
    counted, number = record.counted, int(line["number"])
    if number != counted.commanded + 1:
        raise ValueError(f"cycle {number} follows cycle {counted.commanded}")
    if record.open_number is not None:
        counted = replace(counted, interrupted=counted.interrupted + 1)
    counted = replace(counted, commanded=number)
    return replace(record, counted=counted, open_number=number, open_block=int(line["block"]))


def _done(record: CycleRecord, line: Line) -> CycleRecord:
    number, counted = int(line["number"]), record.counted
    if number != record.open_number:
        raise ValueError(f"cycle {number} is told as done, and was not under way")
    match CycleOutcome(line["outcome"]):
        case CycleOutcome.CONFIRMED:
            counted = replace(counted, confirmed=counted.confirmed + 1)
        case CycleOutcome.FAILED:
            counted = replace(counted, failed=counted.failed + 1)
        case CycleOutcome.COMMANDED:
            counted = replace(counted, unjudged=counted.unjudged + 1)
    return replace(record, counted=counted, open_number=None, open_block=None)


def _interrupted(record: CycleRecord, line: Line) -> CycleRecord:
    if int(line["number"]) != record.open_number:
        raise ValueError(f"cycle {line['number']} is told as broken off, and was not under way")
    counted = replace(record.counted, interrupted=record.counted.interrupted + 1)
    return replace(record, counted=counted, open_number=None, open_block=None)
