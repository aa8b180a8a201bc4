"""`ramprig accept PORT`: does a board keep the protocol, clause by clause, without power and with the motor?"""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING

from ramprig.cli.asking import answered, cautions, on_terminal
from ramprig.cli.running import RUNS
from ramprig.cli.say import say_surely, tell
from ramprig.errors import RamprigError, UsageError

if TYPE_CHECKING:
    from collections.abc import Callable

    from ramprig.accept.examine import Verdict
    from ramprig.accept.talk import Talk
    from ramprig.accept.trial import Trial
    from ramprig.port.base import Port

DUTY_PERCENT = 30.0
NOT_CONFIRMED_CODE = 5

EPILOG = """\
First come the checks for which nothing is switched on. Then it says what will move and asks; with --energise yes it
does not ask, with --energise no it stops there. The motor runs at most at --duty, and never above the ceiling that the
board has. The board's limits are read first and put back at the end; for the checks they are only tightened, or shifted
together with the reading they bound. A healthy motor that turns freely is needed, and room for the servo to move. A
board without axes is accepted as one; the checks that need an axis are told as not made.

Exits with 0 where nothing failed, 1 where a clause failed or the limits could not be put back, 4 where the link was
lost, 5 where it was stopped. With --only no board is accepted: that takes all checks.
"""


def declare(parser: argparse.ArgumentParser) -> None:
    """Where the board is, what may move, and where the report goes."""
    parser.add_argument("port", metavar="PORT", help="a serial port, mock:, core:, socket://HOST:PORT, ...")
    parser.add_argument("--baud", type=int, default=115200, metavar="RATE", help="rate of the line (default: 115200)")
    parser.add_argument("--dtr", choices=("leave", "assert", "clear"), default="leave", help="what to do with DTR")
    parser.add_argument("--axis", type=int, default=0, metavar="N", help="the axis whose motor runs (default: 0)")
    parser.add_argument("--servo", type=int, default=0, metavar="N", help="the servo that moves (default: 0)")
    parser.add_argument("--duty", type=float, default=DUTY_PERCENT, metavar="PERCENT", help="most duty (default: 30)")
    parser.add_argument("--energise", choices=("yes", "no"), help="do not ask before the outputs are enabled")
    parser.add_argument(
        "--restart", action="store_true", help="check a start too: asks for a press of the reset button"
    )
    parser.add_argument("--only", default="", metavar="NAME", help="only the checks with this in their name")
    parser.add_argument("--list", action="store_true", help="list the checks and their clauses, and open nothing")
    parser.add_argument("--runs", type=Path, default=RUNS, metavar="DIR", help="where the report goes (default: runs)")
    parser.epilog = EPILOG


def carry_out(args: argparse.Namespace) -> int:
    """Accept or not; the exit code says which."""
    from ramprig.accept.examine import accept
    from ramprig.accept.report import write_report
    from ramprig.accept.talk import Talk
    from ramprig.accept.trial import Wish
    from ramprig.mock.schemes import register
    from ramprig.port.open import open_port
    from ramprig.session.signals import StopOnSignals

    if args.list:
        return list_checks()
    if not 0.0 < args.duty <= 100.0:
        raise UsageError(f"--duty {args.duty:g}: more than 0 and at most 100")
    for option, number in (("--axis", args.axis), ("--servo", args.servo)):
        if number < 0:
            raise UsageError(f"{option} {number}: axes and servos are counted from 0")
    register()
    with open_port(args.port, baud=args.baud, dtr=args.dtr) as port:
        talk = Talk(port)
        declined: list[bool] = []
        wish = Wish(
            axis=args.axis,
            servo=args.servo,
            duty=round(args.duty * 100),
            energise=lambda trial: may_energise(trial, args, declined),
            restart=restarter(port) if args.restart else None,
            only=args.only,
        )
        with StopOnSignals(talk):  # to the end of the report, which a second signal must not cost
            verdict = accept(port, wish, tell=tell, talk=talk)
            tell_end(verdict, talk, write_report, runs=args.runs, port=args.port)
    return verdict.exit_code or (NOT_CONFIRMED_CODE if declined else 0)


