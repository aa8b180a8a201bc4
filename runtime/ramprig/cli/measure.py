"""`ramprig measure WHAT`: bring-up check, curves and other measurements on one motor, one servo or the link."""

from __future__ import annotations

import argparse
import json
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from ramprig.cli.asking import answered, cautions, confirmed, need_somebody, on_terminal
from ramprig.cli.progress import Progress
from ramprig.cli.running import RUNS, SIMULATED, mock_url
from ramprig.cli.say import say_surely, tell
from ramprig.errors import RamprigError, StoppedByUser, UsageError

if TYPE_CHECKING:
    from ramprig.bench import Bench, Motor
    from ramprig.measure.lab import Bystander
    from ramprig.measure.running import Measurement, Procedure
    from ramprig.port.base import Port

WHAT = {
    "wiring": "bring-up check: is the motor wired as the bench file says, and if not, what is wrong",
    "curve": "duty to speed, both ways, up and down: dead band, hysteresis, linear range, no-load current",
    "constants": "resistance, motor constant, friction, inertia, inductance: one fit over pulses, levels and run-downs",
    "coastdown": "how the shaft runs down with the bridge off: friction over inertia",
    "backlash": "lost motion at reversal",
    "servo": "positioning, timing and end stops of a servo",
    "link": "round trip, latency grid, clock drift, byte errors with the motor off and on",
    "pwm": "ripple, resolution, audibility and dead-time error against the PWM frequency; reckoned, nothing moves",
}
REPEATS_MAX = 200
"""Of a procedure, whose samples are all kept until its end."""
OF_THE_MODEL = "A rehearsal measures the model that the bench file describes: it says nothing of the real bench."

EPILOG = "\n".join(
    [
        "what:",
        *(f"  {name:<10} {text}" for name, text in WHAT.items()),
        "",
        "Each runs under limits of its own, none looser than the bench file's, and puts those back; but for",
        "coastdown and constants, which let the duty fall to zero at once, with the bridge off. It asks before it",
        "arms, and without a terminal wants --yes. Exits with 1 where the bench is not as it should be, or the data do",
        "not carry a result.",
    ]
)


def declare(parser: argparse.ArgumentParser) -> None:
    """What to measure, on what, and where."""
    parser.add_argument("what", choices=tuple(WHAT), metavar="WHAT", help=", ".join(WHAT))
    parser.add_argument("--bench", type=Path, required=True, metavar="FILE", help="the bench file")
    parser.add_argument("--motor", metavar="NAME", help="the motor, where the bench has several")
    parser.add_argument("--servo", metavar="NAME", help="the servo, where the bench has several")
    parser.add_argument("--port", metavar="URL", help="the port, instead of the bench's")
    parser.add_argument("--rehearse", action="store_true", help="on the mock in virtual time")
    parser.add_argument("--seed", type=int, metavar="N", help="of the rehearsal: the same seed gives the same run")
    parser.add_argument("--fault", action="append", default=[], metavar="NAME[:AXIS][=VALUE]", help="of the rehearsal")
    parser.add_argument("--runs", type=Path, default=RUNS, metavar="DIR", help="where run folders go (default: runs)")
    parser.add_argument("--no-record", action="store_true", help="write no run folder")
    parser.add_argument("--save", action="store_true", help="write the results into the bench file")
    parser.add_argument("--json", action="store_true", help="print the result as JSON")
    parser.add_argument("--yes", action="store_true", help="do not ask before anything moves")
    parser.add_argument("--by-hand", action="store_true", help="wiring: with turns by hand, for which it asks")
    parser.add_argument("--repeats", type=int, metavar="N", help="how often, where it repeats something")
    parser.add_argument("--clamped", action="store_true", help="backlash: the output shaft is clamped fast")
    parser.add_argument("--second", metavar="NAME", help="a motor entry whose encoder sits on the output or the horn")
    parser.add_argument(
        "--scale-error",
        type=float,
        default=0.0,
        metavar="PERCENT",
        help="constants: standard uncertainty of the scales of current and supply (default: 0, taken as exact)",
    )
    declare_pwm(parser)
    parser.add_argument("--creep", action="store_true", help="servo: creep towards the end stops and find them")
    parser.epilog = EPILOG


