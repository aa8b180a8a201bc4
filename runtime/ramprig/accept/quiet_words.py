"""Checks of words, refusals, limits and time, for which nothing is switched on."""

from __future__ import annotations

from collections.abc import Iterator

from ramprig.accept.trial import Trial, check
from ramprig.session.readings import Identity
from ramprig_link.messages import Answer, Notice
from ramprig_link.words import (
    ANSWER_TICKS,
    AXES_MAX,
    LIMITS,
    QUEUE_MIN,
    SERVOS_MAX,
    TRAIL_MIN,
    VERSION,
    WORDS,
    Cap,
    Kind,
    Per,
    State,
)

CLOCK_S = 3.0
"""Ticks are held against the host's clock for so long."""
CLOCK_SHARE = 0.02
"""A clock may be wrong by so much; a ceramic resonator is by about 0.5 % (common practice)."""
LATE_S = 0.12
"""What the way to the board and back may add to an answer: USB adapters wait up to 16 ms, a busy host longer."""
ASKED = 40
CHANNELS_MAX = 19


@check("WHO-1 WHO-2 WHO-3 VER-1 LINE-7")
def identity(trial: Trial) -> None:
    """`who` tells a board of version 1 with figures that the protocol allows, and a bare `who` tells the same."""
    talk, who = trial.talk, trial.identity
    bounds = (
        ("version", who.version, VERSION, VERSION), ("tick_us", who.tick_us, 1, 1_000_000),
        ("axes", who.axes, 0, AXES_MAX), ("servos", who.servos, 0, SERVOS_MAX), ("max_duty", who.max_duty, 1, 10000),
        ("queue", who.queue, QUEUE_MIN, 1 << 32), ("trail", who.trail, TRAIL_MIN, 1 << 32),
    )  # fmt: skip
    for name, value, least, most in bounds:
        clauses = "WHO-1 VER-1" if name == "version" else "WHO-1"
        trial.require(least <= value <= most, clauses, f"{name} is {value}, outside {least} to {most}")
    first, second = trial.ok("who", "WHO-1"), trial.ok("who", "WHO-1")
    trial.require(first.fields == second.fields, "WHO-1", "two answers to `who` differ")
    for line in (b"who\n", b"who\r\n"):
        since = talk.heard_count
        talk.raw(line)
        heard = talk.notice("who", since)
        trial.need(heard is not None, "WHO-2 LINE-7", f"{line!r} was not answered by the notice `who`")
        if heard is not None and isinstance(heard.message, Notice):
            trial.require(heard.message.fields == first.fields, "WHO-2", f"the notice tells {heard.message.fields}")


@check("STATE-1 BEAT-1 WHY-1 RUN-2")
def states(trial: Trial) -> None:
    """`state`, `beat` and `why` tell a board that is off: no duty, no pulse, nothing queued."""
    reading = trial.state()
    trial.require(reading.state is State.OFF, "STATE-1", f"the state is {reading.state.word}")
    trial.require(reading.outputs_off, "STATE-1 RUN-3", "an output is on in state off")
    trial.require(reading.queued == 0, "STATE-1", f"{reading.queued} orders are queued in state off")
    beat = trial.ok("beat", "BEAT-1")
    trial.require(beat.fields[:1] == ("off",), "BEAT-1", f"`beat` tells {beat.fields}")
    why = trial.ok("why", "WHY-1")
    if why.fields[:1] == ("none",):
        trial.require(why.fields[:5] == ("none", "0", "0", "0", "0"), "WHY-1", f"`why` tells {why.fields}")
    for cap, value, name in (
        (Cap.SUPPLY, reading.supply_mv, "supply"),
        (Cap.TEMPERATURE, reading.temperature_dc, "temperature"),
    ):
        trial.require(cap in trial.identity.caps or value == 0, "STATE-1", f"the {name} is {value} and not measured")


@check("BAD-5 FIELD-1 FIELD-3 FIELD-4 ORDER-4 ORDER-5 STOP-2 TRAIL-2 LOG-1 LOG-5 LIMIT-1")
def refusals(trial: Trial) -> None:
    """Every word but `arm` refuses wrong numbers of arguments, a missing index, what is out of range, a wrong state."""
    who = trial.identity
    for word in WORDS.values():
        if word.name == "arm":  # however wrong, not before power may be switched on
            continue
        least = sum(not field.optional for field in word.args)
        usual = {Kind.WORD: "x", Kind.HEX8: "00000000"}
        given = [field.choices[0] if field.choices else usual.get(field.kind, "0") for field in word.args]
        trial.refused(" ".join((word.name, *given, "0")), "args", "BAD-5")
        if least:
            trial.refused(" ".join((word.name, *given[: least - 1])), "args", "BAD-5")
    for body, reason, clauses in _refusals(who):
        trial.refused(body, reason, clauses)


