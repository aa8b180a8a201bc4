"""Why a run ended as it did: one sentence with the likely cause, what speaks for it, the next step, and other causes.

Read from the run folder alone: the trip with its trail and the samples before it, the events with their times, and the
bench file's copy. It is a judgement and says so; every number it names can be looked up in the folder.
"""

from __future__ import annotations

import textwrap
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from ramprig.quantity import format_duration, format_voltage

from .around import Around, around
from .facts import BROKEN_OFF, UNDER_WAY, Document, Facts, gather
from .tripcauses import Cause, Trip, causes_of
from .worn import worn_causes

NEAR_S = 3.0
"""Events so long before the end belong to it."""
SHOWN_MAX = 3
WIDTH = 100
NOISE_LINES = 3
"""From so many damaged or repeated lines near the end on, the link is noisy."""
LATE_LEASE_MS = 500.0
"""Orders are sent some 0.8 s ahead, so a host that hung long enough to be late did so for about this long, or more."""
HUNG_SHARE = 0.6
"""A host that was late by this share of the lease was hung."""


@dataclass(frozen=True, slots=True)
class Explanation:
    """What happened, and its causes with the likeliest first; `causes` may be empty where nothing can be said."""

    what: str
    causes: tuple[Cause, ...]

    @property
    def likely(self) -> Cause | None:
        """The likeliest cause."""
        return self.causes[0] if self.causes else None

    def lines(self, width: int = WIDTH) -> list[str]:
        """For a terminal: the sentence with the likely cause, evidence, next step, and what else it may be."""
        first = self.likely
        if first is None:
            return _wrapped("ended", f"{self.what}. No likely cause was found in what was recorded.", width)
        lines = _wrapped("likely", f"{first.sentence}.", width)
        lines += _wrapped("because", "; ".join(first.evidence), width) if first.evidence else []
        lines += _wrapped("next", first.next_step, width)
        others = [cause.sentence for cause in self.causes[1:SHOWN_MAX] if cause.weight >= 0.25]
        lines += _wrapped("or", "; or ".join(others), width) if others else []
        return lines


def _wrapped(label: str, text: str, width: int) -> list[str]:
    return textwrap.wrap(text, width, initial_indent=f"{label:<9}", subsequent_indent=" " * 9)


def explain_folder(folder: Path) -> Explanation | None:
    """Why the run in this folder ended; None where it passed, or has not ended. Raises RecordError where it is none."""
    return explain(gather(folder))


def likely_lines(folder: Path, *, width: int = WIDTH) -> list[str]:
    """The likely cause with what speaks for it and the next step, for a terminal; none where the run passed.

    The run is over and its sentence follows: whatever goes wrong in explaining it must not hide that.
    """
    try:
        explanation = explain_folder(folder)
    except Exception as error:  # also a bug of ours: the end of the run is to be told all the same
        return [f"the end could not be explained: {type(error).__name__}: {error}"]
    return [] if explanation is None else explanation.lines(width)


def explain(facts: Facts) -> Explanation | None:
    """As `explain_folder`, of what was gathered."""
    verdict = facts.verdict
    if verdict in ("passed", UNDER_WAY):
        return None
    what = f"{verdict}: {facts.manifest.get('stop_reason') or 'no reason was written'}"
    causes = sorted(_causes(facts, verdict), key=lambda cause: -cause.weight)
    return Explanation(what, tuple(causes))


def _causes(facts: Facts, verdict: str) -> Iterator[Cause]:
    trips = facts.since_armed("tripped")
    if facts.since_armed("device_exchanged"):
        yield _exchanged(facts.since_armed("device_exchanged")[-1])
    if facts.since_armed("restarted"):
        yield from _restarted(facts, facts.since_armed("restarted")[-1])
    elif trips and trips[-1]["trip"] == "restarted":
        yield from _restarted(facts, trips[-1])
    if trips and verdict != "stopped":
        yield from _tripped(facts, trips[-1])
    elif verdict == "link lost":
        yield from _link(facts, lease_ms=_lease_ms(facts))
    yield from _others(facts, verdict)


def trip_of(facts: Facts, event: Document) -> Trip | None:
    """The trip that an event tells of, with what was recorded around it; None where nothing was."""
    motor = facts.motor_on(int(event.get("index", 0)))
    tick = event.get("tick")
    look = None if tick is None else around(facts, motor, int(tick), time_s=event.get("time_s"))
    if look is None:
        return None
    return Trip(
        word=str(event["trip"]),
        motor=motor,
        value=int(event.get("value", 0)),
        bound=int(event.get("bound", 0)),
        look=look,
        facts=facts,
    )


