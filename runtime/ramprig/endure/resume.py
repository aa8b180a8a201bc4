"""Goes on with a run that was interrupted, at its next cycle: by hand after anything, by itself as the sequence says.

What is gone on with is the run as it was begun: sequence, values and bench file as they were then. Before anything
moves the board is identified again, its limits are compared with those of the first part, and only the latch that the
interruption itself left is ended.
"""

from __future__ import annotations

import hashlib
from collections import deque
from collections.abc import Callable, Iterable, Mapping
from contextlib import AbstractContextManager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from ramprig.bench import Bench, load_bench
from ramprig.errors import FileError, LinkError, RecordError, Refused, StoppedByUser, UsageError, WrongDevice
from ramprig.port.base import Port
from ramprig.quantity import format_duration
from ramprig.record.appendfile import is_held
from ramprig.record.events import from_rfc3339, jsonable, rfc3339
from ramprig.record.folder import EVENTS_FILE
from ramprig.record.parts import parts_of
from ramprig.record.reading import EventLines, read_manifest
from ramprig.sequence.carry_on import CarryOn
from ramprig.sequence.cycle_run import RunSoFar
from ramprig.sequence.executive import Progress
from ramprig.sequence.kept import kept_sequence, kept_values
from ramprig.sequence.outcome import Outcome
from ramprig.sequence.reading import Sequence, read_sequence
from ramprig.sequence.running import RunResult, RunWish, run_sequence
from ramprig.sequence.steps import Cycle
from ramprig.session.session import Session
from ramprig_link.words import Trip

from .cycles import CycleRecord, read_cycle_record
from .interruption import (
    LINK_TRIPS,
    Cause,
    Interruption,
    cause_of_manifest,
    cause_of_outcome,
    last_known_unix_s,
    was_unattended,
)
from .live import watching
from .notes import add_note

RETRY_S = 2.0
"""After an interruption the board is looked for this often."""
LATE_S = 1.0
"""A look that comes this much later than allowed, as on a busy host, is still made."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Broken:
    """A run that may be gone on with: its folder, what it was made from, and what is known of it.

    `changed` are files that are no longer as they were when the run began; the copies in the run folder are used.
    `lines` are those of the count of cycles.
    """

    folder: Path
    manifest: Mapping[str, Any]  # JSON as it comes, of a checked format
    cause: Cause
    sequence: Sequence
    bench: Bench
    port_url: str
    so_far: RunSoFar
    open_number: int | None
    last_unix_s: float
    changed: tuple[str, ...]
    lines: tuple[Mapping[str, Any], ...] = ()


# ---- what a folder says --------------------------------------------------------------------------------------------


def read_broken(folder: Path, *, now_unix_s: float) -> Broken:
    """The run in `folder`, as far as it came. Raises UsageError where there is nothing to go on with, RecordError,
    FileError.
    """
    manifest = read_manifest(folder)
    cause = cause_of_manifest(manifest)
    if cause is None:
        raise UsageError(f"{folder}: this run came to its end ({manifest.get('verdict')}); there is nothing to resume")
    if cause is Cause.HOST and is_held(folder / EVENTS_FILE):
        raise UsageError(f"{folder}: this run is under way: a program is still writing it")
    sequence, bench, changed = _made_from(folder, manifest)
    record = read_cycle_record(folder)
    so_far, open_number = _so_far(folder, manifest, record, now_unix_s)
    if not any(isinstance(step, Cycle) for step in sequence.steps):
        raise UsageError(f"{folder}: the sequence has no 'cycle', so there is no place to go on at; run it anew")
    return Broken(
        folder=folder,
        manifest=manifest,
        cause=cause,
        sequence=sequence,
        bench=bench,
        port_url=str((manifest.get("settings") or {}).get("port") or bench.port.url),
        so_far=so_far,
        open_number=open_number,
        last_unix_s=last_known_unix_s(manifest, list(deque(_events_of(folder), maxlen=1)), folder),
        changed=changed,
        lines=tuple(record.lines),
    )


def _events_of(folder: Path) -> Iterable[dict[str, Any]]:
    """The events one after another: a run of weeks has more of them than need be in memory."""
    return EventLines(folder / EVENTS_FILE) if (folder / EVENTS_FILE).exists() else ()


def _made_from(folder: Path, manifest: Mapping[str, Any]) -> tuple[Sequence, Bench, tuple[str, ...]]:
    """Sequence and bench of the run: the user's files where they are unchanged, else the copies in the folder."""
    inputs = list(manifest.get("inputs", []))
    changed = tuple(str(entry["name"]) for entry in inputs if _digest(Path(entry["name"])) != entry["sha256"])
    by_role: dict[str, Path] = {}
    for entry in inputs:
        copy = folder / entry["file"]
        if _digest(copy) != entry["sha256"]:
            raise RecordError(f"{copy} is not what the run was made from; the run cannot be gone on with")
        by_role.setdefault(str(entry["role"]), copy if changed else Path(entry["name"]))
    missing = [role for role in ("bench", "sequence") if role not in by_role]
    if missing:
        raise RecordError(f"{folder} has no copy of its {' and '.join(missing)}: the run cannot be gone on with")
    if changed:
        return kept_sequence(folder, manifest), load_bench(by_role["bench"]), changed
    sequence = read_sequence(by_role["sequence"], settings=kept_values(manifest))
    return sequence, load_bench(by_role["bench"]), changed