def _refusals(who: Identity) -> Iterator[tuple[str, str, str]]:
    """What must be refused in state off, with the reason and the clauses."""
    yield f"ramp {who.axes} 0 0 0", "index", "BAD-5"
    yield f"swing {who.servos} 0 0 0", "index", "BAD-5"
    yield f"rest {who.axes} coast 0", "index", "BAD-5"
    yield f"trail {who.axes} 0", "index", "BAD-5 TRAIL-2"
    yield f"limit ceiling_duty {who.axes}", "index", "BAD-5 LIMIT-1"
    yield f"limit pulse_min_us {who.servos}", "index", "BAD-5 LIMIT-1"
    yield "limit lease_ms 1", "index", "BAD-5 LIMIT-1"
    yield "stop 2", "range", "STOP-2"
    yield "again 256", "range", "LOG-5"
    yield "log 0 1 packed", "range", "LOG-1"
    yield "log 0 0 plain", "range", "LOG-1"
    yield "log 1 0 packed", "range", "LOG-1"
    yield "log 65536 262144 packed", "range", "LOG-1"
    yield f"log 1 {1 << CHANNELS_MAX} packed", "range", "LOG-1"
    yield "log 1 262144 quick", "args", "BAD-5 FIELD-4"
    yield "clear", "state", "CLEAR-1"
    if who.axes:
        yield "ramp 0 10001 0 0", "range", "ORDER-4 BAD-5"
        yield "ramp 0 -10001 0 0", "range", "ORDER-4 BAD-5"
        yield "ramp 0 0 1073741825 0", "range", "FIELD-3 BAD-5"
        yield "ramp 0 0 0 0", "state", "BAD-5 ORDER-2"
        yield "rest 0 brake 0", "state", "BAD-5"
    if who.axes < AXES_MAX:
        yield f"log 1 {1 << 3 * who.axes} packed", "range", "LOG-1"
    if who.servos:
        yield "swing 0 300 0 0", "range", "ORDER-5 BAD-5"
        yield "swing 0 0 1 0", "range", "ORDER-5 BAD-5"
        yield "swing 0 0 0 0", "state", "BAD-5 RUN-3"
    if who.servos < SERVOS_MAX:
        yield f"log 1 {1 << 12 + who.servos} packed", "range", "LOG-1"


@check("STOP-2 STOP-4 DISARM-1 TRAIL-2 LINE-7")
def nothing_to_stop(trial: Trial) -> None:
    """In state off `stop` and `disarm` are ok and do nothing, and a bare `stop` is answered by `off` alone."""
    talk = trial.talk
    since = talk.heard_count
    for body in ("stop 0", "stop 1"):
        trial.require(trial.ok(body, "STOP-2").fields[:1] == ("off",), "STOP-2 STOP-3", f"`{body}` left the state off")
    trial.ok("disarm", "DISARM-1")
    talk.listen_ticks(3)
    trial.require(not talk.notices(since), "STOP-2 DISARM-1", f"they brought notices: {talk.notices(since)}")
    talk.raw(b"stop\n")
    heard = talk.notice("off", since)
    trial.need(heard is not None, "STOP-4 LINE-7", "a bare `stop` was not answered by the notice `off`")
    if heard is not None and isinstance(heard.message, Notice):
        trial.require(heard.message.fields[:1] == ("off",), "STOP-4", f"it tells {heard.message.fields}")
    if trial.identity.axes and trial.ok("why", "WHY-1").fields[:1] == ("none",):
        trial.refused("trail 0 0", "gone", "TRAIL-2")


@check("LIMIT-1 LIMIT-2 BAD-5 FIELD-2")
def limits(trial: Trial) -> None:
    """Every limit takes the least and the greatest value of its table, tells them, and refuses what lies outside."""
    who = trial.identity
    for item, row in LIMITS.items():
        fitted = {Per.DEVICE: 1, Per.AXIS: who.axes, Per.SERVO: who.servos}[row.per]
        for index in range(fitted):
            before = trial.limits[item, index]
            least, most = row.lowest, row.highest
            if item == "ceiling_duty":
                most = min(most, who.max_duty)
            if item == "pulse_min_us":
                most = trial.limits["pulse_max_us", index]
            if item == "pulse_max_us":
                least = trial.limits["pulse_min_us", index]
            for value in (least - 1, most + 1):
                trial.refused(f"limit {item} {index} {value}", "range", "LIMIT-2 BAD-5")
            for value in (least, most, before):
                trial.set_limit(item, index, value)
                told = trial.ok(f"limit {item} {index}", "LIMIT-1").fields
                trial.require(told[:1] == (str(value),), "LIMIT-1 LIMIT-4", f"{item} {index} is {told}, set to {value}")


@check("KIND-3 KIND-2 WHO-1")
def time(trial: Trial) -> None:
    """Answers come within their time, and the tick is as long by the host's clock as `who` says."""
    talk, tick_s = trial.talk, trial.identity.tick_s
    first = last = None
    worst_s, until_s = 0.0, talk.clock.now() + CLOCK_S
    while talk.clock.now() < until_s:
        sent_s, since = talk.clock.now(), talk.heard_count
        heard = talk.answer(talk.say("beat"), since)
        trial.need(heard is not None, "TAG-2 KIND-3", "a `beat` was not answered")
        if heard is None or not isinstance(heard.message, Answer):
            continue
        worst_s = max(worst_s, heard.host_s - sent_s)
        last = (sent_s, heard.host_s, heard.tick or 0)
        first = first or last
        talk.listen(CLOCK_S / ASKED)
    trial.note(f"slowest answer {worst_s * 1e3:.1f} ms after its request was sent")
    bound_s = ANSWER_TICKS * tick_s + LATE_S
    trial.require(worst_s <= bound_s, "KIND-3", f"an answer took {worst_s:.3f} s, and {bound_s:.3f} s is allowed here")
    if first is None or last is None or last[2] <= first[2]:
        trial.fail("KIND-2", "the ticks of the answers do not grow")
        return
    ticks = last[2] - first[2]
    low, high = last[0] - first[1], last[1] - first[0]  # the true time between the two lies between these
    tick_us = (low + high) / 2 / ticks * 1e6
    trial.note(f"a tick lasts {tick_us:.2f} us by the host's clock, {trial.identity.tick_us} us by `who`")
    right = low * (1 - CLOCK_SHARE) <= ticks * tick_s <= high * (1 + CLOCK_SHARE)
    trial.require(right, "WHO-1", f"{ticks} ticks of {trial.identity.tick_us} us took {low:.3f} to {high:.3f} s")
