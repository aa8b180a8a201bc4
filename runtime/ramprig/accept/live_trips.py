"""Checks of the guard: each trip is provoked by a limit, never by a fault of the bench, and judged by the samples.

A reading of the current is shifted by `offset_ma` together with `trip_ma`, so that the motor stays as protected as it
was. A tightened limit makes a healthy motor look stalled or too fast; the other `sense` makes it run the wrong way.
"""

from __future__ import annotations

import itertools

from ramprig.accept.invariants import Row
from ramprig.accept.live_arming import latched
from ramprig.accept.live_motion import run_up
from ramprig.accept.trial import COOL_S, SETTLE_TICKS, Broken, Power, Trial, Untested, check
from ramprig_link.faults import SampleFault
from ramprig_link.samples import channels_of, decode
from ramprig_link.words import CHANNELS, LIMITS, SPEED_TICKS, THERMAL_TICKS, Cap, Trip

SHIFT_MA = 3000
HEAT_SHIFT_MA = 5000
HEAT_RATED_MA = 2500
HEAT_UNKNOWN_MA = 400
"""The heat at the start may be that of so much current for ever, or none."""
SUPPLY_STEP_MV = 500
STALL_TICKS = 60
WRONG_COUNTS = 6


def _off_in_tick(trial: Trial, tick: int, since: int) -> None:
    """A trip of category 0 has the bridge off in its own tick, by the notice and by the sample.

    Where a slow link has dropped that one sample, which the sudden change makes long, the trail's record of it is
    looked at, and on a board without a trail the next sample.
    """
    off = [t for t, _ in trial.talk.notices(since, "off")]
    trial.require(off[:1] == [tick], "TRIP-1", f"the notice `off` is of tick {off[:1]}, the trip of {tick}")
    bit = CHANNELS["duty"].first_bit + trial.axis * CHANNELS["duty"].step
    seen, duty = tick, None
    if trial.row(tick) is None:
        kept = dict(_trail(trial, trial.axis)[1]) if trial.identity.trail else {}
        duty = kept.get(tick, {}).get(bit)
        place = "the one after it" if duty is None else "its record in the trail"
        trial.note(f"the sample of the trip's tick was dropped; {place} has been looked at")
        seen = tick + (duty is None)
    duty = trial.duties(seen, seen)[0] if duty is None else duty
    trial.require(duty == 0, "TRIP-1", f"the duty is {duty} {seen - tick} ticks after the trip")


@check("TRIP-1 TRIP-3 CLEAR-1 WHY-1 S5 LIMIT-4", Power.MOTOR, current=True)
def overcurrent(trial: Trial) -> None:
    """More than `trip_ma` for `trip_ticks` in a row trips in that tick and has the bridge off in it."""
    talk, axis = trial.talk, trial.axis
    offset, trip_ma = trial.limits["offset_ma", axis], trial.limits["trip_ma", axis]
    shift = min(SHIFT_MA, offset - LIMITS["offset_ma"].lowest, LIMITS["trip_ma"].highest - trip_ma)
    trial.set_limit("trip_ma", axis, trip_ma + shift)
    trial.set_limit("offset_ma", axis, offset - shift)
    trial.set_limit("thermal_s", axis, LIMITS["thermal_s"].highest)  # the shifted reading must not heat the model
    trial.arm()
    run_up(trial, trial.duty)
    since, bound = talk.heard_count, shift // 2
    set_at = trial.tick_of(trial.set_limit("trip_ma", axis, bound, "LIMIT-3"))
    tick, notice = trial.tripped(since, Trip.OVERCURRENT, "TRIP-3")
    talk.beat_s = None
    trial.come()
    ticks = trial.limits["trip_ticks", axis]
    if Cap.CURRENT in trial.identity.caps:
        read = _currents(trial, axis, set_at + 1, tick)
        wanted = _run_of(read, bound, ticks)
        told = read[tick]
        trial.require(notice.fields[2:3] == (str(told),), "TRIP-3", f"the trip tells {notice.fields}, read was {told}")
    else:
        wanted = set_at + ticks
    text = f"overcurrent in tick {tick}; {ticks} ticks in a row were above {bound} mA in tick {wanted}"
    trial.require(tick == wanted, "TRIP-3", text)
    trial.require(notice.fields[1:4:2] == (str(axis), str(bound)), "TRIP-3", f"the trip tells {notice.fields}")
    _off_in_tick(trial, tick, since)
    trial.refused("clear", "cause", "CLEAR-1")
    trial.limits["trip_ma", axis] = bound
    trial.set_limit("offset_ma", axis, offset)
    talk.listen_ticks(5)
    latched(trial, since, Trip.OVERCURRENT)


