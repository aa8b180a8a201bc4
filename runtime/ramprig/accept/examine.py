"""One acceptance from the first byte to the last limit put back: opens a board, makes all checks, gives a verdict."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

from ramprig.accept import (  # the checks, in the order in which they are made
    live_arming,
    live_motion,
    live_servo,
    live_stops,
    live_trips,
    quiet_lines,
    quiet_samples,
    quiet_start,
    quiet_words,
)
from ramprig.accept.invariants import Witness
from ramprig.accept.lines import CLAUSES
from ramprig.accept.talk import Talk
from ramprig.accept.trial import SETTLE_TICKS, Broken, Check, Missing, Power, Result, Trial, Untested, Wish, declared
from ramprig.errors import LinkError, LinkLost, StoppedByUser, UsageError
from ramprig.port.base import Port, at_port
from ramprig.session.readings import Identity
from ramprig_link.faults import LinkFault, SampleFault
from ramprig_link.messages import Answer
from ramprig_link.words import CHANNELS, VERSION, Cap, Per, State

MODULES = (
    *(quiet_words, quiet_lines, quiet_samples, quiet_start),
    *(live_motion, live_arming, live_stops, live_trips, live_servo),
)
QUIET_S = 0.2
DEAF_S = 10.0
"""A board that opening the port has restarted boots for some seconds."""
TRIES_MAX = 4
"""So often is a check made where samples were dropped that it judges by."""
LEAVES_MAX = 20
"""So often is the board put back where a stop is asked for meanwhile."""
INVARIANTS = ("S1", "S2", "S3", "S4", "S5", "S6", "S7")
NO_POWER = "nothing was to be switched on"
UNREADABLE = (LinkFault, ValueError, LookupError)
"""What reading raises where a board's words or figures are none that the protocol has."""


@dataclass(slots=True)
class Verdict:
    """What an acceptance has found. `lost` tells of a link that went, `unrestored` of limits that are not as before."""

    identity: Identity | None = None
    results: list[Result] = field(default_factory=list)
    lost: str = ""
    stopped: str = ""
    unrestored: list[str] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)
    energised: bool = False
    only: str = ""
    """Only the checks with this in their name were to be made."""

    @property
    def failed(self) -> dict[str, list[str]]:
        """What failed by clause, in sentences; "" has what belongs to no clause."""
        found: dict[str, list[str]] = {}
        for result in self.results:
            for fault in result.faults:
                for clause in fault.clauses or ("",):
                    found.setdefault(clause, []).append(f"{result.check.name}: {fault.text}")
        return found

    @property
    def exit_code(self) -> int:
        """0 nothing failed, 1 a clause failed or limits are not put back, 4 the link was lost, 5 stopped by a user."""
        if any(self.failed):
            return 1
        if self.lost:
            return LinkLost.exit_code
        if self.stopped and not self.failed:
            return StoppedByUser.exit_code
        return 1 if self.failed or self.unrestored else 0


Tell = Callable[[str], None]


def all_checks() -> list[Check]:
    """Every check, those without power first, in the order in which they are made."""
    found = []
    for module in MODULES:
        found += [check for check in declared() if check.run.__module__ == module.__name__]
    return sorted(found, key=lambda check: check.power is not Power.NONE)


def accept(port: Port, wish: Wish, *, tell: Tell, talk: Talk | None = None) -> Verdict:
    """Make all checks on the board at `port`, telling each result as it comes; what was found is in the verdict.

    However it ends, the outputs are off and the board's limits are put back, or the verdict says which are not. Raises
    LinkLost where no board answers at all, and LinkError for one of another version or whose first answers cannot be
    used; UsageError where `wish.only` leaves no check.
    """
    if not any(wish.only in check.name for check in all_checks()):
        raise UsageError(f"--only {wish.only}: no check has this in its name; --list shows them")
    talk = Talk(port) if talk is None else talk
    trial = Trial(talk, wish)
    verdict = Verdict(only=wish.only)
    try:
        open_board(trial)
    except Broken as error:
        raise LinkError(f"{at_port(port.name)}the board cannot be known: {trial.last_fault}") from error
    except UNREADABLE as error:
        raise LinkError(f"{at_port(port.name)}the board cannot be known, an answer cannot be read: {error}") from error
    verdict.identity = trial.known
    try:
        _make_checks(trial, verdict, tell)
    except LinkError as error:
        verdict.lost = str(error)
    except StoppedByUser as error:
        verdict.stopped = f"{str(error).removesuffix('.')}; the report has what was checked before."
    finally:
        verdict.unrestored = _leave(trial)
    if talk.repeats:
        verdict.notes.append(f"{talk.repeats} lines had to be sent again before they were answered")
    return verdict