def declare_pwm(parser: argparse.ArgumentParser) -> None:
    """What the PWM adviser is told of the board."""
    parser.add_argument("--frequency", type=float, metavar="HZ", help="pwm: the frequency that the board has now")
    parser.add_argument("--clock", type=float, default=16e6, metavar="HZ", help="pwm: of the timer (default: 16e6)")
    parser.add_argument("--dead-time", type=float, default=0.0, metavar="NS", help="pwm: dead time of a leg")
    parser.add_argument("--centred", action="store_true", help="pwm: a timer that counts up and down")
    parser.add_argument("--bipolar", action="store_true", help="pwm: both legs switch, locked in antiphase")


def carry_out(args: argparse.Namespace) -> int:
    """Measure; 0 where all is well, 1 where the bench is not as it should be."""
    from ramprig.bench import load_bench
    from ramprig.measure.bench_entry import save, with_part

    bench = load_bench(args.bench)
    if args.what == "pwm":
        return _advise(args, bench)
    if args.save and args.no_record:
        raise UsageError("--save needs the run folder to refer to: leave --no-record out")
    if args.save:  # what cannot be saved is refused before anything moves
        with_part(bench.file_bytes.decode("utf-8"), str(args.bench), {})
    procedure = procedure_of(args, bench)
    procedure.bench(bench)  # what the bench is not fit for is refused before a port is opened
    url = _url(args, bench)
    if not args.yes and not args.rehearse and not url.startswith(SIMULATED):
        ask(procedure, bench, url)
    done = _measure(args, procedure, bench, url)
    show(done, as_json=args.json)
    if args.rehearse:
        tell(OF_THE_MODEL)
    if args.save:
        if done.findings.good:
            save(args.bench, replace(done, board=f"{done.board}, rehearsed") if args.rehearse else done)
            tell(f"written into {args.bench}")
        else:
            tell("nothing was written into the bench file: the bench is not as it should be")
    return 0 if done.findings.good else 1


def procedure_of(args: argparse.Namespace, bench: Bench) -> Procedure:
    """The procedure that is asked for. Raises UsageError for what it cannot be made from."""
    if args.repeats is not None and not 1 <= args.repeats <= REPEATS_MAX:
        raise UsageError(f"--repeats {args.repeats}: 1 to {REPEATS_MAX}")
    repeats = {} if args.repeats is None else {"repeats": args.repeats}
    match args.what:
        case "wiring":
            from ramprig.measure.procedures.wiring import Wiring

            return Wiring(motor=_motor(args, bench), by_hand=args.by_hand)
        case "curve":
            from ramprig.measure.procedures.curve import Curve

            return Curve(motor=_motor(args, bench), **repeats)
        case "constants":
            from ramprig.measure.procedures.constants import Constants

            return Constants(motor=_motor(args, bench), scale_u=args.scale_error / 100.0, **repeats)
        case "coastdown":
            from ramprig.measure.procedures.coastdown import CoastDown

            return CoastDown(motor=_motor(args, bench), **repeats)
        case "backlash":
            from ramprig.measure.procedures.backlash import Backlash

            return Backlash(motor=_motor(args, bench), clamped=args.clamped, second=args.second, **repeats)
        case "servo":
            from ramprig.measure.procedures.servo import ServoCheck

            servo = _one(args.servo, [servo.name for servo in bench.servos], "servo")
            return ServoCheck(servo=servo, second=args.second, creep=args.creep, **repeats)
        case _:
            from ramprig.measure.procedures.linkcheck import LinkCheck

            motor = args.motor or (bench.motors[0].name if len(bench.motors) == 1 else None)
            return LinkCheck(motor=None if motor is None else bench.motor(motor).name)


def _advise(args: argparse.Namespace, bench: Bench) -> int:
    """The PWM adviser: no port, no run folder; its plot goes into the folder of run folders."""
    from ramprig.measure.procedures.pwm import PwmWish, advise, write

    if args.save:
        raise UsageError("pwm measures nothing that could be saved")
    wish = PwmWish(
        motor=_motor(args, bench),
        frequency_hz=args.frequency,
        clock_hz=args.clock,
        dead_time_s=args.dead_time / 1e9,
        centred=args.centred,
        bipolar=args.bipolar,
    )
    findings = advise(bench, wish)
    if args.json:
        say_surely(json.dumps(findings.to_json(), ensure_ascii=False, allow_nan=False, indent=2), as_is=True)
    else:
        for line in findings.text():
            say_surely(line)
    if not args.no_record:
        for path in write(findings, args.runs, tell=tell):
            tell(f"written: {path}")
    return 0


