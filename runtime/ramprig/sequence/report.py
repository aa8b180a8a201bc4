"""What `ramprig check` prints: the plan's timeline, how long it takes, what it asks of motors, supply and disk."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from ramprig.bench import Bench, Motor
from ramprig.quantity import format_current, format_duration, format_duty

from .log_forecast import log_text, thinning_text
from .plan import Branches, Cycles, Loop, Part, Plan, Run, Series, Totals

LINES_MAX = 2000
"""A timeline has at most so many lines; a longer one says how many are left out."""
INCLUDED = "~"
"""Before the number of a line in an included file."""


@dataclass(frozen=True, slots=True)
class _Line:
    """A line of the timeline: ticks since the begin, whether waits came before, depth, length, where and what."""

    at: int
    later: bool
    depth: int
    part: Part
    text: str


def report_lines(plan: Plan, bench: Bench) -> list[str]:
    """The whole report, ASCII, one string a line."""
    return [*summary_lines(plan, bench), "", *timeline_lines(plan)]


def summary_lines(plan: Plan, bench: Bench) -> list[str]:
    """Name, duration, motors, log and remarks."""
    lines = [plan.name]
    if plan.about:
        lines.append(f"  {plan.about}")
    lines.append(f"bench     {bench.name} ({bench.file})")
    lines.append(f"takes     {_duration(plan)}")
    lines += [f"motor     {text}" for text in _motors(plan, bench)]
    totals = plan.totals
    lines.append(f"orders    {totals.orders}, expectations {totals.judgements}")
    lines += [f"cycles    {part.text.removeprefix('cycle ')}" for part in plan.cycles]
    lines += wear_lines(plan)
    lines.append(f"log       {log_text(plan, bench)}")
    if plan.keeping.thinning is not None:
        lines.append(f"thinned   {thinning_text(plan)}")
    lines += [f"remark    {remark}" for remark in plan.remarks]
    return lines


def wear_lines(plan: Plan) -> list[str]:
    """By which limits the cycles are judged for drift and wear; none where they are not."""
    return [f"wear      {text}" for rules in plan.wear for text in rules.lines()]


def _seconds(plan: Plan, ticks: int) -> float:
    return ticks * plan.tick_us / 1e6


def _duration(plan: Plan) -> str:
    totals = plan.totals
    known = format_duration(_seconds(plan, totals.least))
    if not totals.waits:
        return known
    most = format_duration(_seconds(plan, totals.most))
    verb = "takes" if totals.waits == 1 else "take"
    return f"{known} and what {_count(totals.waits, 'wait')} {verb}; {most} at the longest"


def _motors(plan: Plan, bench: Bench) -> Iterator[str]:
    totals = plan.totals
    for motor in bench.motors:
        if motor.name in totals.peak_duty:
            yield _motor(motor, totals, bench)


def _motor(motor: Motor, totals: Totals, bench: Bench) -> str:
    peak = totals.peak_duty[motor.name]
    starts = totals.starts.get(motor.name, 0)
    text = f"{motor.name}: {_count(starts, 'start')}, peak duty {format_duty(peak)}"
    if totals.reversals:
        text += f", {_count(totals.reversals, 'reversal')} in all"
    if motor.model is not None:
        ohms = motor.model.resistance_ohm + motor.model.bridge_ohm
        held_a = bench.supply.voltage_v * peak / 10_000 / ohms
        trip_a = motor.limits(1000)["trip_ma"] / 1000
        text += f"; {format_current(held_a)} if the shaft is held (trips above {format_current(trip_a)})"
    return text


def _count(number: int, what: str) -> str:
    return f"{number} {what}" if number == 1 else f"{number} {what}s"


# ---- the timeline ------------------------------------------------------------------------------------------------


def timeline_lines(plan: Plan) -> list[str]:
    """One line for each part that does something; a repeat shows its first pass.

    `+` marks times after a wait, `~` lines of an included file.
    """
    file = plan.root.mark.source.file
    lines = [f"{'at':>12}  {'for':>10}  {'line':>6}  what"]
    left_out = 0
    for line in _walk(plan.root, 0, later=False, depth=0):
        if len(lines) > LINES_MAX:
            left_out += 1
            continue
        lines.append(_text(plan, line, file))
    if left_out:
        lines.append(f"{left_out} more lines are left out")
    return lines


def _text(plan: Plan, line: _Line, file: str) -> str:
    at = f"{_seconds(plan, line.at):.3f} s" + ("+" if line.later else " ")
    length = format_duration(_seconds(plan, line.part.totals.least)) if line.part.totals.least else ""
    place = line.part.mark
    where = str(place.line) if place.source.file == file else f"{INCLUDED}{place.line}"
    if line.part is plan.root.parts[-1]:
        where = "end"
    return f"{at:>12}  {length:>10}  {where:>6}  {'  ' * line.depth}{line.text}".rstrip()


def _walk(part: Part, at: int, *, later: bool, depth: int) -> Iterator[_Line]:
    """The lines of a part that begins at `at`."""
    match part:
        case Series(parts=parts, heading=heading):
            if heading:
                yield _Line(at, later, depth, part, part.text)
            for inner in parts:
                yield from _walk(inner, at, later=later, depth=depth + heading)
                at += inner.totals.least
                later = later or inner.totals.waits > 0
        case Branches(parts=parts):
            yield _Line(at, later, depth, part, part.text)
            for inner in parts:
                yield _Line(at, later, depth + 1, inner, inner.text)
                yield from _walk(inner, at, later=later, depth=depth + 2)
        case Loop(first=first):
            yield _Line(at, later, depth, part, part.text)
            yield from _walk(first, at, later=later, depth=depth + 1)
        case Cycles():
            yield _Line(at, later, depth, part, part.text)
            yield from _walk_cycles(part, at, depth=depth + 1)
        case Run(length=0, motions=()):
            return
        case _:
            yield _Line(at, later, depth, part, part.text)


def _walk_cycles(part: Cycles, at: int, *, depth: int) -> Iterator[_Line]:
    """Each kind of turn once: when one begins depends on those before, so later lines are of an unknown time."""
    turns = (("before the first cycle", part.before), ("check", part.first_check), ("each cycle", part.first))
    later = False
    for text, turn in turns:
        if turn is None:
            continue
        yield _Line(at, later, depth, turn, text)
        yield from _walk(turn, at, later=later, depth=depth + 1)
        at += turn.totals.least
        later = True
