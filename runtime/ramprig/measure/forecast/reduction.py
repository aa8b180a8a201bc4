"""A periodic night is not simulated tick by tick: a few passes cold, a few hot, and the winding between in closed form.

The longest repeat (or block of cycles, of which `turns` tells more) among the sequence's own steps is cut to a few
passes. These are simulated in full twice: from ambient, and with the windings where they end after many passes. Over
one pass the winding's temperature goes from T to F(T), F being as good as a straight line (one thermal node whose heat
grows with the copper's resistance): its slope and place follow from the cold and the hot simulation, so that after n
passes
    T(n) = T* + slope^(n - 1) (T(1) - T*),   T* = F(T*).
The length and energy of a pass go from their cold to their hot values as the temperature does. What is not cut, before
and after the repeat, is simulated as it is.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace

import numpy as np

from ramprig.sequence.reading import Sequence
from ramprig.sequence.steps import Cycle, Include, Repeat, Step

from .play import Floats, MotorPlay, Play
from .turnlines import row_of

COLD_PASSES = 5
"""The first; three that begin as all later ones do, whose mean length counts, since a wait ends on the runner's grid of
50 ms and passes differ by as much; and the one after which the tail is simulated."""
HOT_PASSES = 2
GROUP_CYCLES = 4
"""Cycles between two checks that are simulated: the first, three as all later ones are."""
HOT_GROUP_CYCLES = 2
LEAST_PASSES = 12
"""With fewer passes the whole is simulated."""
PASSES_MAX = 10_000_000


@dataclass(frozen=True, slots=True, kw_only=True)
class Cut:
    """How a sequence is reduced: the sequences with few passes, where the repeat stands, and how long it goes on.

    `block` is the block of cycles, None where it is a repeat. One of `times` and `for_s` is given.
    """

    cold: Sequence
    hot: Sequence
    place: str
    block: Cycle | None
    times: int | None
    for_s: float | None

    def text(self) -> str:
        """The reduction in words."""
        if self.block is None or not self.block.check:
            what = "repeat" if self.block is None else "cycle"
            few = f"of the {what} at {self.place} {COLD_PASSES} passes from ambient and {HOT_PASSES} hot are"
        else:
            cold, hot = _few(self.block, cold=True).times, _few(self.block, cold=False).times
            few = f"of the cycle at {self.place} {cold} from ambient and {hot} hot with their checks are"
        spaced = ", and its starts are spaced" if self.block is not None and self.block.starts_per_hour else ""
        return f"reduced: {few} simulated, what lies between by the winding's closed form{spaced}"


def cut_of(sequence: Sequence, lengths_s: Callable[[Sequence], float]) -> Cut | None:
    """The reduction of a sequence; None where it has no long repeat of its own that can be cut.

    `lengths_s` tells the least time that a sequence takes. A repeat that ends by a measurement is not cut: its passes
    are not alike.
    """
    best: tuple[float, Cut] | None = None
    whole_s = lengths_s(sequence)
    for path, step in _candidates(sequence.steps, ()):
        cold = replace(sequence, steps=_shortened(sequence.steps, path, cold=True))
        saved_s = whole_s - lengths_s(cold)
        assert isinstance(step, Repeat | Cycle)
        pass_s = lengths_s(cold) / COLD_PASSES
        if saved_s <= (LEAST_PASSES - COLD_PASSES) * pass_s or (best is not None and saved_s <= best[0]):
            continue
        cut = Cut(
            cold=cold,
            hot=replace(sequence, steps=_shortened(sequence.steps, path, cold=False)),
            place=str(step.mark.place),
            block=step if isinstance(step, Cycle) else None,
            times=step.times,
            for_s=None if step.for_s is None else float(step.for_s),
        )
        best = saved_s, cut
    return None if best is None else best[1]


def _candidates(steps: tuple[Step, ...], path: tuple[int, ...]) -> list[tuple[tuple[int, ...], Step]]:
    found: list[tuple[tuple[int, ...], Step]] = []
    for number, step in enumerate(steps):
        here = (*path, number)
        match step:
            case Include(steps=inner):
                found += _candidates(inner, here)
            case Repeat(until=None):
                found.append((here, step))
            case Cycle():
                found.append((here, step))
    return found


def _shortened(steps: tuple[Step, ...], path: tuple[int, ...], *, cold: bool) -> tuple[Step, ...]:
    """The steps with few passes of the one at `path`."""
    number, rest = path[0], path[1:]
    step = steps[number]
    changed: Step
    if isinstance(step, Include) and rest:
        changed = replace(step, steps=_shortened(step.steps, rest, cold=cold))
    elif isinstance(step, Cycle):
        changed = _few(step, cold=cold)
    else:
        assert isinstance(step, Repeat)
        changed = replace(step, times=COLD_PASSES if cold else HOT_PASSES, for_s=None)
    return (*steps[:number], changed, *steps[number + 1 :])


def _few(block: Cycle, *, cold: bool) -> Cycle:
    """A few cycles of the block, in which each kind of turn is there and one of its kind or more follow it."""
    times, every = COLD_PASSES if cold else HOT_PASSES, None
    if block.check:
        every = min(block.check_every or 1, GROUP_CYCLES if cold else HOT_GROUP_CYCLES)
        times = max(every + 1, GROUP_CYCLES) if cold else every
    return replace(block, times=times, for_s=None, check_every=every, starts_per_hour=None, failed_most=None, wear=None)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Heating:
    """One winding over all passes: temperature where each pass begins, (passes,) in degC, and the steady value."""

    begins_c: Floats
    steady_c: float
    slope: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Night:
    """The whole of a reduced run: passes, time and energy, and each motor's winding at its hottest and at the end.

    `pause_s` is the shortest pause before a cycle that was left out of the simulation.
    """

    passes: int
    elapsed_s: float
    energy_j: float
    hottest_c: Mapping[str, float]
    end_c: Mapping[str, float]
    pause_s: float = 0.0


def marks_of(run: Play, cut: Cut) -> tuple[int, ...]:
    """The rows at which the passes of the cut repeat began."""
    return tuple(row_of(run, tick) for tick in run.passes.get(cut.place, ()))


@dataclass(frozen=True, slots=True)
class Alike:
    """The rows of the cold run that all goes on like: from `begin` up to `end`, which are `passes` passes or cycles."""

    begin: int
    end: int
    passes: int


def alike_of(run: Play, cut: Cut) -> Alike:
    """What the night repeats: a pass; of cycles with checks a group, a check and the cycles up to the next, where one
    is simulated whole, else one cycle."""
    if cut.block is None:
        marks = marks_of(run, cut)
        return Alike(marks[1], marks[2], 1)
    every = cut.block.check_every
    if every is not None and every <= GROUP_CYCLES:
        checks = [turn.begin for turn in run.turns if turn.check]
        return Alike(row_of(run, checks[0]), row_of(run, checks[1]), every)
    begins = [turn.begin for turn in run.turns if not turn.check]
    return Alike(row_of(run, begins[1]), row_of(run, begins[2]), 1)


def _winding(motor: MotorPlay, row: int) -> float:
    """The temperature where a row begins."""
    return float(motor.winding_c[max(0, row - 1)])


def warm_guess(cold: Play, cut: Cut, thermal_time_s: Mapping[str, float]) -> dict[str, float]:
    """Where the windings end after many passes, from the cold run alone: the map's slope is that of cooling."""
    rows = marks_of(cold, cut)
    guess = {}
    for name, motor in cold.motors.items():
        before, after = _winding(motor, rows[1]), _winding(motor, rows[2])
        decay = float(np.exp(-(rows[2] - rows[1]) * cold.row_s / thermal_time_s[name]))
        guess[name] = before + (after - before) / max(1.0 - decay, 1e-6)
    return guess


