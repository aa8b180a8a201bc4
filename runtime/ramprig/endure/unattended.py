"""The rules for a run that nobody stands beside: each one that does not hold is named, with the file and the key.

What is asked for is common practice in laboratories that allow unattended running: a finite duration, a way to cut the
power, a fuse, a guard, a place, somebody to call, and limits that stop the motor without the computer. None of it makes
the software a safety function: a stop by software is no emergency stop.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from ramprig.bench import Bench, Motor
from ramprig.quantity import format_bytes, format_duration
from ramprig.record.space import SpacePolicy
from ramprig.sequence.log_forecast import forecast_log
from ramprig.sequence.plan import Plan
from ramprig.sequence.reading import Sequence

LONGEST_S = 7 * 24 * 3600.0
"""A plan that may take longer needs an explicit bound."""
END_MARGIN_S = 60.0
"""A run ends in order so long after its plan's longest duration at the latest."""
MOCKS = ("mock:", "core:")
"""Ports behind which nothing real moves."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Missing:
    """A rule that does not hold: `file` and `key` where it is to be mended ("" for the command line), and why."""

    file: str
    key: str
    text: str

    def __str__(self) -> str:
        where = f"{self.file}: {self.key}" if self.file else self.key
        return f"{where}: {self.text}"


def longest_s(plan: Plan, sequence: Sequence, *, at_most_s: float | None) -> float:
    """The longest that the run may take in s, interruptions and their waits among it."""
    policy = sequence.interruptions
    planned_s = plan.totals.most * plan.tick_us / 1e6 + policy.resumes * float(policy.within_s) + END_MARGIN_S
    return planned_s if at_most_s is None else min(planned_s, at_most_s)


def missing_rules(
    bench: Bench, sequence: Sequence, plan: Plan, *, url: str, free_bytes: int, at_most_s: float | None = None
) -> tuple[Missing, ...]:
    """Every rule that does not hold for this run on the port `url`, with `free_bytes` where it is to be recorded."""
    driven = [motor for motor in bench.motors if plan.totals.peak_duty.get(motor.name)]
    rules = [
        *_safety(bench),
        *_link(bench, url),
        *_supply(bench),
        *(missing for motor in driven for missing in _motor(bench, motor)),
        *_duration(sequence, plan, at_most_s),
        *_interruption(sequence, plan),
        *_disk(bench, plan, longest_s(plan, sequence, at_most_s=at_most_s), free_bytes),
    ]
    return tuple(rules)


_SAFETY_TEXTS = {
    "contact": "who answers for the bench tonight, and how to reach them",
    "place": "where the bench stands",
    "fuse": "the fuse in the supply to the bridges",
    "power cut": "what cuts the motor's power by hand, and where it is",
    "guard": "what keeps hands away",
}


def _safety(bench: Bench) -> Iterator[Missing]:
    for key in bench.safety.missing():
        yield Missing(file=bench.file, key=f"safety: {key}", text=f"not said: {_SAFETY_TEXTS[key]}")


def _link(bench: Bench, url: str) -> Iterator[Missing]:
    texts = {
        "lease_ms": ("link: lease", "after which silence the board stops by itself"),
        "stop_ticks": ("link: stop within", "how long a controlled stop may take until the outputs are cut"),
    }
    for item, (key, text) in texts.items():
        if item not in bench.link.settings:
            yield Missing(file=bench.file, key=key, text=f"not said: {text}")
    if bench.board.serial is None and not url.startswith(MOCKS):
        text = "'any' board may answer: name the one, so that no other is driven"
        yield Missing(file=bench.file, key="board: serial", text=text)


def _supply(bench: Bench) -> Iterator[Missing]:
    under = bench.supply.settings.get("under_mv")
    if under is None or under.value <= 0:
        text = "no lower and upper voltage at which the board trips, such as '9 V to 16 V'"
        yield Missing(file=bench.file, key="supply: allowed", text=text)


def _motor(bench: Bench, motor: Motor) -> Iterator[Missing]:
    def missing(key: str, text: str) -> Missing:
        return Missing(file=bench.file, key=f"motors: {motor.name}: {key}", text=text)

    if "thermal_s" not in motor.settings:
        yield missing("rated: time constant", "not said, so the overload trip does not know how fast the winding heats")
    if motor.encoder is None:
        yield missing("encoder", "without one a stalled shaft is not noticed")
        return
    stall = motor.settings.get("stall_duty")
    if stall is None or stall.value <= 0:
        yield missing("limits: stall", "not set: a shaft that is held would heat until the overload trip")
    if "wrong_counts" not in motor.settings:
        yield missing("limits: wrong way", "not set: a motor that turns against its duty would go on")
    if "speed_counts" not in motor.settings:
        yield missing("limits: speed", "not set: a motor that races, as with a broken coupling, would go on")


def _duration(sequence: Sequence, plan: Plan, at_most_s: float | None) -> Iterator[Missing]:
    longest = longest_s(plan, sequence, at_most_s=at_most_s)
    if longest > LONGEST_S:
        text = f"the plan may take {format_duration(longest)}: say how long at most, as by --at-most '16 h'"
        yield Missing(file="", key="--at-most", text=text)


def _interruption(sequence: Sequence, plan: Plan) -> Iterator[Missing]:
    file = sequence.mark.source.file
    if plan.counts_cycles and not sequence.interruptions.said:
        text = "not said: 'stop', or {resume at most: 3, within: 2 min}"
        yield Missing(file=file, key="on interruption", text=text)
    if sequence.interruptions.after_trip:
        text = "a motor that has tripped is somebody's to look at before it runs again: leave it out"
        yield Missing(file=file, key="on interruption: after a trip", text=text)


def _disk(bench: Bench, plan: Plan, seconds: float, free_bytes: int) -> Iterator[Missing]:
    need_bytes = forecast_bytes(bench, plan, seconds)
    wanted = SpacePolicy.for_run(need_bytes).warn_bytes
    if free_bytes < wanted:
        text = (
            f"{format_bytes(free_bytes)} are free; the log takes {format_bytes(need_bytes)}, and twice that with a "
            f"reserve, {format_bytes(wanted)}, are wanted: make room, or log less often"
        )
        yield Missing(file="", key="--runs", text=text)


def forecast_bytes(bench: Bench, plan: Plan, seconds: float) -> int:
    """How large the log becomes in so many seconds, in bytes."""
    return forecast_log(plan, bench, round(seconds * 1e6 / plan.tick_us)).size_bytes