def _tripped(facts: Facts, event: Document) -> Iterator[Cause]:
    word = str(event["trip"])
    if word == "link_lost":
        yield from _link(facts, lease_ms=float(event.get("bound") or _lease_ms(facts)))
    elif word == "late_order":
        yield from _late_order(facts, event)
    elif word == "line_break":
        yield Cause(
            key="line_break",
            sentence="a BREAK came on the line: a cut-off from the keyboard, or the cable was touched or pulled",
            evidence=("the board read a BREAK on its receive line",),
            next_step="If nobody cut off on purpose, check plug and cable: an open receive line reads as BREAK.",
            weight=0.9,
        )
    elif word == "self_test":
        yield Cause(
            key="self_test",
            sentence="the board found itself faulty",
            evidence=(f"its self-test number {event.get('value')} failed",),
            next_step="Power the board anew; if it comes again, do not use the board.",
            weight=0.95,
        )
    elif word != "restarted":
        trip = trip_of(facts, event)
        if trip is not None:
            yield from causes_of(trip)


# ---- the board ------------------------------------------------------------------------------------------------------


def _exchanged(event: Document) -> Cause:
    return Cause(
        key="other_board",
        sentence="another board answered on the same port",
        evidence=(f"before {event.get('before')}, then {event.get('after')}",),
        next_step="Name the port by USB serial number or path, and look what was replugged.",
        weight=0.98,
    )


def _restarted(facts: Facts, event: Document) -> Iterator[Cause]:
    cause = str(event.get("cause") or "")
    tick, time_s = _last_moment(facts, event)
    looks = [look for name in facts.motors if (look := around(facts, name, tick, time_s=time_s)) is not None]
    driven = next((look for look in looks if look.was_driven), None)
    started = None if driven is None else driven.started_s
    evidence = [f"the board told the cause '{cause}'" if cause else "the board did not tell a cause"]
    if driven is not None:
        volts = driven.between(driven.supply_v, -0.5, 0.01)
        if started is not None:
            evidence.append(f"{format_duration(round(started, 3))} after {driven.motor} was started")
        if len(volts):
            evidence.append(f"supply down to {format_voltage(round(float(volts.min()), 2))} in the samples before")
    brownout = "brown" in cause
    near_start = started is not None and started < 0.5
    yield Cause(
        key="brownout",
        sentence="the board browned out: its supply fell too low" + (" when the motor started" if near_start else ""),
        evidence=tuple(evidence),
        next_step="Feed the board apart from the motors, add a capacitor, ramp more slowly.",
        weight=0.96 if brownout else (0.7 if near_start and not cause else 0.2),
    )
    yield Cause(
        key="watchdog",
        sentence="the board's program hung and its watchdog restarted it",
        evidence=tuple(evidence),
        next_step="Note what was asked of the board; update its firmware.",
        weight=0.95 if "watchdog" in cause else 0.1,
    )
    yield Cause(
        key="power_or_reset",
        sentence="the board lost its power, or was reset by its button or by opening the port",
        evidence=tuple(evidence),
        next_step="Check the board's plug and cable; see `dtr` in the bench file.",
        weight=0.93 if cause and not brownout and "watchdog" not in cause else 0.3,
    )


def _last_moment(facts: Facts, event: Document) -> tuple[int, float | None]:
    """The last tick before a restart: the tick of the event is of the new start."""
    from ramprig.errors import RecordError
    from ramprig.record.volumes import Stream

    del event
    try:
        tail = Stream(facts.last_files, columns=["time_s"]).tail(4096)
    except RecordError:
        return 0, None
    if not len(tail):
        return 0, None
    return int(tail.ticks[-1]) + 1, float(tail.numbers["time_s"][-1]) + facts.tick_us / 1e6


# ---- the link -------------------------------------------------------------------------------------------------------


def _lease_ms(facts: Facts) -> float:
    armed = facts.of("armed")
    return float(armed[-1].get("lease_ms") or 500) if armed else 500.0


def _noise(facts: Facts) -> tuple[int, list[str]]:
    """Damaged and repeated lines of the run, and what to say of them."""
    kinds: dict[str, int] = {}
    for event in facts.since_armed("link_trouble"):
        kinds[str(event.get("trouble"))] = kinds.get(str(event.get("trouble")), 0) + int(event.get("count") or 1)
    damaged = sum(number for name, number in kinds.items() if name.startswith("garbled"))
    parts = facts.manifest.get("link") or {}
    dropped = int(parts.get("dropped_lines") or 0)
    told = [f"{number} times '{name}'" for name, number in kinds.items()]
    if dropped:
        told.append(f"{dropped} lines dropped")
    return max(damaged, dropped), told