def _currents(trial: Trial, axis: int, first: int, last: int) -> dict[int, int]:
    """What was read in each of these ticks, in mA, the trip's among them; Missing where one is not known.

    By the samples. A slow link often drops that of the trip, whose sudden change ends a block while the answer and
    the notices hold the line; the trail that the trip has frozen has it, and must agree with those that have come.
    """
    read = {t: row.current_ma[axis] for t in range(first, last + 1) if (row := trial.row(t)) is not None}
    dropped = last + 1 - first - len(read)
    if dropped and trial.identity.trail:
        bit = CHANNELS["current_ma"].first_bit + axis * CHANNELS["current_ma"].step
        for tick, record in _trail(trial, axis)[1]:
            if first <= tick <= last and bit in record:
                text = f"the trail of tick {tick} has {record[bit]} mA, the sample {read.get(tick)}"
                trial.require(read.setdefault(tick, record[bit]) == record[bit], "TRAIL-1", text)
    if len(read) < last + 1 - first:
        trial.rows(first, last)  # raises
    if dropped:
        trial.note(f"samples up to the trip were dropped ({dropped}); what was read then has been taken from the trail")
    return dict(sorted(read.items()))


def _run_of(read: dict[int, int], bound: int, ticks: int) -> int | None:
    """The tick in which so many readings in a row have been above the bound."""
    run = 0
    for tick, current_ma in read.items():
        run = run + 1 if abs(current_ma) > bound else 0
        if run >= ticks:
            return tick
    return None


@check("TRIP-1 TRIP-4 CLEAR-1 LIMIT-3 LIMIT-4 S5", Power.ARMED)
def supply_trips(trial: Trial) -> None:
    """A supply beyond its limits trips after `supply_ticks`, and cannot be cleared while it is."""
    trial.needs(Cap.SUPPLY)
    talk, supply = trial.talk, trial.state().supply_mv
    if not 3 * SUPPLY_STEP_MV < supply < LIMITS["over_mv"].highest - SUPPLY_STEP_MV:
        raise Untested(f"the supply is at {supply} mV: switch it on")
    for item, bound, trip in (
        ("under_mv", supply + SUPPLY_STEP_MV, Trip.UNDERVOLTAGE),
        ("over_mv", supply - SUPPLY_STEP_MV, Trip.OVERVOLTAGE),
    ):
        trial.arm()
        since, before = talk.heard_count, trial.limits[item, 0]
        set_at = trial.tick_of(trial.set_limit(item, 0, bound, "LIMIT-3"))
        tick, notice = trial.tripped(since, trip, "TRIP-4")
        talk.beat_s = None
        wanted = set_at + trial.limits["supply_ticks", 0]
        trial.require(tick == wanted, "TRIP-4 LIMIT-4", f"{trip.word} in tick {tick}, not {wanted}")
        trial.require(notice.fields[3:4] == (str(bound),), "TRIP-4", f"the trip tells {notice.fields}")
        trial.refused("clear", "cause", "CLEAR-1")
        trial.set_limit(item, 0, before)
        talk.listen_ticks(3)
        latched(trial, since, trip)


@check("TRIP-8 CLEAR-1 S5", Power.ARMED, current=True)
def overload(trial: Trial) -> None:
    """The thermal model trips in the step in which its heat reaches the limit, and lets go at 7/8 of it."""
    talk, axis = trial.talk, trial.axis
    trial.needs(Cap.CURRENT)
    offset, trip_ma = trial.limits["offset_ma", axis], trial.limits["trip_ma", axis]
    shift = min(HEAT_SHIFT_MA, offset - LIMITS["offset_ma"].lowest)
    if shift < HEAT_RATED_MA + 500:
        raise Untested(f"offset_ma is {offset}, and leaves no room to shift the reading")
    trial.set_limit("thermal_s", axis, 1)
    talk.listen(0.5)  # what was there has half gone
    trial.set_limit("trip_ma", axis, min(trip_ma + shift, LIMITS["trip_ma"].highest))
    trial.set_limit("rated_ma", axis, HEAT_RATED_MA)
    trial.arm()
    trial.talk.ask("disarm")
    set_at = trial.tick_of(trial.set_limit("offset_ma", axis, offset - shift))
    trial.arm()
    since = talk.heard_count
    tick, notice = trial.tripped(since, Trip.OVERLOAD, "TRIP-8", timeout_s=4.0)
    talk.beat_s = None
    trial.come()
    first = set_at - set_at % THERMAL_TICKS - THERMAL_TICKS + 1
    rows = trial.rows(first, tick)
    gain = THERMAL_TICKS * trial.identity.tick_us * (1 << 24) // 1_000_000
    wanted = {_overload_tick(rows, axis, gain, start_ma) for start_ma in (0, HEAT_UNKNOWN_MA)}
    allowed = [t for t in wanted if t is not None]
    right = bool(allowed) and min(allowed) <= tick <= max(allowed)
    trial.require(right, "TRIP-8", f"overload in tick {tick}; by the samples it is due in tick {sorted(allowed)}")
    trial.require(tick % THERMAL_TICKS == 0, "TRIP-8", f"overload in tick {tick}, no multiple of {THERMAL_TICKS}")
    root = int(notice.fields[2])
    trial.require(HEAT_RATED_MA <= root <= shift + 500, "TRIP-8", f"the trip tells {notice.fields}")
    off = talk.notice("off", since, 3.0)
    trial.need(off is not None, "TRIP-1", "no notice `off` came after the overload")
    trial.refused("clear", "cause", "CLEAR-1")
    trial.set_limit("offset_ma", axis, offset)
    talk.listen(COOL_S)
    latched(trial, since, Trip.OVERLOAD)