def open_board(trial: Trial) -> None:
    """Bring a board of which nothing is known to a known identity, outputs off, its limits read."""
    talk = trial.talk
    talk.raw(b"\nstop\n")
    talk.listen(QUIET_S)
    talk.rules.faults.clear()  # what an earlier host asked for is not this one's
    until_s = talk.clock.now() + DEAF_S
    while True:
        try:
            fields = talk.ask("who").fields
            break
        except LinkLost as error:
            if talk.clock.now() >= until_s:
                raise LinkLost(f"{error}{_heard_instead(talk)}") from error
    trial.known = who = Identity.read(fields)
    if who.version != VERSION:
        raise LinkError(f"{who.name} speaks version {who.version} of the protocol; this program knows {VERSION}")
    talk.tick_s = who.tick_s
    talk.rules.axes, talk.rules.servos = who.axes, who.servos
    talk.ask("stop 0")
    talk.ask("log 0 0 packed")
    talk.listen(QUIET_S)
    talk.rules.faults.clear()
    talk.repeats = 0
    trial.saw_start = talk.boots > 0
    trial.result = Result(_opening())
    trial.read_limits()
    trial.original = dict(trial.limits)
    reading = trial.state()
    if reading.state is State.TRIPPED:
        answer = talk.ask("clear")
        if not answer.ok:
            raise LinkError(f"{who.name} is tripped ({reading.trip.word}) and refuses `clear`: {answer.reason}")


def _heard_instead(talk: Talk) -> str:
    """What came in place of an answer, and what that may mean."""
    if not talk.bytes_heard:
        return (
            "; nothing came at all: is this the port, is the board powered, are its two data wires the right way round?"
        )
    if talk.echoes:
        return "; what is sent comes back: the port is looped, or the board echoes and speaks another protocol"
    return (
        f"; {talk.bytes_heard} bytes came that are no answer of this protocol: is the rate right (--baud), "
        "and is this the board?"
    )


def _opening() -> Check:
    return Check(name="opening", clauses=(), text="", power=Power.NONE, run=lambda trial: None)


def _make_checks(trial: Trial, verdict: Verdict, tell: Tell) -> None:
    checks = [check for check in all_checks() if trial.wish.only in check.name]
    quiet = [check for check in checks if check.power is Power.NONE]
    live = [check for check in checks if check.power is not Power.NONE]
    lines = Result(Check(name="every-line", clauses=CLAUSES, text=EVERY_LINE, power=Power.NONE, run=lambda _: None))
    verdict.results.append(lines)
    try:
        for check in quiet:
            _make(trial, check, verdict, tell)
        verdict.energised = bool(live) and trial.wish.energise(trial)
        if verdict.energised:
            _begin_watch(trial, fresh=trial.saw_start)
        logged = 0
        for check in live:
            if verdict.energised:
                mask = _mask(trial.identity, check)
                trial.result = Result(check)
                if mask != logged:
                    _log(trial, mask)
                    logged = mask
                _make(trial, check, verdict, tell)
            else:
                verdict.results.append(Result(check, untested=NO_POWER))
    finally:
        lines.faults += trial.talk.rules.faults
    tell(line_of(lines))


EVERY_LINE = "Each line that the board sent has a right form, right fields, the next number and the right coding."


def _mask(who: Identity, check: Check) -> int:
    """What a check is judged by, and no more: not every link carries every channel once a tick."""
    fitted = {Per.AXIS: who.axes, Per.SERVO: who.servos, Per.DEVICE: 1}
    wanted = ["duty", "state", *(["counts"] if Cap.ENCODER in who.caps else [])]
    wanted += ["current_ma"] if check.current and Cap.CURRENT in who.caps else []
    wanted += ["pulse_us"] if check.power is Power.SERVO else []
    return sum(
        1 << CHANNELS[name].first_bit + index * CHANNELS[name].step
        for name in wanted
        for index in range(fitted[CHANNELS[name].per])
    )


def _begin_watch(trial: Trial, *, fresh: bool) -> None:
    """Have S1 to S7 judged from now on."""
    who = trial.identity
    trial.witness = trial.talk.witness = Witness(
        dict(trial.limits),
        axes=who.axes,
        servos=who.servos,
        max_duty=who.max_duty,
        tick_us=who.tick_us,
        fresh=fresh,
        whole=False,
    )
    trial.witness.ticks.latest = trial.talk.ticks.latest