def _late_s(facts: Facts) -> float:
    """How late the host was at worst."""
    told = [float(event.get("late_s") or 0) for event in facts.since_armed("late_host")]
    return max([float((facts.manifest.get("link") or {}).get("worst_late_s") or 0), *told])


def _host(facts: Facts, lease_ms: float) -> Iterator[Cause]:
    slept = [float(event.get("slept_s") or 0) for event in facts.since_armed("host_slept")]
    if slept:
        yield Cause(
            key="host_slept",
            sentence="the computer slept",
            evidence=(f"its clock stood still for {format_duration(round(max(slept), 1))} by the board's",),
            next_step="Keep it awake: mains, lid open, sleep timers off; `--unattended` asks the system for it.",
            weight=0.97,
        )
    late_s = _late_s(facts)
    if late_s > 0:
        yield Cause(
            key="host_hung",
            sentence="this computer was held up: the program could not call in",
            evidence=(
                f"it was {format_duration(round(late_s, 3))} late; the lease is {format_duration(lease_ms / 1e3)}",
            ),
            next_step="Close what else uses the computer; watch for a full disk, swapping, a suspended terminal.",
            weight=0.9 if late_s * 1000 > HUNG_SHARE * lease_ms else 0.4,
        )


def _link(facts: Facts, *, lease_ms: float) -> Iterator[Cause]:
    reason = str(facts.manifest.get("stop_reason") or "")
    yield from _host(facts, lease_ms)
    gone = any(word in reason for word in ("pulled out", "unplugged", "is gone", "closed by the far end"))
    if gone:
        yield Cause(
            key="unplugged",
            sentence="the cable was pulled, or the adapter vanished from the computer",
            evidence=(f"the port said: {_without_beside(reason)}", *_near_start(facts)),
            next_step="Check plug, hub and cable; if it comes with a motor's start, suspect interference or a sag.",
            weight=0.95,
        )
    damaged, told = _noise(facts)
    if damaged >= NOISE_LINES:
        yield _noisy(facts, told, weight=0.88)
    if not gone:
        yield Cause(
            key="silent",
            sentence="the board and the computer no longer heard each other, with no damaged line before: one wire of "
            "the link is open, or the board's program hung",
            evidence=(", ".join(told) if told else "no line was damaged", *_near_start(facts)),
            next_step="Ask the board (`ramprig doctor`); check the data wires; power the board anew.",
            weight=0.6,
        )


def _without_beside(reason: str) -> str:
    """The reason without what the run's sentence says beside it."""
    for beside in ("; stop NOT CONFIRMED", "; cycles: ", "; interrupted "):
        reason = reason.partition(beside)[0]
    return reason


def _noisy(facts: Facts, told: list[str], *, weight: float) -> Cause:
    return Cause(
        key="noise",
        sentence="the link is noisy: lines came damaged or not at all",
        evidence=(", ".join(told), *_near_start(facts)),
        next_step="Screen and shorten the cable, keep it off the motor leads, suppress the motor at its brushes; "
        "`ramprig measure link` compares motor off and on.",
        weight=weight,
    )


def _near_start(facts: Facts) -> tuple[str, ...]:
    """Whether the last samples were shortly after a motor's start."""
    tick, time_s = _last_moment(facts, {})
    for name in facts.motors:
        look = around(facts, name, tick, time_s=time_s)
        if look is not None and look.started_s is not None and look.started_s < 1.0:
            return (f"the last sample is {format_duration(round(look.started_s, 3))} after {name} was started",)
    return ()


def _late_order(facts: Facts, event: Document) -> Iterator[Cause]:
    late = f"an order came {event.get('value')} ticks after its start"
    yield from _host(facts, min(_lease_ms(facts), LATE_LEASE_MS))
    damaged, told = _noise(facts)
    worst_s = float((facts.manifest.get("link") or {}).get("round_trip_worst_s") or 0)
    if damaged or told:
        yield Cause(
            key="noise",
            sentence="the link is noisy: orders had to be repeated until one came too late",
            evidence=(late, ", ".join(told)),
            next_step="Screen and shorten the cable, keep it off the motor leads; `ramprig measure link` tells more.",
            weight=0.86 if damaged >= NOISE_LINES else 0.5,
        )
    yield Cause(
        key="slow_link",
        sentence="the link delivers late: an adapter, a hub or a network in between holds lines back",
        evidence=(late, f"the longest round trip was {format_duration(round(worst_s, 4))}"),
        next_step="Plug the adapter in directly; lower its latency timer; `ramprig doctor` measures the round trip.",
        weight=0.45,
    )


