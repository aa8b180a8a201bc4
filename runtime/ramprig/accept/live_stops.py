"""Checks of stops, the lost link and a stop cut short, with the motor running."""

from __future__ import annotations

from ramprig.accept.live_arming import latched
from ramprig.accept.live_motion import no_trip, run_up
from ramprig.accept.trial import Power, Trial, Untested, check
from ramprig_link.words import Cap, State, Trip

SHORT_STOP_TICKS = 40
LEASE_MS = 300


def _told(trial: Trial, since: int) -> list[tuple[int, str]]:
    """The notices of stops and offs, each with its tick."""
    return [(t, " ".join((n.word, *n.fields))) for t, n in trial.talk.notices(since) if n.word in ("stop", "off")]


@check("STOP-1 STOP-3 STOP-4 DISARM-1 ORDER-8 NOTE-1 LINE-7 RUN-3", Power.MOTOR)
def stop_at_once(trial: Trial) -> None:
    """`stop 0`, a checked one and a bare one, switches a running bridge off in its tick."""
    talk, axis = trial.talk, trial.axis
    for bare in (False, True):
        trial.arm()
        run_up(trial, trial.duty)
        trial.refused("disarm", "moving", "DISARM-1")
        since = talk.heard_count
        talk.beat_s = None
        clauses = "STOP-4" if bare else "STOP-1"
        if bare:
            talk.raw(b"stop\n")
        else:
            answer = trial.ok("stop 0", "STOP-1")
            trial.require(answer.fields[:1] == ("off",), "STOP-1 STOP-3", f"`stop 0` was answered {answer.fields}")
        heard = talk.notice("off", since)
        trial.need(heard is not None and heard.tick is not None, clauses, "no notice `off` came")
        tick = (heard.tick or 0) if heard is not None else 0
        wanted = [(tick, f"stop 0 {'bare' if bare else 'host'}"), (tick, "off off")]
        trial.require(_told(trial, since) == wanted, f"{clauses} NOTE-1", f"notices: {_told(trial, since)}")
        trial.come()
        row = trial.rows(tick, tick)[0]
        trial.require(row.duty[axis] == 0, clauses, f"the duty is {row.duty[axis]} in the tick of the stop")
        trial.require(row.state is State.OFF, clauses, f"the state is {row.state.word} in the tick of the stop")