def _overload_tick(rows: list[Row], axis: int, gain: int, start_ma: int) -> int | None:
    """When TRIP-8 trips for these rows, the first of which begins a step; from the heat of `start_ma` for ever."""
    heat, total = start_ma * start_ma << 24, 0
    for row in rows:
        total += min(abs(row.current_ma[axis]), 65535) ** 2
        if row.tick % THERMAL_TICKS == 0:
            heat += (total // THERMAL_TICKS - (heat >> 24)) * gain
            total = 0
            if heat >> 24 >= HEAT_RATED_MA**2:
                return row.tick
    return None


def _needs_encoder(trial: Trial) -> None:
    trial.needs(Cap.ENCODER)
    if trial.limits["sense", trial.axis] == 0:
        raise Untested(f"axis {trial.axis} has no encoder: its limit sense is 0")


@check("TRIP-1 TRIP-5 S5 CLEAR-1", Power.MOTOR)
def stall(trial: Trial) -> None:
    """A duty without enough counts for `stall_ticks` trips: more are asked for than a healthy motor makes."""
    _needs_encoder(trial)
    talk, axis, duty = trial.talk, trial.axis, trial.duty
    before = trial.limits["stall_duty", axis]
    trial.set_limit("stall_duty", axis, min(before or duty, duty))
    trial.arm()
    run_up(trial, duty)
    trial.talk.ask("stop 0")
    trial.set_limit("stall_counts", axis, LIMITS["stall_counts"].highest)
    ticks = min(STALL_TICKS, trial.limits["stall_ticks", axis])
    trial.set_limit("stall_ticks", axis, ticks)
    trial.arm()
    since = talk.heard_count
    start = trial.ramp(duty)
    tick, notice = trial.tripped(since, Trip.STALL, "TRIP-5", timeout_s=5.0)
    talk.beat_s = None
    trial.come()
    bound = trial.limits["stall_duty", axis]
    pushed = next((t for t in range(start, tick) if abs(trial.duties(t, t)[0]) >= bound), None)
    wanted = None if pushed is None else pushed + ticks  # the guard sees the duty of the tick before
    trial.require(tick == wanted, "TRIP-5", f"stall in tick {tick}; {ticks} ticks of duty were over in {wanted}")
    trial.require(notice.fields[1:4:2] == (str(axis), str(ticks)), "TRIP-5", f"the trip tells {notice.fields}")
    _off_in_tick(trial, tick, since)
    latched(trial, since, Trip.STALL)


@check("TRIP-1 TRIP-6 S5", Power.MOTOR)
def wrong_way(trial: Trial) -> None:
    """Counts against the duty trip after `wrong_counts`: here `sense` is turned round for it."""
    _needs_encoder(trial)
    talk, axis, duty = trial.talk, trial.axis, trial.duty
    sense = -trial.limits["sense", axis]
    bound = min(WRONG_COUNTS, trial.limits["wrong_counts", axis])
    trial.set_limit("sense", axis, sense)
    trial.set_limit("wrong_counts", axis, bound)
    stall_duty = trial.limits["stall_duty", axis]
    trial.set_limit("stall_duty", axis, min(stall_duty or duty, duty))
    trial.arm()
    since = talk.heard_count
    start = trial.ramp(duty)
    tick, notice = trial.tripped(since, Trip.WRONG_WAY, "TRIP-6", timeout_s=5.0)
    talk.beat_s = None
    trial.come()
    wanted = _wrong_tick(trial.rows(start - 1, tick), axis, sense, trial.limits["stall_duty", axis], bound)
    trial.require(tick == wanted, "TRIP-6", f"wrong_way in tick {tick}; by the counts it is due in tick {wanted}")
    trial.require(notice.fields[3:4] == (str(bound),), "TRIP-6", f"the trip tells {notice.fields}")
    _off_in_tick(trial, tick, since)
    latched(trial, since, Trip.WRONG_WAY)


def _wrong_tick(rows: list[Row], axis: int, sense: int, stall_duty: int, bound: int) -> int | None:
    """When TRIP-6 trips for these rows."""
    mark: int | None = None
    for before, row in itertools.pairwise(rows):
        duty, counts = before.duty[axis], row.counts[axis]
        if abs(duty) < stall_duty:
            mark = None
            continue
        if mark is None:
            mark = counts
        along = (counts - mark) * sense * (1 if duty > 0 else -1)
        if along > 0:
            mark = counts
        elif -along >= bound:
            return row.tick
    return None


@check("TRIP-1 TRIP-7 S5 LIMIT-3", Power.MOTOR)
def overspeed(trial: Trial) -> None:
    """More counts in a window than `speed_counts` trip at a tick divisible by the window's length."""
    _needs_encoder(trial)
    talk, axis = trial.talk, trial.axis
    trial.arm()
    run_up(trial, trial.duty)
    trial.come()
    now = trial.tick_of(talk.ask("beat")) - SETTLE_TICKS
    moved = abs(trial.rows(now, now)[0].counts[axis] - trial.rows(now - SPEED_TICKS, now)[0].counts[axis])
    if moved < 4:
        raise Untested(f"the shaft moves by {moved} counts in a window: too slow to be judged")
    since, bound = talk.heard_count, moved // 2
    set_at = trial.tick_of(trial.set_limit("speed_counts", axis, bound, "LIMIT-3"))
    tick, notice = trial.tripped(since, Trip.OVERSPEED, "TRIP-7")
    talk.beat_s = None
    trial.come()
    wanted = set_at // SPEED_TICKS * SPEED_TICKS + SPEED_TICKS
    trial.require(tick == wanted, "TRIP-7", f"overspeed in tick {tick}, not at the next window's end, {wanted}")
    first, last = trial.rows(tick - SPEED_TICKS, tick)[0], trial.rows(tick, tick)[0]
    counts = abs(last.counts[axis] - first.counts[axis])
    trial.require(
        notice.fields[2:4] == (str(counts), str(bound)), "TRIP-7", f"the trip tells {notice.fields}, {counts}"
    )
    _off_in_tick(trial, tick, since)
    latched(trial, since, Trip.OVERSPEED)


@check("TRAIL-1 TRAIL-2 ARM-3", Power.MOTOR)
def trail(trial: Trial) -> None:
    """The trail has the ticks around a trip, to a quarter of its length behind it, as the samples have them."""
    talk, axis, size = trial.talk, trial.axis, trial.identity.trail
    trial.arm()
    trial.refused(f"trail {axis} 0", "gone", "TRAIL-2")
    run_up(trial, trial.duty)
    since, talk.beat_s = talk.heard_count, None
    tick, _ = trial.tripped(since, Trip.LINK_LOST, "LEASE-2", timeout_s=6.0)
    talk.listen_ticks(size // 4 + 20)
    trial.come()
    found = 0
    total, records = _trail(trial, axis)
    for at, record in records:
        row = trial.row(at)
        if row is not None:
            found += 1
            values = list(record.values())
            same = row.duty[axis] == values[0] and (not row.counts or row.counts[axis] == values[1])
            trial.require(same, "TRAIL-1", f"the trail of tick {at} has {values}, the sample {row}")
    last = records[-1][0]
    trial.require(total == size, "TRAIL-1", f"the trail has {total} records, `who` tells {size}")
    wanted = tick + size // 4 - 1
    trial.require(last == wanted, "TRAIL-1", f"the trail ends with tick {last}, a quarter behind the trip is {wanted}")
    trial.refused(f"trail {axis} {total}", "gone", "TRAIL-2")
    trial.note(f"{found} of {total} records were compared with samples")


def _trail(trial: Trial, axis: int) -> tuple[int, list[tuple[int, dict[int, int]]]]:
    """How many records the frozen trail tells of, and those: the tick, and the values by channel's bit."""
    records: list[tuple[int, dict[int, int]]] = []
    while True:
        answer = trial.ok(f"trail {axis} {len(records)}", "TRAIL-2")
        total = int(answer.fields[0])
        try:
            block = decode(answer.fields[1])
        except SampleFault as fault:
            trial.fail("TRAIL-2 DATA-2", f"the trail's payload: {fault.why}")
            raise Broken from fault
        bits = [ref.bit for ref in channels_of(block.mask)]
        begin = trial.talk.ticks.near(block.first_tick)
        for i, values in enumerate(zip(*block.columns, strict=True)):
            records.append((begin + i, dict(zip(bits, values, strict=True))))
        if len(records) >= total:
            return total, records