def _motor(args: argparse.Namespace, bench: Bench) -> str:
    name = _one(args.motor, [motor.name for motor in bench.motors], "motor")
    return bench.motor(name).name


def _one(said: str | None, names: list[str], what: str) -> str:
    """The name that was said, else the only one there is."""
    if said is not None:
        if said not in names:
            raise UsageError(f"--{what} {said}: the bench has {', '.join(names) or f'no {what}'}")
        return said
    if len(names) != 1:
        has = f"has {', '.join(names)}: say --{what} NAME" if names else f"has no {what}"
        raise UsageError(f"the bench {has}")
    return names[0]


def _url(args: argparse.Namespace, bench: Bench) -> str:
    if args.rehearse:
        if args.port is not None and not args.port.startswith(SIMULATED):
            raise UsageError(f"--rehearse moves nothing real, and --port {args.port} may: leave one of them out")
        return mock_url(args.port or "mock:", args.bench, virtual=True, seed=args.seed, faults=args.fault)
    if args.fault or args.seed is not None:
        raise UsageError("--fault and --seed belong to --rehearse")
    url: str = args.port or bench.port.url
    return mock_url(url, args.bench) if url.startswith(SIMULATED) else url


def ask(procedure: Procedure, bench: Bench, url: str) -> None:
    """Show the cautions and what will move, and wait for the word `yes`. Raises StoppedByUser for any other, UsageError
    where nobody is at a terminal to be asked; does nothing where nothing moves."""
    moves = procedure.moves(bench)
    if not moves:
        return
    need_somebody(moves=moves)
    for line in [*cautions(), "", f"port      {url}", moves]:
        tell(line)
    if not confirmed("Type yes and ENTER to arm and measure; anything else leaves everything off."):
        raise StoppedByUser("Not measured: it was not confirmed. Nothing has moved.")


def _measure(args: argparse.Namespace, procedure: Procedure, bench: Bench, url: str) -> Measurement:
    from ramprig.measure.running import MeasureWish, measure
    from ramprig.mock.schemes import register
    from ramprig.port.open import open_port
    from ramprig.session.signals import StopOnSignals

    register()
    port = open_port(url, baud=bench.port.baud, dtr=bench.port.dtr)
    wish = MeasureWish(
        runs=None if args.no_record else args.runs,
        settings={"port": url, "rehearsal": args.rehearse, "what": args.what},
        seed=(bench.mock.seed if args.seed is None else args.seed) if args.rehearse else None,
        virtual=args.rehearse,
    )
    progress = Progress()
    try:
        return measure(
            procedure,
            bench,
            port,
            wish,
            bystander=_bystander(port, rehearse=args.rehearse),
            tell=progress.line,
            progress=lambda text: progress.show(lambda: text),
            guard=StopOnSignals,
        )
    except RamprigError:
        raise
    finally:
        progress.close()


def _bystander(port: Port, *, rehearse: bool) -> Bystander | None:
    """Who can be asked: the mock's own bystander, or the person at the terminal."""
    from ramprig.mock.port import MockPort

    if isinstance(port, MockPort):
        from ramprig.measure.rehearsing import SimulatedBystander

        return SimulatedBystander(port.device)
    return Person() if on_terminal() and not rehearse else None


class Person:
    """The person at the terminal, asked while time goes on."""

    def turn(self, motor: Motor, turns: int, pump: Callable[[float], None]) -> bool:
        """Ask for turns by hand; False where that cannot be done."""
        answer = answered(
            f"The outputs are off. Turn the output shaft of {motor.name} by hand exactly {turns} turns the way a "
            "positive duty is to turn it, then press ENTER; type no and ENTER where it cannot be turned.",
            pump,
        )
        return not answer.startswith("n")

    def turned_forwards(self, motor: Motor, duty: int, pump: Callable[[float], None]) -> bool | None:
        """Ask which way the shaft turned; None where the person does not know."""
        answer = answered(
            f"At the first pulses, did {motor.name} turn the way a positive duty is to turn it? yes, no, or ENTER "
            "where you did not see it.",
            pump,
        )
        return {"y": True, "n": False}.get(answer[:1])


def show(done: Measurement, *, as_json: bool) -> None:
    """The result on standard output, where it is written down on standard error."""
    if as_json:
        say_surely(json.dumps(done.findings.to_json(), ensure_ascii=False, allow_nan=False, indent=2), as_is=True)
    else:
        for line in done.findings.text():
            say_surely(line)
    if done.folder is not None:
        tell(f"run folder: {done.folder}")