def _digest(path: Path) -> str:
    try:
        with open(path, "rb") as file:
            return hashlib.file_digest(file, "sha256").hexdigest()
    except OSError:
        return ""


def _so_far(
    folder: Path, manifest: Mapping[str, Any], record: CycleRecord, now_unix_s: float
) -> tuple[RunSoFar, int | None]:
    """What is done, and the cycle whose end is not known; that one is counted as broken off."""
    counted = record.counted
    if record.open_number is not None:
        counted = replace(counted, interrupted=counted.interrupted + 1)
    held = failed = 0
    first = ""
    for event in _events_of(folder):
        if event["kind"] == "judged":
            held += bool(event["held"])
            failed += not event["held"]
            if not event["held"] and not first:
                first = f"{event['expectation']}: found {event['found']}"
    so_far = RunSoFar(
        part=len(parts_of(dict(manifest))) + 1,
        counted=counted,
        blocks=record.blocks,
        starts=record.starts(now_unix_s),
        held=held,
        failed=failed,
        first_failure=first,
        open_number=record.open_number,
        open_block=record.open_block or 0,
    )
    return so_far, _last_open(record.lines, record.open_number)


def _last_open(lines: Any, open_number: int | None) -> int | None:  # Any: JSON as it comes
    """The cycle that the break fell into, told as broken off or not told at all."""
    if open_number is not None:
        return open_number
    last = lines[-1] if lines else {}
    return int(last["number"]) if last.get("kind") == "cycle_interrupted" else None


# ---- going on ------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class WatchedOver:
    """Whether nobody stands beside the next part of a run, and what keeps the computer awake for it."""

    unattended: bool = False
    kept_awake_by: str | None = None


