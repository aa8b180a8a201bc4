"""Check of a start of the board, where whoever accepts it can start it anew."""

from __future__ import annotations

from ramprig.accept.trial import Trial, Untested, check
from ramprig.session.readings import Identity
from ramprig_link.check import seal
from ramprig_link.messages import Notice
from ramprig_link.words import Cap, Cause

BOOT_S = 60.0
"""So long is waited for a person to press a button and for a board to boot."""
SILENT_S = 3.0


@check("RUN-1 WHO-3 TAG-7 KIND-1 LIMIT-4")
def restart(trial: Trial) -> None:
    """A start is told by `boot` before all else; the boot number has grown, no tag is kept, and kept limits are."""
    talk, who = trial.talk, trial.identity
    if trial.wish.restart is None:
        raise Untested("it was not asked for: --restart")
    lowered = trial.limits["stop_ticks", 0] - 1 or 2
    trial.set_limit("stop_ticks", 0, lowered)
    talk.listen(0.2)  # a board may write its memory in its own time
    last = trial.ok("beat", "BEAT-1")
    since = talk.heard_count
    if not trial.wish.restart():
        raise Untested("the board was not started anew")
    heard = talk.notice("boot", since, BOOT_S)
    trial.need(heard is not None, "RUN-1", f"no notice `boot` came in {BOOT_S:g} s")
    if heard is None or not isinstance(heard.message, Notice):
        return
    trial.saw_start = True
    boot, cause = heard.message.fields[:2]
    trial.require(heard.message.tick == 0, "RUN-1", f"`boot` is of tick {heard.message.tick}, not of the first, 0")
    trial.require(Cause.named(cause) is not None, "RUN-1", f"`boot` tells the cause {cause}")
    talk.listen(0.1)
    since = talk.heard_count
    talk.rules.sent(last.tag, "beat")
    talk.raw(seal(f"{last.tag:02x} beat".encode("ascii")))
    kept = talk.answer(last.tag, since, SILENT_S)
    fresh = kept is not None and kept.message != last
    trial.require(fresh, "TAG-7", "the board still keeps the tag from before its start")
    after = Identity.read(trial.ok("who", "WHO-1").fields)
    same = (after.board, after.serial) == (who.board, who.serial)
    trial.require(same, "WHO-3", f"another board answers after the start: {after.name}")
    grown = after.boot == (who.boot + 1) % (1 << 32)
    if Cap.KEEPS_LIMITS in who.caps:
        trial.require(grown, "WHO-3", f"the boot number went from {who.boot} to {after.boot}")
    trial.require(str(after.boot) == boot, "WHO-3", f"`boot` tells {boot}, `who` {after.boot}")
    trial.require(after.boot != who.boot, "WHO-3", f"the boot number is {after.boot} still")
    trial.known = after
    _limits_kept(trial, lowered)


def _limits_kept(trial: Trial, lowered: int) -> None:
    """What was set is what the board starts with, where it says that it keeps limits."""
    value = trial.number("limit stop_ticks 0", "LIMIT-1")
    if Cap.KEEPS_LIMITS in trial.identity.caps:
        trial.require(value == lowered, "LIMIT-4", f"stop_ticks was set to {lowered}, and is {value} after a start")
    for key in list(trial.limits):
        trial.limits[key] = trial.number(f"limit {key[0]} {key[1]}", "LIMIT-1")
