"""What broke a run off, as `run.json` tells it, and whether the run may go on after it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from enum import StrEnum
from pathlib import Path
from typing import Any

from ramprig.quantity import format_duration
from ramprig.record.events import from_rfc3339, rfc3339
from ramprig.record.parts import parts_of
from ramprig.record.volumes import volume_files
from ramprig.sequence.outcome import Outcome, Verdict

Document = Mapping[str, Any]  # JSON as it comes: what is in it is checked where it is used

LINK_TRIPS = frozenset({"link_lost", "line_break", "late_order", "restarted"})
"""Trips by which a board answers to a host that is gone, late or asleep, or to its own restart."""


class Cause(StrEnum):
    """What broke a run off."""

    LINK = "the link was lost"
    RESTART = "the board restarted"
    HOST = "the host program ended without a word"
    STOPPED = "it was stopped"
    DISK = "it could not be recorded"
    TRIP = "the board tripped"
    REFUSED = "the board refused"
    BROKEN_OFF = "a fault of the program broke it off"

    @property
    def by_itself(self) -> bool:
        """Whether a policy lets a run go on by itself after it."""
        return self in (Cause.LINK, Cause.RESTART)


def cause_of_outcome(outcome: Outcome) -> Cause | None:
    """What an outcome says broke the run off; None where the run came to its end."""
    if outcome.restarted:
        return Cause.RESTART
    match outcome.verdict:
        case Verdict.LINK_LOST:
            return Cause.LINK
        case Verdict.TRIPPED:
            return Cause.LINK if outcome.trip in LINK_TRIPS else Cause.TRIP
        case Verdict.STOPPED:
            return Cause.STOPPED
        case Verdict.NOT_RECORDED:
            return Cause.DISK
        case Verdict.REFUSED:
            return Cause.REFUSED
        case _:
            return None


def cause_of_manifest(manifest: Document) -> Cause | None:
    """What `run.json` says broke the run off; None where the run came to its end, by itself or by its verdict."""
    if manifest.get("status") != "finished":
        return Cause.HOST
    results = parts_of(dict(manifest))[-1].get("results") or {}
    if results.get("device_restarted"):
        return Cause.RESTART
    trip = str(results.get("trip") or "")
    return {
        Verdict.LINK_LOST.word: Cause.LINK,
        Verdict.TRIPPED.word: Cause.LINK if trip in LINK_TRIPS else Cause.TRIP,
        Verdict.STOPPED.word: Cause.STOPPED,
        Verdict.NOT_RECORDED.word: Cause.DISK,
        Verdict.REFUSED.word: Cause.REFUSED,
        "broken off": Cause.BROKEN_OFF,
    }.get(str(manifest.get("verdict")))


@dataclass(frozen=True, slots=True, kw_only=True)
class Interruption:
    """One break of a run, as the record and the report tell it.

    `last_utc` is the last event or row that is on the disk, `resumed_utc` when the run went on, `down_s` the time
    between by the host's wall clock. `by` is `policy` or `command`. `open_number` is the cycle whose end is not known.
    `unattended` and `kept_awake_by` are how the run went on.
    `reason` is how the part before says that it ended, empty where it could not say.
    """

    number: int
    cause: Cause
    reason: str
    last_utc: str
    resumed_utc: str
    down_s: float
    by: str
    open_number: int | None
    cycles_done: int
    unattended: bool
    kept_awake_by: str | None
    text: str

    @classmethod
    def of(
        cls,
        manifest: Document,
        cause: Cause,
        *,
        last_unix_s: float,
        now_unix_s: float,
        by: str,
        open_number: int | None,
        cycles_done: int,
        unattended: bool = False,
        kept_awake_by: str | None = None,
    ) -> Interruption:
        """The interruption after what the manifest knows."""
        number = len(manifest.get("interruptions", [])) + 1
        down_s = round(max(0.0, now_unix_s - last_unix_s), 3)
        reason = str(manifest.get("stop_reason") or "")
        text = f"interruption {number}: {cause} after {cycles_done} {'cycle' if cycles_done == 1 else 'cycles'} done"
        if open_number is not None:
            text += f", in cycle {open_number}, which counts as not done"
        text += f"; the run went on {format_duration(down_s)} later, by {_BY[by]}"
        if unattended:
            text += ", unattended"
        return cls(
            number=number,
            cause=cause,
            reason=reason,
            last_utc=rfc3339(last_unix_s),
            resumed_utc=rfc3339(now_unix_s),
            down_s=down_s,
            by=by,
            open_number=open_number,
            cycles_done=cycles_done,
            unattended=unattended,
            kept_awake_by=kept_awake_by,
            text=text,
        )


_BY = {"policy": "the sequence's own rule", "command": "`ramprig resume`"}


def was_unattended(manifest: Document) -> tuple[bool, str | None]:
    """Whether nobody was to stand beside the last part of the run, and what kept the computer awake for it."""
    told = [each for each in manifest.get("interruptions") or [] if "unattended" in each]
    last = told[-1] if told else manifest.get("settings") or {}
    return bool(last.get("unattended")), last.get("kept_awake_by")


def last_known_unix_s(manifest: Document, events: Sequence[Document], folder: Path) -> float:
    """When the run was last known to be alive: its last event, or the last write to its samples."""
    times = [from_rfc3339(event["utc"]).timestamp() for event in events[-1:]]
    if manifest.get("status") == "finished" and manifest.get("ended"):
        return max([*times, from_rfc3339(str(manifest["ended"])).timestamp()])
    times += [path.stat().st_mtime for path in volume_files(folder, parts_of(dict(manifest))[-1])]
    return max(times, default=from_rfc3339(str(manifest["started"])).timestamp())
