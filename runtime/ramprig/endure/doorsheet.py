"""The sheet for the door of the room in which a bench runs by itself: one page, as text and as HTML to be printed.

It says what a stranger needs who finds the bench running, the most urgent first and in the largest letters: how to make
it dead, whom to call, what may hurt; then what runs, until when at the latest, and what normal looks like.
"""

from __future__ import annotations

import html
import textwrap
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta, tzinfo

from ramprig.bench import Bench
from ramprig.quantity import format_current, format_duration, format_duty, format_voltage
from ramprig.sequence.plan import Branches, Cycles, Judge, Loop, Part, Plan, Series
from ramprig.sequence.reading import Sequence

WIDTH = 78
NORMAL_MAX = 8
"""Expectations that the sheet lists; the run folder has them all."""
ENDS_MAX = 4
"""Limits to wear that end the run which the sheet lists."""
MUCH_LETTERS = 2000
"""From so many letters on they are smaller, so that one sheet holds them."""
URGENT = 2
"""So many sections stand first and large."""
NOT_SAID = "NOT SAID in the bench file"
NO_EMERGENCY_STOP = "A stop by software is not an emergency stop: only the power cut makes the bench safe to touch."


@dataclass(frozen=True, slots=True, kw_only=True)
class DoorSheet:
    """A title and sections of a heading and lines."""

    title: str
    sections: tuple[tuple[str, tuple[str, ...]], ...]

    def text(self) -> str:
        """As plain text, ASCII where the bench file is, 78 columns."""
        lines = ["=" * WIDTH, *textwrap.wrap(self.title, WIDTH), "=" * WIDTH]
        for heading, items in self.sections:
            lines += ["", heading.upper()]
            for item in items:
                lines += textwrap.wrap(item, WIDTH, initial_indent="  ", subsequent_indent="    ")
        return "\n".join(lines) + "\n"

    def html(self) -> str:
        """As one self-contained page that prints on one sheet of A4 or Letter."""
        parts = [
            f"<section><h2>{html.escape(heading)}</h2>{''.join(f'<p>{html.escape(item)}</p>' for item in items)}"
            "</section>"
            for heading, items in self.sections
        ]
        body = f'<div class="urgent">{"".join(parts[:URGENT])}</div><div class="rest">{"".join(parts[URGENT:])}</div>'
        title = html.escape(self.title)
        letters = sum(len(item) for _, items in self.sections for item in items)
        size = ' class="much"' if letters > MUCH_LETTERS else ""
        return (
            f'<!DOCTYPE html>\n<html lang="en"><head><meta charset="utf-8"><title>{title}</title>\n'
            f"<style>{_STYLE}</style></head>\n<body{size}><h1>{title}</h1>{body}</body></html>\n"
        )


_STYLE = """
@page { margin: 11mm }
* { box-sizing: border-box }
body { font: 11pt/1.28 sans-serif; max-width: 190mm; margin: 6mm auto; padding: 0 4mm; color: #000; background: #fff }
h1 { font-size: 21pt; line-height: 1.15; margin: 0 0 4mm; border: 1.2mm solid #000; padding: 3mm }
h1, p { overflow-wrap: anywhere }
h2 { font-size: 12.5pt; margin: 0 0 0.8mm }
p { margin: 0 0 0.7mm 3mm; padding-left: 3mm; text-indent: -3mm }
section { break-inside: avoid; margin: 0 0 2.5mm; border-bottom: 0.2mm solid #777; padding-bottom: 1.8mm }
.urgent { font-size: 15pt }
.urgent h2 { font-size: 17pt }
.rest { columns: 2; column-gap: 7mm }
.much { font-size: 9pt }
.much h2 { font-size: 10.5pt }
.much .urgent { font-size: 13pt }
.much .urgent h2 { font-size: 15pt }
@media (max-width: 600px) { .rest { columns: 1 } }
@media print { body { margin: 0; padding: 0; max-width: none } .rest { columns: 2 } }
"""


def door_sheet(
    bench: Bench,
    sequence: Sequence,
    plan: Plan,
    *,
    start_unix_s: float,
    latest_end_unix_s: float,
    host: str,
    zone: tzinfo | None = None,
) -> DoorSheet:
    """The sheet of a run that begins now. `host` names the computer; `zone` None is its own time zone."""
    planned_s = plan.totals.least * plan.tick_us / 1e6
    start, latest = _local(start_unix_s, zone), _local(latest_end_unix_s, zone)
    planned = _local(start_unix_s + planned_s, zone)
    return DoorSheet(
        title=f"UNATTENDED TEST RUNNING - until {latest} at the latest",
        sections=(
            ("To make it dead", tuple(_isolate(bench))),
            ("Whom to call", (bench.safety.contact or NOT_SAID,)),
            ("Hazards", tuple(_hazards(bench, sequence, plan))),
            (
                "Not normal",
                (
                    "smoke, smell, sparks, a new noise, anything loose: isolate, leave it off, call",
                    "the computer says tripped, link lost or stopped: the motor is off; leave it so, call",
                ),
            ),
            ("Note", (NO_EMERGENCY_STOP,)),
            ("What runs", tuple(_what(bench, plan))),
            ("Where", (f"{bench.safety.place or NOT_SAID}; driven by the computer {host}",)),
            (
                "When",
                (
                    f"from {start}, planned to end {planned} ({format_duration(planned_s)})",
                    f"over at {latest} at the latest; if it still runs then, isolate it",
                ),
            ),
            ("What normal looks like", tuple(_normal(plan))),
        ),
    )


