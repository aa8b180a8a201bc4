"""Steps and a bench become a plan, or an error that points to the step that cannot be carried out.

The compiler walks the steps once with a picture of how things stand (`Scene`); a repeated step is walked at most twice,
since from its second pass on it begins as it ends.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Mapping
from dataclasses import replace
from fractions import Fraction

from ramprig.bench import Bench
from ramprig.errors import FileError
from ramprig.quantity import format_duration, format_duty
from ramprig.yamlfile import Mark

from . import checking
from .cycle_plan import BlockSoFar, compile_cycles, left_over
from .motion import Mover
from .plan import Await, Branches, Cycles, Judge, Loop, Moment, Part, Plan, Run, Series, Totals
from .reading import Sequence
from .rig import Rig
from .scene import MotorScene, Scene, ServoScene
from .steps import (
    Confirm,
    Cycle,
    Ease,
    Expect,
    Hold,
    Include,
    Measure,
    Move,
    Note,
    Ramp,
    Release,
    Repeat,
    Reverse,
    Step,
    Sweep,
    Together,
    Wait,
    What,
)
from .wear_plan import unjudged

WAIT_REACTION_S = Fraction(1, 2)
"""After a wait has come true the plan goes on within this time: samples come in blocks, orders need their lead."""
BURST_ORDERS = 12
"""So many orders in a row must not come faster than the link carries them."""
PERIOD_TICKS_MAX = 65_535
WINDOW_MARGIN_S = 1
"""The run keeps samples for the longest window and this much longer."""
SETTLING_KEPT_S = 120
"""How long after a ramp a settling time can still be judged."""


def compile_plan(
    sequence: Sequence, bench: Bench, *, tick_us: int = 1000, so_far: Mapping[int, BlockSoFar] | None = None
) -> Plan:
    """The plan of a sequence on a bench whose board has this tick. Raises `FileError` at the step that cannot be.

    With `so_far`, what earlier parts of the run have done by block of cycles, it is the plan of the rest. A sequence
    with cycles is refused where it could not be resumed at any of them.
    """
    steps, first_block = left_over(sequence.steps, so_far or {})
    plan = _plan_of(sequence, steps, bench, tick_us, first_block, so_far or {})
    if not so_far:
        for number, step in enumerate(step for step in sequence.steps if isinstance(step, Cycle)):
            try:
                _plan_of(sequence, sequence.steps[sequence.steps.index(step) :], bench, tick_us, number + 1, {})
            except FileError as error:
                found = f"{error.found}, when an interrupted run is resumed at the cycle in line {step.mark.line}"
                raise FileError(found, wanted=error.wanted, place=error.place, text=error.text) from error
    return plan


def _plan_of(
    sequence: Sequence,
    steps: tuple[Step, ...],
    bench: Bench,
    tick_us: int,
    first_block: int,
    so_far: Mapping[int, BlockSoFar],
) -> Plan:
    """The plan of these steps of the sequence's own, begun with all motors at rest."""
    rig = Rig.of(bench, tick_us=tick_us)
    compiler = _Compiler(rig, next_block=first_block, so_far=so_far)
    scene = Scene(
        motors={name: MotorScene() for name in rig.axes}, servos={name: ServoScene() for name in rig.channels}
    )
    body = compiler.series(steps, scene, sequence.name, mark=sequence.mark, outermost=True)
    closing, remarks = compiler.closing(sequence, scene)
    root = Series(
        mark=sequence.mark, text=sequence.name, totals=body.totals.then(closing.totals), parts=(body, closing)
    )
    unused = [f"the value '{name}' is used by no step" for name in sequence.unused]
    return Plan(
        name=sequence.name,
        about=sequence.about,
        tick_us=tick_us,
        root=root,
        period_ticks=_period(rig, sequence),
        mask=rig.mask,
        longest_window=compiler.window + int(rig.ticks(Fraction(WINDOW_MARGIN_S))),
        remarks=(*remarks, *compiler.remarks, *unused),
        cycles=tuple(part for part in body.parts if isinstance(part, Cycles)),
        counts_cycles=any(isinstance(step, Cycle) for step in sequence.steps),
        keeping=sequence.keeping,
    )


def _period(rig: Rig, sequence: Sequence) -> int:
    """The log's period in ticks, the bench's where the sequence says none."""
    if sequence.log_period_s is None or sequence.log_mark is None:
        return max(1, min(PERIOD_TICKS_MAX, round(rig.ticks(Fraction(rig.bench.log.period_s)))))
    ticks = rig.ticks(sequence.log_period_s)
    if ticks.denominator != 1:
        found = f"a period of {format_duration(sequence.log_period_s)} is no whole number of ticks"
        raise sequence.log_mark.error(found, f"a multiple of {format_duration(rig.tick_s)} is wanted")
    return int(ticks)