def night_of(cut: Cut, cold: Play, hot: Play) -> Night:
    """Put the whole run together from its cold and hot parts, both of which came to their end."""
    rows, hot_rows = marks_of(cold, cut), marks_of(hot, cut)
    lengths = (_later_rows(rows) * cold.row_s, _later_length_s(cold, hot, rows, hot_rows))
    far = np.arange(_most_passes(cut, min(lengths)), dtype=float)
    heating = {name: _heating(cold.motors[name], hot.motors[name], rows, hot_rows, far) for name in cold.motors}
    warmth = _warmth(heating, len(far))
    pass_s = lengths[0] + (lengths[1] - lengths[0]) * warmth
    pass_s[0] = (rows[1] - rows[0]) * cold.row_s
    passes = _passes(cut, pass_s)
    tail = len(hot.bus_high_v) - hot_rows[-1]
    lead_s = rows[0] * cold.row_s
    tail_s = hot.elapsed_s - hot_rows[-1] * hot.row_s
    energies = _energies(cold, hot, rows, hot_rows)
    pass_j = energies[0] + (energies[1] - energies[0]) * warmth[: passes - 1]
    pass_j[:1] = cold.energy_j[rows[0] : rows[1]].sum()
    lead_j = float(cold.energy_j[: rows[0]].sum())
    energy_j = lead_j + float(pass_j.sum()) + float(hot.energy_j[-tail:].sum())
    hottest, end = {}, {}
    for name, motor in hot.motors.items():
        begins = heating[name].begins_c[:passes]
        rise = float(motor.winding_c[hot_rows[0] : hot_rows[1]].max()) - _winding(motor, hot_rows[0])
        cold_peak = float(cold.motors[name].winding_c.max())
        hottest[name] = max(cold_peak, float(begins.max()) + rise)
        off_c = float(begins[-1]) - _winding(motor, hot_rows[-1])
        fade = heating[name].slope ** (tail / max(1, hot_rows[1] - hot_rows[0]))
        end[name] = float(motor.winding_c[-1]) + off_c * fade
    return Night(
        passes=passes,
        elapsed_s=lead_s + float(pass_s[: passes - 1].sum()) + tail_s,
        energy_j=energy_j,
        hottest_c=hottest,
        end_c=end,
    )