def _local(unix_s: float, zone: tzinfo | None) -> str:
    moment = (datetime(1970, 1, 1, tzinfo=UTC) + timedelta(seconds=round(unix_s))).astimezone(zone)
    return moment.strftime("%a %d %b %Y %H:%M (UTC%z)")


def _what(bench: Bench, plan: Plan) -> Iterator[str]:
    about = f": {plan.about}" if plan.about else ""
    yield f"{plan.name}{about}"
    yield f"on the bench '{bench.name}', board {bench.board.name} {bench.board.serial or '(any serial)'}"
    for part in plan.cycles:
        yield part.text


def _hazards(bench: Bench, sequence: Sequence, plan: Plan) -> Iterator[str]:
    driven = {name: duty for name, duty in plan.totals.peak_duty.items() if duty}
    for name, duty in driven.items():
        yield f"motor '{name}' turns at up to {format_duty(duty)} of full drive, both ways if the test says so"
    for servo in bench.servos:
        yield f"servo '{servo.name}' moves between {servo.low_deg:g} deg and {servo.high_deg:g} deg"
    longest = max((pause for part in plan.cycles for pause in (part.pause, part.check_pause)), default=0)
    pauses = f", also after a pause of about {_about(longest, plan)}" if longest else ""
    yield f"everything starts by itself and without warning{pauses}"
    policy = sequence.interruptions
    if policy.resumes:
        within = format_duration(policy.within_s)
        yield f"after a lost link or a restart it may start again by itself, {policy.resumes} times, within {within}"
    fuse = "no fuse is named" if bench.safety.fuse_a is None else f"fuse {format_current(bench.safety.fuse_a)}"
    yield f"supply {format_voltage(bench.supply.voltage_v)}, {fuse}; motors and bridge may be hot"
    yield f"guard: {bench.safety.guard or NOT_SAID}"


def _about(ticks: int, plan: Plan) -> str:
    """A duration for a passer-by: to the second from ten on."""
    seconds = ticks * plan.tick_us / 1e6
    return format_duration(round(seconds) if seconds >= 10 else round(seconds, 1))


def _isolate(bench: Bench) -> Iterator[str]:
    limits = bench.limits()
    lease_s, stop_s = bench.link.lease_ms / 1000, limits["stop_ticks", 0] / 1000
    yield f"1. cut the power: {bench.safety.power_cut or NOT_SAID}"
    yield "2. then unplug the supply of the bridges, and see that nothing turns"
    yield (
        f"if the computer fails, the board stops by itself after {format_duration(lease_s)} of silence and is off "
        f"{format_duration(stop_s)} later; Ctrl-C at the computer stops in order"
    )


def _normal(plan: Plan) -> Iterator[str]:
    for part in plan.cycles:
        length = format_duration(part.later.totals.least * plan.tick_us / 1e6)
        rest = f", then rests about {_about(part.pause, plan)}" if part.pause else ""
        yield f"each '{part.name}' takes about {length}{rest}"
    limits = [limit for rules in plan.wear for limit in rules.limits]
    ends = [f"{limit.feature} is beyond {limit.fail.text}" for limit in limits if limit.fail is not None]
    for end in ends[:ENDS_MAX]:
        yield f"it ends by itself once {end}: worn"
    if len(ends) > ENDS_MAX:
        yield f"and beyond {len(ends) - ENDS_MAX} more limits to wear, in the run folder"
    texts = list(dict.fromkeys(_judged(plan.root)))
    yield from texts[:NORMAL_MAX]
    if len(texts) > NORMAL_MAX:
        yield f"and {len(texts) - NORMAL_MAX} more, in the run folder"
    if not texts:
        yield "the sequence expects nothing that is measured"


def _judged(part: Part | None) -> Iterator[str]:
    """What the parts expect, in words, in order."""
    match part:
        case Judge(measure=measure):
            yield str(measure)
        case Series(parts=parts) | Branches(parts=parts):
            for inner in parts:
                yield from _judged(inner)
        case Loop(first=first):
            yield from _judged(first)
        case Cycles(before=before, first_check=check, first=first):
            for turn in (before, check, first):
                yield from _judged(turn)
        case _:
            return
