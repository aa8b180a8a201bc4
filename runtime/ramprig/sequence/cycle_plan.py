"""A `cycle` step becomes a block of cycles in the plan, or an error; and what is left of a run that was interrupted.

Cycle, check and `before` each begin and end with all motors at zero, so that a run can go on at any cycle.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from fractions import Fraction
from typing import Protocol

from ramprig.quantity import format_duration

from . import checking
from .names import CYCLE_BEGIN
from .plan import Branches, Cycles, Judge, Loop, Part, Series, Totals
from .rig import Rig
from .scene import Scene
from .spacing import HOUR_S, TurnBound, least_ticks, longest_wait, most_ticks_a_turn, share_ticks
from .steps import Cycle, Step
from .wear_plan import wear_rules

TURN_REACTION_S = Fraction(1, 2)
"""From the end of a cycle until the next may begin, where there is no rest: its samples must come, the disk must hold
the count."""


@dataclass(frozen=True, slots=True, kw_only=True)
class BlockSoFar:
    """What earlier parts of a run have done of a block: cycles done (confirmed, failed or only commanded) and time run.

    `failed` are those of `done` that failed. `over` tells that the block was finished.
    """

    done: int = 0
    failed: int = 0
    run_s: float = 0.0
    over: bool = False


class SeriesMaker(Protocol):
    """Compiles steps one after the other."""

    def __call__(self, steps: tuple[Step, ...], scene: Scene, text: str) -> Series:
        """The steps as a part; the scene is moved on to their end."""
        ...


def left_over(steps: tuple[Step, ...], so_far: Mapping[int, BlockSoFar]) -> tuple[tuple[Step, ...], int]:
    """The steps that are still to be carried out, and the number of the first block of cycles among them.

    A run goes on at the block that was under way; after the last one that was finished; or, where none was begun, at
    the beginning.
    """
    places = [place for place, step in enumerate(steps) if isinstance(step, Cycle)]
    begun = [block for block in so_far if 1 <= block <= len(places)]
    if not begun:
        return steps, 1
    last = max(begun)
    if so_far[last].over:
        return steps[places[last - 1] + 1 :], last + 1
    return steps[places[last - 1] :], last


@dataclass(slots=True)
class _Walked:
    """The parts of a block, each as it is where it can stand."""

    before: Part | None
    first_check: Part | None
    first: Part
    later: Part
    check: Part | None = None
    checked: Part | None = None
    starts: dict[str, int] = field(default_factory=dict)


def compile_cycles(
    rig: Rig, series: SeriesMaker, step: Cycle, scene: Scene, *, block: int, so_far: BlockSoFar | None
) -> Cycles:
    """The block of a `cycle` step; leaves the scene as it is at its end. Raises `FileError`."""
    rest = checking.whole_ticks(rig, step, "rest", step.rest_s)
    for_ticks = None if step.for_s is None else checking.whole_ticks(rig, step, "for", step.for_s)
    checking.check_at_zero(step, scene, "", "a block of cycles begins")
    walked = _walk(rig, series, step, scene)
    bodies = [part for part in (walked.first, walked.later, walked.checked) if part is not None]
    checks = [part for part in (walked.first_check, walked.check) if part is not None]
    starts, check_starts = _most_starts(bodies), _most_starts(checks)
    _check_starts(step, starts, check_starts)
    part = Cycles(
        mark=step.mark,
        text="",
        totals=Totals(),
        block=block,
        name=step.name,
        before=walked.before,
        first_check=walked.first_check,
        check=walked.check,
        first=walked.first,
        later=walked.later,
        checked=walked.checked or walked.later,
        check_every=step.check_every,
        times=step.times,
        for_ticks=for_ticks,
        rest=rest,
        pause=rest,
        check_pause=rest,
        starts_per_hour=step.starts_per_hour,
        starts=starts,
        check_starts=check_starts,
        failed_most=step.failed_most,
        confirmed=all(_confirms(body) for body in bodies),
        wear=wear_rules(
            rig,
            step,
            block=block,
            driven=_driven(bodies),
            driven_in_check=_driven(checks) if checks else None,
        ),
    )
    part = _with_pauses(rig, part)
    return _with_totals(rig, replace(part, text=_text(rig, step, part)), so_far)


def _driven(bodies: list[Part]) -> set[str]:
    return {name for body in bodies for name, duty in body.totals.peak_duty.items() if duty}


def _walk(rig: Rig, series: SeriesMaker, step: Cycle, scene: Scene) -> _Walked:
    """Every order in which before, check and cycle can follow each other, walked once.

    After a check and a cycle everything that either moves has been moved, so from then on a cycle begins as the one
    before it began.
    """

    def once(steps: tuple[Step, ...], key: str, what: str) -> Part:
        begin = scene.elapsed
        part = series(steps, scene, what)
        checking.check_at_zero(step, scene, key, f"{what} ends")
        checking.check_rate(rig, step, key, part.totals.orders, part.totals.least)
        scene.elapsed = begin
        return part

    def cycle() -> Part:
        marks = scene.marks
        scene.marks |= {CYCLE_BEGIN}
        part = once(step.steps, "steps", "a cycle")
        scene.marks -= {CYCLE_BEGIN} - marks
        if part.totals.least == 0 and part.totals.waits == 0:
            raise step.mark.error("the steps of this cycle take no time", "add a hold, or a motion that takes some")
        return part

    begin = scene.elapsed
    before = once(step.before, "before", "'before'") if step.before else None
    first_check = once(step.check, "check", "a check") if step.check else None
    walked = _Walked(before=before, first_check=first_check, first=cycle(), later=cycle())
    if step.check:
        walked.check = once(step.check, "check", "a check")
        walked.checked = cycle()
    scene.elapsed = begin
    return walked


def _most_starts(parts: list[Part]) -> dict[str, int]:
    names = sorted({name for part in parts for name in part.totals.starts})
    return {name: max(part.totals.starts.get(name, 0) for part in parts) for name in names}


def _check_starts(step: Cycle, starts: Mapping[str, int], check_starts: Mapping[str, int]) -> None:
    if step.starts_per_hour is None:
        return
    for what, found in (("a cycle", starts), ("a check", check_starts)):
        for name, count in found.items():
            if count > step.starts_per_hour:
                raise step.error(
                    "starts per hour", f"{what} starts {name} {count} times, more than may be in an hour", "allow more"
                )


def _confirms(part: Part) -> bool:
    """Whether a `confirm` is certain to be met in the part."""
    match part:
        case Judge(confirms=confirms):
            return confirms
        case Series(parts=parts) | Branches(parts=parts):
            return any(_confirms(inner) for inner in parts)
        case Loop(first=first):
            return _confirms(first)
        case _:
            return False


def _text(rig: Rig, step: Cycle, part: Cycles) -> str:
    length = f"x {step.times}" if step.for_s is None else f"for {format_duration(step.for_s)}"
    text = f"cycle '{step.name}' {length}"
    if part.rest:
        text += f", rest {rig.show(part.rest)}"
    if step.starts_per_hour is not None:
        text += f", at most {step.starts_per_hour} starts per hour"
        if part.pause > part.rest:
            pitch = _turns(part, 1, 0, most=False)[0].ticks + part.pause
            text += f" (one every {format_duration(round(pitch * rig.tick_us / 1e6, 1))})"
    if step.check_every is not None:
        text += f", check every {step.check_every}"
    return text


def _with_pauses(rig: Rig, part: Cycles) -> Cycles:
    """The block with the pauses that spacing its starts leads to."""
    per_hour = part.starts_per_hour
    if per_hour is None:
        return part
    hour = int(rig.ticks(Fraction(HOUR_S)))
    pauses = [part.rest, part.rest]
    for place, turn in enumerate(_turns(part, 1, 1, most=False)):
        for count in turn.starts.values():
            if count:
                share = share_ticks(count, per_hour=per_hour, ticks=turn.ticks, hour=hour)
                pauses[place] = max(pauses[place], share - turn.ticks)
    return replace(part, pause=pauses[0], check_pause=pauses[1])


def _with_totals(rig: Rig, part: Cycles, begun: BlockSoFar | None) -> Cycles:
    """The block with what is left of it added up."""
    so_far = begun or BlockSoFar()
    reaction = int(rig.ticks(TURN_REACTION_S))
    hour = int(rig.ticks(Fraction(HOUR_S)))
    left = 0
    body_least = min(part.first.totals.least, part.later.totals.least, part.checked.totals.least)
    if part.times is not None:
        count = max(0, part.times - so_far.done)
    else:
        assert part.for_ticks is not None  # a cycle says how often or for how long
        left = max(0, part.for_ticks - int(so_far.run_s * 1_000_000 / rig.tick_us))
        count = -(-left // max(1, body_least + part.pause))
    before = part.before.totals if part.before is not None else Totals()
    check = part.check.totals if part.check is not None else Totals()
    checks = 0 if part.check_every is None else 1 + count // part.check_every
    whole = before.then(part.later.totals.times(count)).then(check.times(checks))
    least = whole.least + max(0, count + checks - 1) * part.rest
    if part.starts_per_hour is not None:
        spaced = least_ticks(_turns(part, count, checks, most=False), per_hour=part.starts_per_hour, hour=hour)
        least = max(least, before.least + spaced)
    most = before.most + _most(part, count, checks, reaction, hour) + _most_of_past(part, before, hour, begun=begun)
    if part.for_ticks is not None:
        least, most = _bounds_of_for(part, before, left, reaction, hour, begun=begun)
    totals = replace(whole, least=least, most=max(least, most), waits=whole.waits + count + checks)
    return replace(part, totals=totals)


def _bounds_of_for(
    part: Cycles, before: Totals, left: int, reaction: int, hour: int, *, begun: BlockSoFar | None
) -> tuple[int, int]:
    """The least and most time of a block that is to go on for a time: a cycle begins only while less has been run,
    whatever it waits for; it is over at the end of a cycle after which the next would begin too late."""
    body_most = max(body.totals.most for body in (part.first, part.later, part.checked))
    check_most = part.check.totals.most if part.check is not None else 0
    wait = part.rest
    if part.starts_per_hour is not None:
        turns = _turns(part, 1, 1, most=True)
        wait = max(wait, longest_wait(turns, per_hour=part.starts_per_hour, hour=hour))
    past = _most_of_past(part, before, hour, begun=begun)
    most = before.most + left + body_most + check_most + wait + part.rest + 2 * reaction + past
    least = before.least + max(0, left - wait - past)
    return min(least, most), most


def _turns(part: Cycles, count: int, checks: int, *, most: bool) -> list[TurnBound]:
    """The cycles and checks of a block, each as long as it can be or as short."""
    bodies = [body.totals for body in (part.first, part.later, part.checked)]
    ticks = max(body.most for body in bodies) if most else min(body.least for body in bodies)
    turns = [TurnBound(count=count, starts=part.starts, ticks=ticks)]
    if part.check is not None:
        check = part.check.totals.most if most else part.check.totals.least
        turns.append(TurnBound(count=checks, starts=part.check_starts, ticks=check))
    return turns


def _most(part: Cycles, count: int, checks: int, reaction: int, hour: int) -> int:
    """So long take so many cycles and checks with all their waits, at the longest."""
    turns = _turns(part, count, checks, most=True)
    total = 0
    for turn in turns:
        pitch = turn.ticks + part.rest + reaction
        if part.starts_per_hour is not None:
            spaced = most_ticks_a_turn(turns, turn, per_hour=part.starts_per_hour, hour=hour)
            pitch = max(pitch, spaced + reaction)
        total += turn.count * pitch
    return total


def _most_of_past(part: Cycles, before: Totals, hour: int, *, begun: BlockSoFar | None) -> int:
    """How long the first turn may wait for starts that came before it: of a part of the run that was interrupted, of
    an earlier block, of `before`."""
    if part.starts_per_hour is None:
        return 0
    earlier = begun is not None or part.block > 1 or any(before.starts.values())
    return hour if earlier else 0
