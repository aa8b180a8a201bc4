"""Checks of the chain with the motor running: slew, ramp, dwell, standstill, ceiling; by the sample of every tick."""

from __future__ import annotations

from ramprig.accept.trial import Broken, Power, Trial, Untested, check
from ramprig_link.messages import Notice
from ramprig_link.words import LIMITS, STATE_BITS, Cap

DWELL_MOST_TICKS = LIMITS["dwell_ticks"].highest
STILL_MOST_TICKS = LIMITS["still_ticks"].highest
START_HOLD_TICKS = 700
"""A first motion is held back by a dwell that ends so long after the order."""
FALL_TICKS = 3000
"""A slow fall lasts about so long."""
HOLD_TICKS = 300
"""A duty is held so long, so that the motor runs."""
COAST_S = 12.0
"""A shaft that has not come to rest by then will not."""


def no_trip(trial: Trial, since: int) -> None:
    """End the check where the board has tripped, which this check did not mean to happen."""
    for _, notice in trial.talk.notices(since, "trip"):
        hint = {"stall": "; is the motor connected, and does it turn at this duty?"}
        hint["wrong_way"] = "; the encoder counts against the duty: `ramprig measure wiring` tells more"
        trial.fail("", f"the board tripped: {' '.join(notice.fields)}{hint.get(notice.fields[0], '')}")
        raise Broken


def run_up(trial: Trial, duty: int, *, since: int | None = None) -> int:
    """Drive to a duty as fast as the slew allows and hold it for a while; returns the order's start tick."""
    talk = trial.talk
    since = talk.heard_count if since is None else since
    start = trial.ramp(duty)
    done = talk.notice("done", since, COAST_S)
    no_trip(trial, since)
    trial.need(done is not None, "ORDER-7", f"a ramp to {duty} brought no `done` in {COAST_S:g} s")
    talk.listen_ticks(HOLD_TICKS)
    no_trip(trial, since)
    return start


def _first_away(trial: Trial, start: int, last: int) -> int:
    """The first tick from `start` on with a duty; the check ends where there is none."""
    for tick in range(start, last + 1):
        row = trial.row(tick)
        if row is not None and row.duty[trial.axis]:
            return tick
    trial.fail("ORDER-4", "the bridge did not leave zero")
    raise Broken


@check("S3 CHAIN-3 CHAIN-4", Power.MOTOR)
def first_motion(trial: Trial) -> None:
    """After the board's start the bridge does not leave zero before it has been there for `dwell_ticks`."""
    talk, axis = trial.talk, trial.axis
    duty = min(trial.duty, 1000)
    if not trial.saw_start:
        raise Untested("the board's start was not seen: restart it with --restart, or open the port before its power")
    now = talk.tick_now()
    dwell = now + START_HOLD_TICKS + trial.lead_ticks()
    if dwell > DWELL_MOST_TICKS:
        raise Untested(f"the board started {now} ticks ago, and a dwell lasts {DWELL_MOST_TICKS} at most: --restart")
    trial.set_limit("dwell_ticks", axis, dwell)
    trial.arm()
    since = talk.heard_count
    start = trial.ramp(duty)
    talk.until_tick(dwell + 100)
    trial.come()
    away = _first_away(trial, start, dwell + 100)
    text = f"the first motion came {away} ticks after the start, with a dwell of {dwell} and an order for {start}"
    trial.require(away >= dwell, "S3 CHAIN-3", text)
    counts = [row.counts[axis] for row in trial.rows(start, dwell)] if Cap.ENCODER in trial.identity.caps else [0]
    if max(counts) == min(counts) and away >= dwell:
        trial.require(away == dwell, "CHAIN-4 CHAIN-3", text)
        let_go = [n.fields for t, n in talk.notices(since, "dwell") if t == away]
        wanted = [(str(axis), str(away - start))]
        trial.require(let_go == wanted, "CHAIN-3", f"the notice `dwell` of that tick tells {let_go}, not {wanted}")