def _log(trial: Trial, mask: int) -> None:
    """Have a sample of these channels in every tick."""
    trial.ok(f"log 1 {mask} packed", "LOG-1")
    trial.talk.rules.logging_begins(1, mask)
    trial.talk.listen_ticks(SETTLE_TICKS)


def _make(trial: Trial, check: Check, verdict: Verdict, tell: Tell) -> None:
    """One check, and whatever it left put right; its result is in the verdict even where the link goes."""
    result = trial.result = Result(check)
    verdict.results.append(result)
    talk, begun_s, boots = trial.talk, trial.talk.clock.now(), trial.talk.boots
    try:
        _tried(trial, check, result)
    except Broken:
        pass
    except SampleFault as unreadable:
        trial.fail("DATA-10", f"a data line cannot be read: {unreadable}")
    except UNREADABLE as error:
        trial.fail(" ".join(check.clauses[:1]), f"an answer cannot be read: {error}")
    except LinkLost:
        if not _answers(talk):
            trial.fail("", "the board fell silent during this check")
            raise
        trial.fail("TAG-2", "a request of this check was never answered, though the board answers others")
    except LinkError as error:
        trial.fail(" ".join(check.clauses[:1]), str(error))
    if talk.boots != boots and check.run is not quiet_start.restart:
        result.faults.clear()  # no clause is broken by what was expected of the board before its start
        trial.fail("", "the board restarted by itself during this check: a brown-out, or a fault of the firmware")
    for sentence in _settled(trial):
        trial.fail("", sentence)
    _judge_invariants(trial)
    result.seconds = talk.clock.now() - begun_s
    tell(line_of(result))
    for fault in result.faults:
        tell(f"      {' '.join(fault.clauses) or 'the bench'}: {fault.text}")


def _settled(trial: Trial) -> list[str]:
    """As `Trial.settle`, also where the board's answers are none; raises LinkLost alone."""
    try:
        return trial.settle()
    except LinkLost:
        raise
    except Broken:
        return [f"the board could not be brought to `off` after this check: {trial.last_fault}"]
    except (LinkError, *UNREADABLE) as error:
        return [f"the board could not be brought to `off` after this check: {error}"]


def _tried(trial: Trial, check: Check, result: Result) -> None:
    """Run a check, and again where a slow link has dropped samples that it judges by."""
    for _ in range(TRIES_MAX):
        result.untested = ""
        try:
            check.run(trial)
            return
        except Untested as reason:
            result.untested = str(reason)
            if not isinstance(reason, Missing):
                return
            trial.settle()  # what it raises ends the check as what the check raises does


def _answers(talk: Talk) -> bool:
    try:
        return isinstance(talk.ask("beat"), Answer)
    except LinkLost:
        return False


def _judge_invariants(trial: Trial) -> None:
    """S1 to S7 over all ticks of this check, one sentence for each invariant broken."""
    if trial.witness is None:
        return
    trial.come()
    told: dict[str, int] = {}
    for violation in trial.witness.judge():
        told[violation.clause] = told.get(violation.clause, 0) + 1
        if told[violation.clause] == 1 and violation.clause in INVARIANTS:
            trial.fail(violation.clause, f"by the samples: {violation}")


def _leave(trial: Trial) -> list[str]:
    """Outputs off, logging ended, limits as they were; in sentences what could not be done.

    A stop that is asked for meanwhile is sent by whoever asks for it; the limits are put back all the same.
    """
    error: Exception | None = None
    for _ in range(LEAVES_MAX):
        trial.talk.let_go()
        try:
            trial.result = Result(_opening())
            wrong = trial.settle()
            trial.talk.ask("log 0 0 packed")
            return wrong
        except StoppedByUser as again:
            error = again
        except (LinkError, Broken, *UNREADABLE) as lost:
            error = lost
            break
    original, now = trial.original, trial.limits
    changed = [f"limit {key[0]} {key[1]}: {value}" for key, value in original.items() if now.get(key) != value]
    why = str(error).removesuffix(".") or "refused"
    return [f"the board could not be left as it was ({why}); before: {', '.join(changed)}"]


def line_of(result: Result) -> str:
    """A result in a line."""
    reason = f": {result.untested}" if result.untested and not result.faults else ""
    return f"{result.word:<10}  {result.check.name}{reason}"


def clauses_not_tested(results: Sequence[Result]) -> dict[str, str]:
    """By clause that some check covers and none that was made: why not."""
    made = {clause for result in results if not result.untested or result.faults for clause in result.check.clauses}
    reasons: dict[str, str] = {}
    for result in results:
        for clause in result.check.clauses:
            if clause not in made:
                reasons.setdefault(clause, f"{result.check.name}: {result.untested}")
    return reasons
