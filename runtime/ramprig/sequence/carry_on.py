"""Going on with a run that was interrupted: what is handed over, and what must be as it was before anything moves."""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from ramprig.errors import Refused, WrongDevice
from ramprig.record.events import Json, jsonable
from ramprig.session.session import Session

from .cycle_run import RunSoFar
from .cycle_watch import Line
from .rig import Rig
from .tripsay import explain_trip

SAME = ("board", "serial", "firmware", "version", "tick_us", "axes", "servos")
"""What of a device's identity stays the same for a whole run; the number of its starts need not."""


@dataclass(frozen=True, slots=True, kw_only=True)
class CarryOn:
    """A run that was interrupted and is to be gone on with: its folder and `run.json`, and what is done of it.

    `interruption` is what the record tells of the break; `board` the device's identity and `limits_digest` its limits
    in the first part. A latch of the trips `forgiven` is ended; with any other the run is not gone on with. `lines` are
    those of the count of cycles.
    """

    folder: Path
    manifest: Mapping[str, Any]  # JSON as it comes, of a checked format
    so_far: RunSoFar
    interruption: Mapping[str, Json]
    board: Mapping[str, object]
    limits_digest: str
    forgiven: Collection[str]
    lines: Sequence[Line] = ()


def check_same(session: Session, carry_on: CarryOn) -> None:
    """The board, its program and its limits must be those of the first part. Raises WrongDevice."""
    found = jsonable(session.identity)
    assert isinstance(found, dict)  # a dataclass is written as an object
    differences = [
        f"{what} {found.get(what)!r}, {carry_on.board.get(what)!r} before"
        for what in SAME
        if found.get(what) != carry_on.board.get(what)
    ]
    digest = session.limits.digest
    if carry_on.limits_digest and digest != carry_on.limits_digest:
        differences.append(f"limits of the digest {digest}, {carry_on.limits_digest} before")
    if differences:
        raise WrongDevice("the run cannot go on, as the board is not as it was: " + "; ".join(differences))


def end_latch(session: Session, carry_on: CarryOn, rig: Rig) -> None:
    """End the latch that the interruption itself left. Raises Refused; another trip is somebody's to look at."""
    trip = session.trip
    if trip is None:
        return
    if trip.trip not in carry_on.forgiven:
        raise Refused("resume", trip.trip, f"the device is tripped: {explain_trip(trip, rig)}; look at the bench first")
    session.clear()


def told_breaks(carry_on: CarryOn) -> str:
    """How often the run was interrupted and by what, for the end of its last sentence."""
    breaks = [*carry_on.manifest.get("interruptions", []), carry_on.interruption]
    counts: dict[str, int] = {}
    for each in breaks:
        cause = str(each.get("cause"))
        counts[cause] = counts.get(cause, 0) + 1
    causes = ", ".join(cause if count == 1 else f"{cause} ({count} times)" for cause, count in counts.items())
    return f"; interrupted {len(breaks)} {'time' if len(breaks) == 1 else 'times'}: {causes}"