@check("S2 CHAIN-2 ORDER-3 ORDER-4 ORDER-7 LOG-3 STATE-1", Power.MOTOR)
def ramps_and_slew(trial: Trial) -> None:
    """A ramp moves the duty tick by tick as the clauses say, and a jump is held to the slew limits both ways."""
    talk, axis, duty = trial.talk, trial.axis, trial.duty
    up, down = trial.limits["slew_up_duty", axis], trial.limits["slew_down_duty", axis]
    trial.arm()
    since = talk.heard_count
    start = run_up(trial, duty, since=since)
    half, ticks = duty // 2, max(200, 2 * (duty // (2 * down) + 1))
    second = trial.ramp(half, ticks)
    talk.until_tick(second + ticks + 20)
    third = trial.ramp(0)
    talk.until_tick(third + duty // down + 20)
    trial.come()
    no_trip(trial, since)
    away = _first_away(trial, start, second)
    rise = [min((k + 1) * up, duty) for k in range(-(-duty // up) + 20)]
    _same(trial, away, rise, "S2 CHAIN-2", f"a jump to {duty}")
    line = [duty - (duty - half) * min(k, ticks) // ticks for k in range(ticks + 10)]
    _same(trial, second, line, "ORDER-4", f"a ramp to {half} in {ticks} ticks")
    fall = [max(0, half - (k + 1) * down) for k in range(-(-half // down) + 10)]
    _same(trial, third, fall, "S2 CHAIN-2", "a jump to 0")
    done = [tick for tick, _ in talk.notices(since, "done")]
    wanted = [away + -(-duty // up) - 1, second + ticks, third + -(-half // down) - 1]
    trial.require(done == wanted, "ORDER-7", f"the notices `done` are of ticks {done}, not {wanted}")
    if Cap.ENCODER in trial.identity.caps:
        first, last = trial.rows(away, away)[0], trial.rows(third, third)[0]
        trial.note(f"the shaft moved by {last.counts[axis] - first.counts[axis]} counts in {third - away} ticks")


def _same(trial: Trial, first: int, wanted: list[int], clauses: str, what: str) -> None:
    found = trial.duties(first, first + len(wanted) - 1)
    wrong = next((k for k, (a, b) in enumerate(zip(found, wanted, strict=True)) if a != b), None)
    if wrong is not None:
        trial.fail(clauses, f"{what}: duty {found[wrong]} {wrong} ticks on (tick {first + wrong}), not {wanted[wrong]}")


@check("S3 CHAIN-2 CHAIN-3", Power.MOTOR)
def reversal_waits_for_standstill(trial: Trial) -> None:
    """A reversal waits until the shaft has stood still for `still_ticks`, however long the dwell is over."""
    trial.needs(Cap.ENCODER)
    axis, duty = trial.axis, trial.duty
    if trial.limits["sense", axis] == 0:
        raise Untested(f"axis {axis} has no encoder: its limit sense is 0")
    dwell = trial.limits["dwell_ticks", axis]
    still = max(trial.limits["still_ticks", axis], min(dwell + HOLD_TICKS, STILL_MOST_TICKS))
    trial.set_limit("still_ticks", axis, still)
    _reverse(trial, duty)


@check("S3 CHAIN-2 CHAIN-3 CHAIN-4 S2", Power.MOTOR)
def reversal_waits_for_dwell(trial: Trial) -> None:
    """A reversal waits at zero for `dwell_ticks`, which begin at zero and not with the fall."""
    axis, duty = trial.axis, trial.duty
    trial.set_limit("slew_down_duty", axis, max(1, duty // FALL_TICKS))
    _reverse(trial, -duty)


def _reverse(trial: Trial, duty: int) -> None:
    """Run to a duty, then order a part of it the other way, and see what the bridge does."""
    talk, axis = trial.talk, trial.axis
    trial.arm()
    run_up(trial, duty)
    since = talk.heard_count
    down = trial.limits["slew_down_duty", axis]
    start = trial.ramp(-duty // 3)
    zero = start + -(-abs(duty) // down)
    talk.until_tick(zero)
    heard = talk.notice("dwell", since, COAST_S)
    talk.listen_ticks(60)
    trial.come()
    no_trip(trial, since)
    sign = 1 if duty > 0 else -1
    if heard is None or not isinstance(heard.message, Notice) or heard.tick is None:
        turned = any(row is not None and row.duty[axis] * sign < 0 for row in map(trial.row, range(start, zero + 1500)))
        trial.require(not turned, "CHAIN-3", "the bridge reversed, and no notice `dwell` told of it")
        if not turned:
            raise Untested(f"the shaft did not come to rest in {COAST_S:g} s, so the bridge rightly did not reverse")
        return
    held = trial.duties(start - 1 + -(-abs(duty) // down), heard.tick)
    trial.require(not any(held[:-1]), "CHAIN-2 CHAIN-3", f"between fall and reversal the duty was {set(held[:-1])}")
    trial.require(held[-1] * sign < 0, "CHAIN-3", f"the lock let go in tick {heard.tick} with duty {held[-1]}")
    text = f"`dwell` tells {heard.message.fields}; the lock held {len(held) - 2} ticks"
    trial.require(heard.message.fields[:2] == (str(axis), str(len(held) - 2)), "CHAIN-3", text)


@check("S1 CHAIN-1 LIMIT-3 LIMIT-4 ORDER-4", Power.MOTOR)
def ceiling(trial: Trial) -> None:
    """A ceiling refuses what is above it, and cuts a running duty in the next tick when it is tightened, both ways."""
    talk, axis, duty = trial.talk, trial.axis, trial.duty
    for sign in (1, -1):
        trial.set_limit("ceiling_duty", axis, duty)
        trial.arm()
        trial.refused(f"ramp {axis} {sign * (duty + 1)} 0 {trial.start_tick() % (1 << 32)}", "range", "ORDER-4")
        run_up(trial, sign * duty)
        cut = duty // 2
        answer = trial.set_limit("ceiling_duty", axis, cut, "LIMIT-3")
        refused = trial.refused(f"limit ceiling_duty {axis} {cut + 1}", "armed", "LIMIT-3 S6")
        if refused.ok:
            trial.limits["ceiling_duty", axis] = cut + 1
        talk.listen_ticks(50)
        trial.come()
        tick = trial.tick_of(answer)
        rows = trial.rows(tick, tick + 40)
        duties = [row.duty[axis] for row in rows]
        trial.require(duties[0] == sign * duty, "LIMIT-4", f"duty {duties[0]} in the tick of the limit, not the next")
        right = all(d == sign * cut for d in duties[1:])
        trial.require(right, "S1 CHAIN-1", f"the ceiling was set to {cut} at a duty of {sign * duty}: then {duties[1]}")
        bits = {STATE_BITS["at_ceiling"].of(row.bits) for row in rows[1:]}
        trial.require(bits == {1}, "CHAIN-1", f"the state bit at_ceiling is {bits} while the ceiling cuts the demand")
        trial.settle()
