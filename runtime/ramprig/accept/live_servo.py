"""Checks of one servo by the sample of every tick: home, slew, ends, and pulses taken away."""

from __future__ import annotations

from ramprig.accept.live_motion import no_trip
from ramprig.accept.trial import Power, Trial, Untested, check
from ramprig_link.words import STATE_BITS

TRAVEL_US = 60
"""The servo moves so far from home, where its limits allow; about 6 deg of most."""
CUT_US = 20
WAIT_S = 20.0


def _swing(trial: Trial, pulse_us: int, ticks: int = 0) -> int:
    """Order a swing and wait until it is done; returns its start tick."""
    talk, since = trial.talk, trial.talk.heard_count
    start = trial.start_tick()
    trial.ok(f"swing {trial.wish.servo} {pulse_us} {ticks} {start % (1 << 32)}", "ORDER-5")
    heard = talk.notice("done", since, WAIT_S)
    no_trip(trial, since)
    trial.need(heard is not None, "ORDER-7 ORDER-5", f"a swing to {pulse_us} us brought no `done` in {WAIT_S:g} s")
    return start


def _ends(trial: Trial) -> tuple[int, int, int]:
    """Home, and the two places near it where the servo is moved to; Untested where there is no room."""
    servo = trial.wish.servo
    if trial.identity.servos <= servo:
        raise Untested("the board has no such servo")
    least, most = trial.limits["pulse_min_us", servo], trial.limits["pulse_max_us", servo]
    home = max(least, min(most, trial.limits["pulse_home_us", servo]))
    low, high = max(least, home - TRAVEL_US), min(most, home + TRAVEL_US)
    if high - low < 2 * CUT_US:
        raise Untested(f"servo {servo} may only move from {low} to {high} us")
    return home, low, high


@check("S7 ORDER-5 ORDER-7 RUN-3 LIMIT-4", Power.SERVO)
def servo_motion(trial: Trial) -> None:
    """The first pulse is home, a swing keeps the slew and ends at its goal, 0 takes the pulses away."""
    talk, servo = trial.talk, trial.wish.servo
    home, low, high = _ends(trial)
    least, most = trial.limits["pulse_min_us", servo], trial.limits["pulse_max_us", servo]
    trial.arm()
    for pulse in (least - 1, most + 1):
        trial.refused(f"swing {servo} {pulse} 0 {trial.start_tick() % (1 << 32)}", "range", "ORDER-5")
    start = _swing(trial, high)
    _swing(trial, low, 300)
    tick = trial.tick_of(talk.ask("beat"))
    trial.come()
    pulses = [row.pulse_us[servo] for row in trial.rows(start, start + 1)]
    trial.require(pulses[0] == home, "ORDER-5 S7", f"the first pulse is {pulses[0]} us, home is {home}")
    at = trial.rows(tick, tick)[0].pulse_us[servo]
    trial.require(at == low, "ORDER-5 ORDER-7", f"after `done` the pulse is {at} us, not {low}")
    end = _swing(trial, 0)
    talk.listen_ticks(10)
    trial.come()
    rows = trial.rows(end, end + 5)
    trial.require(not any(r.pulse_us[servo] for r in rows), "ORDER-5", "pulses go on after a swing to 0")


@check("S7 LIMIT-3 LIMIT-4", Power.SERVO)
def servo_ends(trial: Trial) -> None:
    """An end that is tightened past the pulse cuts it in the next tick and holds it there."""
    talk, servo = trial.talk, trial.wish.servo
    _, low, high = _ends(trial)
    for goal, item, end in ((low, "pulse_min_us", low + CUT_US), (high, "pulse_max_us", high - CUT_US)):
        trial.arm()
        _swing(trial, goal)
        answer = trial.set_limit(item, servo, end, "LIMIT-3")
        talk.listen_ticks(60)
        trial.come()
        tick = trial.tick_of(answer)
        rows = trial.rows(tick + 1, tick + 50)
        found = sorted({row.pulse_us[servo] for row in rows})
        trial.require(found == [end], "S7 LIMIT-4", f"{item} was set to {end} at a pulse of {goal} us: then {found}")
        slewing = {STATE_BITS["at_slew"].of(row.bits) for row in rows[1:]}
        text = f"the pulse stands at its end of {end} us, and the state bit at_slew says that it does not"
        trial.require(slewing == {0}, "S7 LIMIT-4", text)
        trial.settle()
