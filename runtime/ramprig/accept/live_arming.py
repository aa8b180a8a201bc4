"""Checks of arming, lease, queue and limits while armed: outputs enabled, the bridge at zero."""

from __future__ import annotations

from ramprig.accept.invariants import ZERO_IS_OFF
from ramprig.accept.trial import Power, Trial, check
from ramprig_link.messages import Notice
from ramprig_link.words import HORIZON_TICKS, LIMITS, State, Tighter, Trip

LEASE_MS = 300
WRAP = 1 << 32


@check("ARM-1 ARM-2 ARM-3 S6 LIMIT-5 DISARM-1 BAD-5 FIELD-5", Power.ARMED)
def arming(trial: Trial) -> None:
    """`arm` asks for the right digest, a lease within its limits and state off; `disarm` ends it."""
    talk, digest = trial.talk, trial.digest
    longest = trial.limits["lease_ms", 0]
    wrong = f"{int(digest, 16) ^ 1:08x}"
    for body in (f"arm {longest} {wrong}", f"arm {longest} 00000000"):
        if body.endswith(digest):
            continue
        trial.refused(body, "digest", "ARM-2 S6")
        trial.talk.ask("stop 0")
    for spelt in ("", f"{digest[:7]}", f"0{digest}", f"{digest[:7]}g", f"{digest} 0", "ABCDEF00"):
        trial.refused(f"arm {longest} {spelt}".rstrip(), "args", "FIELD-5 BAD-5")
    trial.refused(f"arm 49 {digest}", "range", "ARM-1")
    trial.refused(f"arm {longest + 1} {digest}", "range", "ARM-1")
    first = trial.arm()
    reading = trial.state()
    trial.require(reading.state is State.ARMED, "ARM-3", f"after `arm` the state is {reading.state.word}")
    trial.require(reading.queued == 0 and not any(reading.pulses_us), "ARM-3", "`arm` left orders or pulses")
    trial.refused(f"arm {longest} {digest}", "state", "ARM-1 BAD-5")
    since = talk.heard_count
    answer = trial.ok("disarm", "DISARM-1")
    talk.listen_ticks(5)
    told = [(n.word, *n.fields) for _, n in talk.notices(since)]
    trial.require(
        told == [("stop", "0", "disarm"), ("off", "off")], "DISARM-1 NOTE-1", f"`disarm` brought the notices {told}"
    )
    trial.require(answer.tick != first.tick, "KIND-2", "`arm` and `disarm` bear the same tick")


@check("LIMIT-3 S6 LIMIT-1", Power.ARMED)
def limits_while_armed(trial: Trial) -> None:
    """While armed every limit refuses to be loosened, and takes the value it has."""
    trial.arm()
    for (item, index), value in trial.limits.items():
        trial.ok(f"limit {item} {index} {value}", "LIMIT-3")
        looser = _looser(item, value)
        if looser is None or (item == "ceiling_duty" and looser > trial.identity.max_duty):
            continue
        answer = trial.refused(f"limit {item} {index} {looser}", "armed", "LIMIT-3 S6")
        if answer.ok:
            trial.limits[item, index] = int(answer.fields[0])


def _looser(item: str, value: int) -> int | None:
    """A value next to this one on the looser side; None where there is none."""
    row = LIMITS[item]
    if item in ZERO_IS_OFF and row.lowest == 0:
        return 0 if value else None
    if row.tighter is Tighter.HIGHER:
        return value - 1 if value > row.lowest else None
    if row.tighter is Tighter.LOWER:
        return value + 1 if value < row.highest else None
    return value + 1 if value < row.highest else value - 1