def _later_length_s(cold: Play, hot: Play, rows: tuple[int, ...], hot_rows: tuple[int, ...]) -> float:
    """A later pass when hot: the cold one with the difference that heat makes to the first."""
    first = (hot_rows[1] - hot_rows[0]) - (rows[1] - rows[0])
    return max(1.0, _later_rows(rows) + first) * cold.row_s


def _later_rows(rows: tuple[int, ...]) -> float:
    """The mean length of the later passes of the cold run, in rows."""
    return (rows[-1] - rows[1]) / (len(rows) - 2)


def _energies(cold: Play, hot: Play, rows: tuple[int, ...], hot_rows: tuple[int, ...]) -> tuple[float, float]:
    """Of a later pass, cold and hot."""
    later = float(cold.energy_j[rows[1] : rows[-1]].sum()) / (len(rows) - 2)
    change = float(hot.energy_j[hot_rows[0] : hot_rows[1]].sum() - cold.energy_j[rows[0] : rows[1]].sum())
    return later, later + change


def _heating(cold: MotorPlay, hot: MotorPlay, rows: tuple[int, ...], hot_rows: tuple[int, ...], far: Floats) -> Heating:
    """The map of one pass, from the first pass cold and hot (its slope) and the second cold (its place)."""
    cold_from, cold_to = _winding(cold, rows[0]), _winding(cold, rows[1])
    hot_from, hot_to = _winding(hot, hot_rows[0]), _winding(hot, hot_rows[1])
    begin, then = cold_to, _winding(cold, rows[2])
    apart = hot_from - cold_from
    slope = min(0.999_999, max(0.0, (hot_to - cold_to) / apart)) if abs(apart) > 1e-3 else 0.0
    steady = begin + (then - begin) / (1.0 - slope)
    begins = steady + (begin - steady) * slope ** np.maximum(far - 1.0, 0.0)
    begins[0] = cold_from
    return Heating(begins_c=begins, steady_c=steady, slope=slope)


def _warmth(heating: Mapping[str, Heating], passes: int) -> Floats:
    """How far each pass is from cold (0) to hot (1): the mean over the motors."""
    shares = [np.zeros(passes)]
    for one in heating.values():
        span = one.steady_c - float(one.begins_c[0])
        shares.append((one.begins_c - one.begins_c[0]) / span if abs(span) > 1e-3 else np.zeros(passes))
    found: Floats = np.mean(shares[1:] or shares, axis=0)
    return found


def _most_passes(cut: Cut, shortest_s: float) -> int:
    if cut.times is not None:
        return min(PASSES_MAX, cut.times)
    assert cut.for_s is not None, "a repeat says how often or for how long"
    return min(PASSES_MAX, int(cut.for_s / max(shortest_s, 1e-3)) + 2)


def _passes(cut: Cut, pass_s: Floats) -> int:
    """How many passes there are: one begins only while less than the time has gone by."""
    if cut.times is not None:
        return min(PASSES_MAX, cut.times)
    assert cut.for_s is not None, "a repeat says how often or for how long"
    begun_s = np.concatenate([[0.0], np.cumsum(pass_s)])
    return max(1, min(len(pass_s), int(np.searchsorted(begun_s, cut.for_s - 1e-9, side="left"))))