class _Compiler:
    """Compiles the steps of one sequence; `window` grows to the longest look back, in ticks.

    `next_block` is the number of the next block of cycles, `so_far` what is done of each.
    """

    def __init__(self, rig: Rig, *, next_block: int, so_far: Mapping[int, BlockSoFar]) -> None:
        self.rig = rig
        self.next_block = next_block
        self.so_far = so_far
        self.remarks: list[str] = []
        self.move = Mover(rig)
        self.window = 0
        self.reaction = int(rig.ticks(WAIT_REACTION_S))
        self._repeats: dict[tuple[int, tuple[object, ...]], tuple[Part, Scene]] = {}

    def series(
        self, steps: tuple[Step, ...], scene: Scene, text: str, *, mark: Mark | None = None, outermost: bool = False
    ) -> Series:
        """The steps one after the other; cycles only where they are the `outermost`. Without steps `mark` is needed."""
        parts: list[Part] = []
        totals = Totals()
        recent: deque[int] = deque(maxlen=BURST_ORDERS)
        for step in steps:
            part = self._block(step, scene) if outermost and isinstance(step, Cycle) else self.part(step, scene)
            if isinstance(part, Run) and part.motions:
                if len(recent) == BURST_ORDERS:
                    checking.check_rate(self.rig, step, "in", BURST_ORDERS, scene.elapsed - recent[0])
                recent.append(scene.elapsed)
            parts.append(part)
            totals = totals.then(part.totals)
            scene.elapsed += part.totals.least
        mark = steps[0].mark if mark is None else mark
        return Series(mark=mark, text=text, totals=totals, parts=tuple(parts))

    def _block(self, step: Cycle, scene: Scene) -> Part:
        """A block of cycles, with its number."""
        block = self.next_block
        self.next_block += 1
        part = compile_cycles(self.rig, self.series, step, scene, block=block, so_far=self.so_far.get(block))
        if not part.confirmed:
            self.remarks.append(f"the cycle '{part.name}' has no 'confirm': its cycles are counted as commanded only")
        self.remarks += unjudged(part)
        return part

    def part(self, step: Step, scene: Scene) -> Part:
        """One step; leaves the scene as it is at the step's end, `elapsed` excepted."""
        match step:
            case Ramp():
                return self.move.ramp(step, scene)
            case Reverse():
                return self.move.reverse(step, scene)
            case Ease():
                return self.move.ease(step, scene)
            case Move():
                return self.move.servo(step, scene)
            case Release():
                return self.move.release(step, scene)
            case Sweep():
                return self.move.sweep(step, scene)
            case Hold(length_s=length_s):
                ticks = checking.whole_ticks(self.rig, step, "", length_s)
                return Run(
                    mark=step.mark, text=f"hold {format_duration(length_s)}", totals=Totals(ticks, ticks), length=ticks
                )
            case Together():
                return self._together(step, scene)
            case Repeat():
                return self._repeat(step, scene)
            case Include(file=file, steps=steps):
                begin = scene.elapsed
                part = self.series(steps, scene, f"include {file}")
                scene.elapsed = begin
                return replace(part, mark=step.mark, heading=True)
            case _:
                return self._observe(step, scene)

    def _observe(self, step: Step, scene: Scene) -> Part:
        """Steps that move nothing."""
        match step:
            case Wait(measure=measure, within_s=within_s):
                self._measure(measure, scene)
                checking.check_reachable(self.rig, scene, measure)
                limit = checking.whole_ticks(self.rig, step, "within", within_s)
                text = f"wait until {measure}, {format_duration(within_s)} at most"
                totals = Totals(0, limit + self.reaction, waits=1)
                return Await(mark=step.mark, text=text, totals=totals, measure=measure, limit=limit)
            case Expect(measure=measure, stop_on_failure=stop):
                self._measure(measure, scene)
                text = f"expect {measure}, else stop" if stop else f"expect {measure}"
                totals = Totals(judgements=1)
                return Judge(
                    mark=step.mark,
                    text=text,
                    totals=totals,
                    measure=measure,
                    stop_on_failure=stop,
                )
            case Confirm(measure=measure):
                checking.check_confirm(step, scene)
                self._measure(measure, scene)
                text = f"confirm {measure}"
                totals = Totals(judgements=1)
                return Judge(
                    mark=step.mark, text=text, totals=totals, measure=measure, stop_on_failure=False, confirms=True
                )
            case Cycle():
                wanted = "put it among the sequence's own steps, not inside another step or an included file"
                raise step.mark.error("a cycle stands inside another step", wanted)
            case Note(name=name):
                scene.marks |= {name}
                return Moment(mark=step.mark, text=f"mark {name}", totals=Totals(), name=name)
            case _:
                raise TypeError(f"a {type(step).__name__} is no step that can be compiled")

    def _measure(self, measure: Measure, scene: Scene) -> None:
        checking.check_measure(self.rig, scene, measure)
        back_s = Fraction(SETTLING_KEPT_S) if measure.what is What.SETTLING else measure.over_s
        self.window = max(self.window, int(self.rig.ticks(back_s)))

    def _together(self, step: Together, scene: Scene) -> Part:
        moved = checking.check_branches(step)
        everything = frozenset().union(*moved)
        begin = scene.elapsed
        ends: list[tuple[Scene, frozenset[str]]] = []
        parts: list[Part] = []
        totals = Totals()
        for number, (branch, names) in enumerate(zip(step.branches, moved, strict=True), start=1):
            inner = scene.copy()
            inner.elsewhere |= everything - names
            part = self.series(branch, inner, f"branch {number}")
            totals = part.totals if number == 1 else totals.beside(part.totals)
            parts.append(part)
            ends.append((inner, names))
        checking.check_rate(self.rig, step, "", totals.orders, totals.least)
        scene.take_branches(ends, begin)
        scene.elapsed = begin
        return Branches(mark=step.mark, text=f"together, {len(parts)} branches", totals=totals, parts=tuple(parts))

    def _repeat(self, step: Repeat, scene: Scene) -> Part:
        begin = scene.elapsed
        first = self._pass(step, scene)
        scene.elapsed = begin + first.totals.least
        try:
            later = self._pass(step, scene)
        except FileError as error:
            # the step stands well in the first pass: say when it does not
            found = f"{error.found}, from the second pass of the repeat in line {step.mark.line} on"
            raise FileError(found, wanted=error.wanted, place=error.place, text=error.text) from error
        if step.until is not None:
            self._measure(step.until, scene)
        scene.elapsed = begin
        for part in (first, later):
            if part.totals.least == 0 and part.totals.waits == 0:
                raise step.mark.error(
                    "the steps of this repeat take no time", "add a hold, or a motion that takes some"
                )
            checking.check_rate(self.rig, step, "", part.totals.orders, part.totals.least)
        return self._loop(step, first, later)

    def _pass(self, step: Repeat, scene: Scene) -> Part:
        """One pass; the same step in the same scene is the same part, so that nested repeats stay cheap."""
        key = (id(step), scene.key())
        if key not in self._repeats:
            inner = scene.copy()
            self._repeats[key] = (self.series(step.steps, inner, "pass"), inner)
        part, after = self._repeats[key]
        scene.motors, scene.servos = dict(after.motors), dict(after.servos)
        scene.marks |= after.marks
        scene.ramped |= after.ramped
        return part

    def _loop(self, step: Repeat, first: Part, later: Part) -> Loop:
        times, for_ticks = step.times, None
        if step.for_s is not None:
            for_ticks = checking.whole_ticks(self.rig, step, "for", step.for_s)
            if first.totals.waits == 0 and later.totals.waits == 0:
                over = max(0, for_ticks - first.totals.least)
                times, for_ticks = 1 - (-over // later.totals.least), None
        if for_ticks is not None:
            return self._for_a_time(step, first, later, for_ticks)
        assert times is not None  # a repeat says how often, or for how long
        totals = first.totals.then(later.totals.times(times - 1))
        if step.until is None:
            text = f"repeat x {times}" if step.for_s is None else f"repeat for {format_duration(step.for_s)}, x {times}"
            return Loop(mark=step.mark, text=text, totals=totals, first=first, later=later, times=times)
        text = f"repeat until {step.until}, x {times} at most"
        most = totals.most + times * self.reaction
        totals = Totals(
            first.totals.least,
            most,
            totals.orders,
            totals.waits + times,
            totals.judgements,
            totals.reversals,
            totals.starts,
            totals.peak_duty,
        )
        return Loop(mark=step.mark, text=text, totals=totals, first=first, later=later, times=times, until=step.until)

    def _for_a_time(self, step: Repeat, first: Part, later: Part, for_ticks: int) -> Loop:
        """A loop whose passes take as long as their waits do: counted as if they took the least time."""
        shortest = max(1, later.totals.least)
        passes = 1 - (-max(0, for_ticks - first.totals.least) // shortest)
        whole = first.totals.then(later.totals.times(passes - 1))
        totals = Totals(
            max(first.totals.least, for_ticks),
            for_ticks + max(first.totals.most, later.totals.most),
            whole.orders,
            whole.waits,
            whole.judgements,
            whole.reversals,
            whole.starts,
            whole.peak_duty,
        )
        text = f"repeat for {self.rig.show(for_ticks)}"
        return Loop(
            mark=step.mark, text=text, totals=totals, first=first, later=later, times=passes, for_ticks=for_ticks
        )

    def closing(self, sequence: Sequence, scene: Scene) -> tuple[Run, list[str]]:
        """The last part: every motor that is not at zero is brought there as fast as its slew limit allows."""
        part = self.move.to_zero(sequence.mark, scene)
        if not part.motions:
            return part, []
        driven = [f"{name} at {format_duty(motor.duty)}" for name, motor in scene.motors.items() if motor.duty]
        remark = f"the steps end with {', '.join(driven)}: brought to zero in {self.rig.show(part.length)} at the end"
        return part, [remark]