@check("LEASE-1 LEASE-2 TRIP-9 TAG-3 WHO-2 S5 WHY-1 CLEAR-1 TRIP-1", Power.ARMED)
def lease_renewals(trial: Trial) -> None:
    """A new request renews the lease, a refused one too; a repeat, a bare line and a garbled one do not."""
    talk = trial.talk
    lease_ms = min(LEASE_MS, trial.limits["lease_ms", 0])
    lease_ticks = -(-lease_ms * 1000 // trial.identity.tick_us)
    trial.arm(lease_ms)
    for _ in range(3):  # longer than the lease in all
        talk.listen_ticks(lease_ticks // 2)
        trial.refused("stop 9", "range", "STOP-2")
    talk.beat_s = None
    since = talk.heard_count
    last = talk.ask("beat")
    for line in (b"who\n", b"x\n", b""):
        talk.listen_ticks(lease_ticks // 4)
        talk.raw(line)
        talk.repeat("beat", last.tag)
    tick, notice = trial.tripped(since, Trip.LINK_LOST, "LEASE-1 LEASE-2", timeout_s=2 * lease_ms / 1000)
    silent = tick - trial.tick_of(last)
    text = f"link_lost {silent} ticks after the last new request; right is {lease_ticks}"
    trial.require(silent == lease_ticks, "LEASE-2 LEASE-1", text)
    told = [str(silent * trial.identity.tick_us // 1000), str(lease_ms)]
    trial.require(list(notice.fields[2:4]) == told, "TRIP-9", f"the trip tells {notice.fields}, not {told}")
    latched(trial, since, Trip.LINK_LOST)


def latched(trial: Trial, since: int, trip: Trip, *, clears: bool = True) -> None:
    """After a trip: state tripped, `why` tells it, no arming before `clear`, and a new one after it."""
    talk = trial.talk
    talk.beat_s = None
    off = talk.notice("off", since, 6.0)
    trial.need(off is not None, "TRIP-1 S5", f"no notice `off` came after the trip {trip.word}")
    if off is not None and isinstance(off.message, Notice):
        trial.require(off.message.fields[:1] == ("tripped",), "S5 TRIP-1", f"`off` tells {off.message.fields}")
    told = next((n for _, n in talk.notices(since, "trip")), None)
    reading = trial.state()
    right = reading.state is State.TRIPPED and reading.trip is trip
    trial.require(right, "S5 TRIP-1", f"after the trip {trip.word}: {reading.state.word}, trip {reading.trip.word}")
    why = trial.ok("why", "WHY-1")
    if told is not None:
        wanted = (told.fields[0], str(told.tick), *told.fields[1:])
        trial.require(why.fields[:5] == wanted, "WHY-1", f"`why` tells {why.fields}, the notice told {wanted}")
    trial.refused(f"arm {trial.limits['lease_ms', 0]} {trial.digest}", "state", "S5 ARM-1")
    if clears:
        trial.ok("clear", "CLEAR-1")
        trial.arm()
        talk.ask("stop 0")


@check("ORDER-2 TRIP-9 TRIP-1 S5 WHY-1 ORDER-8", Power.ARMED)
def late_orders(trial: Trial) -> None:
    """An order whose start has passed is refused, and trips late_order in the same tick."""
    axis = trial.axis
    for back in (40, 0):
        trial.arm()
        since = trial.talk.heard_count
        start = trial.tick_of(trial.talk.ask("beat")) - back
        answer = trial.refused(f"ramp {axis} 0 0 {start % WRAP}", "late", "ORDER-2")
        tick, notice = trial.tripped(since, Trip.LATE_ORDER, "ORDER-2 TRIP-9")
        trial.require(tick == trial.tick_of(answer), "ORDER-2", "the trip is not of the order's tick")
        wanted = str(tick - start)
        trial.require(notice.fields[2:3] == (wanted,), "TRIP-9", f"the trip tells {notice.fields}, late by {wanted}")
        latched(trial, since, Trip.LATE_ORDER)


@check("ORDER-1 ORDER-2 ORDER-3 ORDER-6 ORDER-7 ORDER-8 STOP-1", Power.ARMED)
def order_queue(trial: Trial) -> None:
    """The queue takes as many orders as `who` tells and no more, and a stop empties it."""
    talk, size, axis = trial.talk, trial.identity.queue, trial.axis
    trial.arm()
    now = trial.tick_of(talk.ask("beat"))
    trial.refused(f"ramp {axis} 0 0 {(now + HORIZON_TICKS + 100_000) % WRAP}", "far", "ORDER-2")
    since = talk.heard_count
    start = trial.start_tick()
    rest = trial.ok(f"rest {axis} brake {start % WRAP}", "ORDER-6")
    heard = talk.notice("done", since, 2.0)
    right = heard is not None and isinstance(heard.message, Notice) and heard.tick == start
    trial.require(right, "ORDER-7 ORDER-6", f"`rest` for tick {start}: the notice `done` is {heard}")
    trial.require(rest.fields[:1] == (str(size - 1),), "ORDER-1", f"one order queued, {rest.fields} places left")
    far = trial.start_tick() + 500_000
    for free in range(size - 1, -1, -1):
        answer = trial.ok(f"ramp {axis} 0 0 {(far + free) % WRAP}", "ORDER-1")
        text = f"{answer.fields} places are told to be free, not {free}"
        trial.require(answer.fields[:1] == (str(free),), "ORDER-1", text)
    trial.refused(f"ramp {axis} 0 0 {far % WRAP}", "full", "ORDER-1")
    trial.require(trial.state().queued == size, "STATE-1 ORDER-1", "`state` tells another length of the queue")
    trial.ok("stop 0", "STOP-1")
    trial.require(trial.state().queued == 0, "ORDER-8", "a stop left orders in the queue")