def wish_to_carry_on(
    broken: Broken,
    wish: RunWish,
    *,
    by: str,
    now_unix_s: float,
    after_trip: bool = False,
    latest_end_unix_s: float | None = None,
    at_most: str | None = None,
    port_url: str | None = None,
    watched_over: WatchedOver | None = None,
) -> RunWish:
    """The wish for the next part of the run, which ends by `latest_end_unix_s`, None: as the run was begun.

    `at_most` is what the user said of that, `port_url` the port's name where it has another one now. `watched_over`
    None is as the part before. Raises Refused after a trip that nobody has said may be passed over, UsageError where
    its latest end has gone by.
    """
    if broken.cause is Cause.TRIP and not after_trip:
        raise Refused(
            "resume", "trip", f"the run ended by a trip ({broken.manifest.get('stop_reason')}); --after-trip goes on"
        )
    over = WatchedOver(*was_unattended(broken.manifest)) if watched_over is None else watched_over
    interruption = Interruption.of(
        broken.manifest,
        broken.cause,
        last_unix_s=broken.last_unix_s,
        now_unix_s=now_unix_s,
        by=by,
        open_number=broken.open_number,
        cycles_done=broken.so_far.counted.done,
        unattended=over.unattended,
        kept_awake_by=over.kept_awake_by,
    )
    told = jsonable(interruption)
    assert isinstance(told, dict)  # a dataclass is written as an object
    first = parts_of(dict(broken.manifest))[0]
    settings = dict(broken.manifest.get("settings") or {})
    settings |= {name: said for name, said in (("at_most", at_most), ("port", port_url)) if said is not None}
    if latest_end_unix_s is not None:
        settings["latest_end"] = rfc3339(latest_end_unix_s)
    elif settings.get("latest_end") is not None:
        latest_end_unix_s = from_rfc3339(str(settings["latest_end"])).timestamp()
        if latest_end_unix_s <= now_unix_s:
            raise UsageError(f"the run's latest end, {settings['latest_end']}, has gone by; say --at-most TIME anew")
    carry_on = CarryOn(
        folder=broken.folder,
        manifest={**broken.manifest, "settings": settings},
        so_far=broken.so_far,
        interruption=told,
        board=dict(first.get("device") or {}),
        limits_digest=str(first.get("limits_digest") or ""),
        forgiven=frozenset(trip.word for trip in Trip) if after_trip else LINK_TRIPS,
        lines=broken.lines,
    )
    return replace(
        wish,
        sequence=broken.sequence,
        bench=broken.bench,
        carry_on=carry_on,
        latest_end_unix_s=latest_end_unix_s,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Surroundings:
    """What a run that goes on by itself needs of its caller.

    `open_port` opens the port anew, by whatever name it has now; `pause` lets so many seconds pass while no port is
    open; `wall` is the time of day in Unix seconds, `now` a clock that nobody sets. `tell` says what is going on to the
    user; `explain` tells of the run in a folder why it was interrupted, as far as that is known. The others are those
    of `run_sequence`.
    """

    open_port: Callable[[], Port]
    pause: Callable[[float], None]
    wall: Callable[[], float]
    now: Callable[[], float]
    tell: Callable[[str], None]
    progress: Callable[[Progress], None] | None = None
    guard: Callable[[Session], AbstractContextManager[object]] | None = None
    asked_by: Callable[[], str] | None = None
    explain: Callable[[Path], list[str]] = lambda folder: []
    began: Callable[[Path], None] | None = None


def run_enduring(wish: RunWish, around: Surroundings, *, port: Port | None = None) -> RunResult:
    """Run a sequence and go on after each lost link and restarted board, as often as the sequence allows.

    Its cycles are judged for wear, also where the wish says nothing of it. `port` is the open port of the first part,
    None to open it. Raises what `run_sequence` raises, for the first part alone; a board that does not come back in
    time, or a user who does not wait for it, ends the run with the outcome of the part before.
    """
    if wish.watching is None:
        wish = replace(wish, watching=watching(around.tell))
    result = _run(wish, around, around.open_port() if port is None else port)
    while (folder := result.folder) is not None and _may_go_on(wish.sequence, result.outcome, folder):
        for line in (f"interrupted: {result.outcome.sentence}", *around.explain(folder)):
            around.tell(line)
        try:
            later = _too_late(wish.sequence, result.outcome) or _go_on(wish, around, folder)
        except (KeyboardInterrupt, StoppedByUser):  # nothing runs while the board is looked for
            later = "the user stopped it"
        if isinstance(later, str):
            add_note(folder, f"not gone on with: {later}", unix_s=around.wall(), by="ramprig")
            outcome = replace(result.outcome, sentence=f"{result.outcome.sentence}; not gone on with: {later}")
            return RunResult(outcome=outcome, folder=folder)
        result = later
    return result


def _run(wish: RunWish, around: Surroundings, port: Port) -> RunResult:
    return run_sequence(
        wish, port, progress=around.progress, guard=around.guard, asked_by=around.asked_by, began=around.began
    )


def _may_go_on(sequence: Sequence, outcome: Outcome, folder: Path) -> bool:
    """Whether the sequence lets the run go on by itself after this outcome."""
    policy, cause = sequence.interruptions, cause_of_outcome(outcome)
    if cause is None or not (cause.by_itself or (cause is Cause.TRIP and policy.after_trip)):
        return False
    told = [each for each in read_manifest(folder).get("interruptions", []) if each.get("by") == "policy"]
    return len(told) < policy.resumes


def _too_late(sequence: Sequence, outcome: Outcome) -> str:
    """Why nothing may move by itself any more: the host comes back to the run after too long. Empty where it may."""
    within_s = float(sequence.interruptions.within_s)
    if outcome.away_s <= within_s:
        return ""
    away = format_duration(round(outcome.away_s))
    return f"the computer did not look after the run for {away}, and {format_duration(within_s)} are allowed"


def _go_on(wish: RunWish, around: Surroundings, folder: Path) -> RunResult | str:
    """The next part of the run; a sentence where there is none, because the board did not come back as it was."""
    policy = wish.sequence.interruptions
    began_s, began_unix_s = around.now(), around.wall()
    late, why = f"the board did not come back within {format_duration(policy.within_s)}", ""
    around.tell(f"looking for the board for {format_duration(policy.within_s)} at most")
    while True:
        around.pause(RETRY_S)
        now_s = around.wall()
        gone_s = max(around.now() - began_s, now_s - began_unix_s)  # the one stands still in a sleep, the other is set
        if gone_s > max(float(policy.within_s), RETRY_S) + LATE_S:
            return late + why
        try:
            port = around.open_port()  # first, as the record of a week takes its time to be read
            try:
                now_s = around.wall()
                broken = read_broken(folder, now_unix_s=now_s)
                next_wish = wish_to_carry_on(broken, wish, by="policy", now_unix_s=now_s, after_trip=policy.after_trip)
            except BaseException:
                port.close()
                raise
            return _run(next_wish, around, port)
        except (WrongDevice, Refused, RecordError, UsageError, FileError) as error:
            return str(error)
        except LinkError as error:
            why = f" ({error})"