# ---- all other ends --------------------------------------------------------------------------------------------------


def _others(facts: Facts, verdict: str) -> Iterator[Cause]:
    reason = str(facts.manifest.get("stop_reason") or "")
    troubles = [str(trouble.get("text")) for trouble in facts.manifest.get("disk_troubles") or []]
    if verdict == "not recorded":
        yield Cause(
            key="disk",
            sentence="the log could no longer be written, so the motors were stopped",
            evidence=tuple(troubles) or (reason,),
            next_step="Make room on the disk, or log less often; `ramprig check` tells how large a log becomes.",
            weight=0.95,
        )
    elif verdict == "stopped":
        yield _stopped(facts, reason)
    elif verdict == BROKEN_OFF:
        yield _broken_off(facts)
    elif verdict == "failed":
        yield from _failed(facts)
    elif verdict == "refused":
        damaged, told = _noise(facts)
        if damaged >= NOISE_LINES:
            yield _noisy(facts, told, weight=0.92)  # a request that was damaged and repeated too late is refused
        yield Cause(
            key="refused",
            sentence="the board refused an order or a request",
            evidence=(reason,),
            next_step="The board's word says why; `ramprig check` shows what the plan asks for.",
            weight=0.9,
        )


_STOPS = {
    "latest end": (
        "it came to its latest end before all steps were carried out",
        "`ramprig resume` with --at-most goes on, where it has cycles.",
    ),
    "unjudged": (
        "this program could no longer judge the wear that was to end the run",
        "Report the fault with the event 'wear_unjudged'; `ramprig resume` goes on with the test.",
    ),
    "board": (
        "the outputs were switched off from elsewhere: a stop at the board, or by another program",
        "Find out who or what stopped it before it is run again.",
    ),
    "user": (
        "a person or the system asked for the stop",
        "Nothing is wrong by this alone; whoever stopped it knows why.",
    ),
}
"""What is said of each kind of stop, and what to do."""
_STOP_WORDS = {"latest end": "ended in order at its latest end", "board": "the board switched its outputs off"}


def _stopped(facts: Facts, reason: str) -> Cause:
    key = next((key for key, words in _STOP_WORDS.items() if reason.startswith(words)), "user")
    if facts.of("wear_unjudged") and reason.startswith("stopped because wear"):
        key = "unjudged"
    sentence, next_step = _STOPS[key]
    return Cause(key=key, sentence=sentence, evidence=(reason, *_stop_verdict(facts)), next_step=next_step, weight=0.9)


def _broken_off(facts: Facts) -> Cause:
    """Where nobody can tell whether the program still runs, it is not told as dead, nor the motor as stopped."""
    last = facts.last_event or {}
    evidence = f"the last event is '{last.get('kind')}' at {last.get('utc')}"
    sentence = "the program ended without a word: killed, the computer lost its power, or it went down"
    next_step = "The board stops by itself when its lease runs out. `ramprig resume` goes on where it can."
    if facts.is_held is None:
        sentence = f"the run is still under way, or {sentence}"
        next_step = f"Look whether the program still runs, and keep clear of the motor. {next_step}"
    return Cause(
        key="broken_off",
        sentence=sentence,
        evidence=(evidence, "run.json says that it is running"),
        next_step=next_step,
        weight=0.9,
    )


def _stop_verdict(facts: Facts) -> tuple[str, ...]:
    judged = facts.of("stop_judged")
    if not judged:
        return ()
    return ("the stop was confirmed" if judged[-1].get("confirmed") else "the stop was NOT confirmed",)


def _failed(facts: Facts) -> Iterator[Cause]:
    yield from worn_causes(facts)
    failing = [found for found in facts.expectations.values() if found.failed]
    for place, found in enumerate(failing[:SHOWN_MAX]):
        first = found.failures[0]
        yield Cause(
            key="expectation",
            sentence=f"{found.what} was not {found.limit}: found {first.get('found')}",
            evidence=(
                f"{found.failed} of {found.judged} times, first at {first.get('time_s')} s",
                f"it stands at {found.place}",
                *((str(first["why"]),) if first.get("why") else ()),
            ),
            next_step="Look at the plots around that time: is the limit right, or the motor, or the step before it?",
            weight=0.9 - 0.1 * place,
        )


def view_of_trip(facts: Facts) -> tuple[Document, Around] | None:
    """The last trip and what was recorded around it, for a plot."""
    for event in reversed(facts.of("tripped")):
        trip = trip_of(facts, event)
        if trip is not None and len(trip.look):
            return event, trip.look
    return None