def may_energise(trial: Trial, args: argparse.Namespace, declined: list[bool]) -> bool:
    """Say what will move, and whether it may: by --energise, or by the word typed; nobody there means no."""
    who = trial.identity
    if args.axis >= max(who.axes, 1):
        raise UsageError(f"--axis {args.axis}: the board has {who.axes} axes, from 0")
    if args.energise == "no":
        return False
    for line in [*cautions(), "", f"board     {who.name} at {trial.talk.port.name}", *what_moves(trial, args)]:
        tell(line)
    if args.energise == "yes":
        return True
    if not on_terminal():
        tell("Nobody is at the terminal to ask, and --energise yes was not given: nothing is switched on.")
        return False
    trial.talk.beat_s = None
    if answered("Type yes and ENTER to switch on; anything else ends here.", trial.talk.listen) == "yes":
        return True
    declined.append(True)
    return False


def what_moves(trial: Trial, args: argparse.Namespace) -> list[str]:
    """What will move, by what the board has."""
    who = trial.identity
    servo = f"servo {args.servo} some degrees" if args.servo < who.servos else ""
    if not who.axes:
        return [f"moves     {servo or 'nothing'}; the board has no axis: no check with a motor is made"]
    most = min(round(args.duty * 100), trial.limits["ceiling_duty", args.axis], who.max_duty)
    servo += ", " if servo else ""
    return [
        f"moves     axis {args.axis} both ways for about a minute at up to {most / 100:g} % duty, {servo}with stops",
        "          at once and trips that are meant; the motor must turn freely",
    ]


def restarter(port: Port) -> Callable[[], bool]:
    """Whatever starts the board anew: a simulated one itself, any other by hand."""
    from ramprig.mock.port import DevicePort
    from ramprig_link.words import Cause

    def simulated() -> bool:
        assert isinstance(port, DevicePort)
        port.device.restart(Cause.EXTERNAL)
        return True

    def by_hand() -> bool:
        if not on_terminal():
            return False
        tell("Press the board's reset button now (or switch its supply off and on). Waiting for it to start ...")
        return True

    return simulated if isinstance(port, DevicePort) else by_hand


def list_checks() -> int:
    """Print every check with its clauses, and the clauses that none can cover."""
    from ramprig.accept.coverage import UNTESTABLE
    from ramprig.accept.examine import all_checks

    for check in all_checks():
        say_surely(f"{check.name:<30} {check.power.value}")
        say_surely(f"    {check.text}")
        say_surely(f"    {' '.join(check.clauses)}")
    say_surely("not testable from outside, or not wholly:")
    for clause, reason in UNTESTABLE.items():
        say_surely(f"    {clause:<10} {reason}")
    return 0


def tell_end(verdict: Verdict, talk: Talk, write: Callable[..., Path], *, runs: Path, port: str) -> None:
    """What failed by clause, what was not tested, where the report is, and last of all the verdict."""
    from ramprig.accept.examine import clauses_not_tested
    from ramprig.accept.report import verdict_sentence

    failed = verdict.failed
    for clause, sentences in failed.items():
        for sentence in sentences[:3]:
            say_surely(f"{clause or 'the bench':<10} {sentence}")
        if len(sentences) > 3:
            say_surely(f"{'':<10} and {len(sentences) - 3} more")
    for clause, reason in clauses_not_tested(verdict.results).items():
        say_surely(f"not tested {clause:<10} {reason}")
    for sentence in verdict.unrestored:
        say_surely(f"LIMITS     {sentence}")
    try:
        say_surely(f"report: {write(verdict, talk, runs=runs, port=port)}")
    except RamprigError as error:
        tell(str(error))
    say_surely(verdict_sentence(verdict))