@check("STOP-2 STOP-3 STOP-5 TAG-5 ORDER-8 S2 BAD-5", Power.MOTOR)
def stop_by_slope(trial: Trial) -> None:
    """`stop 1` under tag ff falls by `slew_down_duty` a tick and ends with `off`; orders are refused meanwhile."""
    talk, axis, duty = trial.talk, trial.axis, trial.duty
    bound = trial.limits["stop_ticks", 0]
    down = max(trial.limits["slew_down_duty", axis], -(-duty // max(1, bound - 1)))
    trial.set_limit("slew_down_duty", axis, down)
    trial.arm()
    run_up(trial, duty)
    since = talk.heard_count
    talk.beat_s = None
    answer = talk.ask("stop 1", tag=0xFF)
    right = answer.ok and answer.fields[:1] == ("stopping",)
    trial.require(right, "STOP-5 STOP-3 TAG-5", f"`stop 1` was answered {answer}")
    heard = talk.notice("off", since, 10.0)
    trial.need(heard is not None, "STOP-5", "no notice `off` came at the end of `stop 1`")
    trial.come()
    tick, length = trial.tick_of(answer), -(-duty // down)
    wanted = [max(0, duty - (k + 1) * down) for k in range(length)]
    found = trial.duties(tick, tick + length - 1)
    trial.require(found == wanted, "STOP-5 S2", f"the duty fell {found[:6]} ..., not {wanted[:6]} ...")
    told = [(tick, "stop 1 host"), (tick + length - 1, "off off")]
    trial.require(_told(trial, since) == told, "STOP-5", f"notices {_told(trial, since)}, not {told}")


@check("STOP-5 S4", Power.MOTOR)
def stop_is_cut_short(trial: Trial) -> None:
    """A category 1 stop that would fall for longer than `stop_ticks` is cut when they are over."""
    talk, axis, duty = trial.talk, trial.axis, trial.duty
    stop_ticks = min(SHORT_STOP_TICKS, trial.limits["stop_ticks", 0])
    trial.set_limit("slew_down_duty", axis, max(1, duty // (10 * stop_ticks)))
    trial.set_limit("stop_ticks", 0, stop_ticks)
    trial.arm()
    run_up(trial, duty)
    since = talk.heard_count
    talk.beat_s = None
    answer = trial.ok("stop 1", "STOP-2")
    talk.listen_ticks(stop_ticks + 40)
    trial.come()
    begun = trial.tick_of(answer)
    row = trial.rows(begun + stop_ticks, begun + stop_ticks)[0]
    text = f"{stop_ticks} ticks after `stop 1` with stop_ticks {stop_ticks} the duty is {row.duty[axis]}"
    trial.require(row.duty[axis] == 0, "STOP-5 S4", text)
    trial.require(any(trial.duties(begun, begun + stop_ticks - 1)), "STOP-5", "the stop was cut too early")
    told = [(begun, "stop 1 host"), (begun + stop_ticks, "off off")]
    trial.require(_told(trial, since) == told, "STOP-5", f"notices {_told(trial, since)}, not {told}")


@check("LEASE-2 S4 S5 TRIP-1 TRIP-9 WHY-1 CLEAR-1", Power.MOTOR)
def lost_link(trial: Trial) -> None:
    """When the host falls silent the board trips when the lease is over and brings the bridge to zero by itself."""
    talk, axis = trial.talk, trial.axis
    lease_ms = min(LEASE_MS, trial.limits["lease_ms", 0])
    lease = -(-lease_ms * 1000 // trial.identity.tick_us)
    trial.arm(lease_ms)
    run_up(trial, trial.duty)
    talk.beat_s = None
    last = trial.tick_of(talk.ask("beat"))
    since = talk.heard_count
    longest = lease + trial.limits["stop_ticks", 0] + 1
    talk.listen_ticks(longest + 100)
    trips = [(t, n) for t, n in talk.notices(since, "trip") if n.fields[0] == Trip.LINK_LOST.word]
    row = trial.row(last + longest)
    if row is not None:
        text = f"{longest} ticks after the last line (lease {lease}, stop_ticks, 1) the duty is {row.duty[axis]}"
        trial.require(row.duty[axis] == 0, "S4", text)
    trial.need(bool(trips), "LEASE-2 S4", f"no trip link_lost came in {longest + 100} ticks of silence")
    tick, notice = trips[0]
    trial.require(tick - last == lease, "LEASE-2", f"link_lost {tick - last} ticks after the last line, not {lease}")
    trial.require(_told(trial, since)[:1] == [(tick, "stop 1 trip")], "TRIP-1", f"notices: {_told(trial, since)}")
    trial.require(notice.fields[3:4] == (str(lease_ms),), "TRIP-9", f"the trip tells {notice.fields}")
    latched(trial, since, Trip.LINK_LOST)


@check("STOP-6 TRIP-1 S5", Power.MOTOR)
def line_break(trial: Trial) -> None:
    """A BREAK on the line cuts the running bridge and latches."""
    trial.needs(Cap.BREAK)
    talk = trial.talk
    trial.arm()
    run_up(trial, trial.duty)
    since = talk.heard_count
    talk.beat_s = None
    if not talk.port.send_break():
        raise Untested("this port cannot send a BREAK")
    tick, notice = trial.tripped(since, Trip.LINE_BREAK, "STOP-6")
    trial.require(notice.fields[1:4] == ("0", "0", "0"), "STOP-6", f"the trip tells {notice.fields}")
    trial.come()
    trial.require(trial.duties(tick, tick) == [0], "STOP-6 TRIP-1", "the bridge was not off in the tick of the trip")
    latched(trial, since, Trip.LINE_BREAK)


@check("LOG-3 DATA-9 DATA-11 KIND-4 COUNT-1 KIND-3 NOTE-1", Power.MOTOR)
def sample_rate(trial: Trial) -> None:
    """One sample a tick arrives whole while the motor runs and the host talks, and every one is accounted for."""
    talk = trial.talk
    before = trial.counters()
    trial.arm()
    since = talk.heard_count
    run_up(trial, trial.duty)
    first = trial.tick_of(talk.ask("beat"))
    talk.listen(2.0)
    last = trial.tick_of(talk.ask("beat"))
    trial.come()
    no_trip(trial, since)
    after = trial.counters()
    came = sum(trial.row(tick) is not None for tick in range(first, last))
    dropped = after[7] - before[7]
    lost = last - first - came
    trial.note(
        f"{came} of {last - first} samples came; {came * 1e6 / max(1, last - first) / trial.identity.tick_us:.0f}/s"
    )
    if dropped:
        trial.note(f"{dropped} samples were dropped by the board, and counted: this link is too slow for all channels")
    trial.require(lost <= dropped, "KIND-4 DATA-11 LOG-3", f"{lost} samples are missing, and {dropped} told as dropped")
