"""The one way to run a sequence from the command line, on a bench or, for a rehearsal, on the mock in virtual time."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING
from urllib.parse import urlencode

from ramprig.cli.progress import Progress
from ramprig.cli.say import say_surely, tell, width_of
from ramprig.errors import RamprigError

if TYPE_CHECKING:
    from ramprig.bench import Bench
    from ramprig.cli.files import Pair
    from ramprig.endure.doorsheet import DoorSheet
    from ramprig.port.base import Port
    from ramprig.sequence.executive import Progress as HowFar
    from ramprig.sequence.outcome import Outcome
    from ramprig.sequence.running import RunWish
    from ramprig.session import Session

FAILURES_SHOWN = 20
"""Failed expectations printed at the end; all are in the run folder."""
RUNS = Path("runs")
SIMULATED = ("mock:", "core:")
"""Ports that are made from the bench file, where they do not name one."""

NOT_PROVED = (
    "A rehearsal shows that the sequence does what you mean, against a model with the bench file's figures. It does "
    "not prove wiring, directions, friction, heat, the supply, the link, or that the limits suit the motor."
)

NOT_OFF = (
    "NOT CONFIRMED that the outputs are off. The board stops by itself once its lease has run out; if anything still "
    "moves after that, cut the power."
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Way:
    """Where and how to run: on `url` of the bench's or the user's choice; `runs` None writes nothing down.

    `latest_end_unix_s` is when the run must be over; `settings` go on record. `sheet` is put into the run folder.
    `is_plan_told` tells that the user has seen what the file asks for, so that it need not be said again.
    """

    url: str
    virtual: bool
    runs: Path | None
    title: str = ""
    seed: int | None = None
    latest_end_unix_s: float | None = None
    settings: Mapping[str, object] = field(default_factory=dict)
    sheet: DoorSheet | None = None
    is_plan_told: bool = False


def add_run_arguments(parser: argparse.ArgumentParser) -> None:
    """What runs and rehearsals have in common."""
    from ramprig.cli.check import add_reading_arguments

    parser.add_argument("file", type=Path, metavar="FILE", help="the sequence")
    add_reading_arguments(parser)
    parser.add_argument("--runs", type=Path, default=RUNS, metavar="DIR", help="where run folders go (default: runs)")
    parser.add_argument("--title", default="", metavar="TEXT", help="name of the run, instead of the sequence's")


def mock_url(
    url: str, bench_path: Path, *, virtual: bool = False, seed: int | None = None, faults: Sequence[str] = ()
) -> str:
    """The mock that `url` asks for, made from the bench file where it does not say which."""
    options: list[tuple[str, str]] = []
    if virtual:
        options.append(("pace", "virtual"))
    if "bench=" not in url:
        options.append(("bench", str(bench_path)))
    if seed is not None:
        options.append(("seed", str(seed)))
    options += [("fault", fault) for fault in faults]
    joint = "&" if "?" in url else "?"
    return url + joint + urlencode(options, safe="/:") if options else url


def open_port_for(way: Way, bench: Bench) -> Port:
    """The port of a run. Raises UsageError, PortNotFound, PortUnavailable."""
    from ramprig.mock.schemes import register
    from ramprig.port.open import open_port

    register()
    return open_port(way.url, baud=bench.port.baud, dtr=bench.port.dtr)


def carry_out_run(pair: Pair, way: Way) -> int:
    """Run, with progress and a sentence at the end; returns the exit code. Raises what `run_sequence` raises."""
    from ramprig.sequence.running import RunWish

    wish = RunWish(
        sequence=pair.sequence,
        bench=pair.bench,
        runs=way.runs,
        title=way.title,
        settings={"port": way.url, "rehearsal": way.virtual, **way.settings},
        seed=way.seed,
        virtual=way.virtual,
        latest_end_unix_s=way.latest_end_unix_s,
    )
    return carry_out_wish(wish, way)


def carry_out_wish(wish: RunWish, way: Way) -> int:
    """As `carry_out_run`, for a run that is wished for in full, such as one that is gone on with.

    On a bench it goes on by itself after an interruption where the sequence says so; a rehearsal does not.
    """
    import time

    from ramprig.endure.live import watching
    from ramprig.endure.resume import Surroundings, run_enduring
    from ramprig.report.explain import WIDTH, likely_lines
    from ramprig.sequence.compile import compile_plan
    from ramprig.sequence.report import wear_lines
    from ramprig.sequence.running import run_sequence
    from ramprig.session.signals import StopOnSignals, interrupted_by_signals

    sessions: list[Session] = []
    watch: list[StopOnSignals] = []
    progress = Progress()
    wish = replace(wish, watching=watching(progress.line))
    so_far = None if wish.carry_on is None else wish.carry_on.so_far.blocks
    if not way.is_plan_told:
        for line in wear_lines(compile_plan(wish.sequence, wish.bench, so_far=so_far)):
            progress.line(line)

    def guard(session: Session) -> StopOnSignals:
        sessions.append(session)
        watch.append(StopOnSignals(session))
        return watch[-1]

    def began(folder: Path) -> None:
        progress.line(f"recording to {folder}")
        if way.sheet is not None and len(sessions) == 1:  # later parts of the run are on the first one's sheet
            keep_sheet(way.sheet, folder)

    around = Surroundings(
        open_port=lambda: open_port_for(way, wish.bench),
        pause=time.sleep,
        wall=time.time,
        now=time.monotonic,
        tell=progress.line,
        progress=lambda far: progress.show(lambda: how_far(far)),
        guard=guard,
        asked_by=lambda: ", ".join(name for signals in watch for name in signals.received),
        explain=lambda folder: likely_lines(folder, width=width_of(sys.stderr, most=WIDTH)),
        began=None if way.virtual else began,
    )
    try:
        with interrupted_by_signals():  # while a port is opened, or a board is waited for
            if way.virtual:
                result = run_sequence(
                    wish,
                    around.open_port(),
                    progress=around.progress,
                    guard=guard,
                    asked_by=around.asked_by,
                    began=around.began,
                )
            else:
                result = run_enduring(wish, around)
    except RamprigError:
        raise
    except Exception:  # a bug: what became of the motors comes first, the bug itself is told by `main`
        progress.close()
        for session in sessions[-1:]:  # those of earlier parts of the run are over and told of
            tell_stop(session)
        raise
    finally:
        progress.close()
    tell_end(result.outcome, result.folder, rehearsal=way.virtual)
    return result.outcome.exit_code


SHEETS_MAX = 1000


def keep_sheet(sheet: DoorSheet, folder: Path) -> None:
    """Put the door sheet into the run folder as text and page; one that cannot be written was shown all the same."""
    number = next(number for number in range(1, SHEETS_MAX) if not (folder / _sheet_name(number, "html")).exists())
    page = folder / _sheet_name(number, "html")
    try:
        (folder / _sheet_name(number, "txt")).write_text(sheet.text(), "utf-8")
        page.write_text(sheet.html(), "utf-8")
    except OSError as error:
        tell(f"the door sheet cannot be written to {page}: {error.strerror}")
        return
    tell(f"door sheet to print: {page}")


def _sheet_name(number: int, suffix: str) -> str:
    """Each part of a run that is started unattended has a sheet of its own."""
    return f"door-sheet.{suffix}" if number == 1 else f"door-sheet-{number}.{suffix}"


def tell_stop(session: Session) -> None:
    """What is known of the stop that a bug led to."""
    report = session.last_stop
    verdict = NOT_OFF if report is None else f"The motors were stopped first: {report.verdict}."
    tell(verdict)


def how_far(far: HowFar) -> str:
    """Progress in one line; what a narrow terminal may cut off comes last."""
    from ramprig.quantity import format_duration

    parts = [f"{far.fraction:4.0%}", f"{format_duration(round(far.left_s))} left"]
    if far.passes:
        parts.append(f"pass {far.passes}")
    if far.cycle:
        parts.append(f"cycle {far.cycle}")
    elif far.cycles_done:
        parts.append("1 cycle done" if far.cycles_done == 1 else f"{far.cycles_done} cycles done")
    if far.failed:
        parts.append(f"{far.failed} not as expected")
    return "  ".join([*parts, far.doing])


def tell_end(outcome: Outcome, folder: Path | None, *, rehearsal: bool) -> None:
    """What failed, where the files are, and last of all how it ended and why."""
    for failure in outcome.failures[:FAILURES_SHOWN]:
        say_surely(f"not as expected: {failure.sentence} [{failure.place}]")
    more = outcome.failed - min(len(outcome.failures), FAILURES_SHOWN)
    if more > 0:
        say_surely(f"and {more} more, in the run folder")
    if rehearsal:
        tell(NOT_PROVED)
    if folder is not None:
        from ramprig.report.explain import WIDTH, likely_lines

        for line in likely_lines(folder, width=width_of(sys.stdout, most=WIDTH)):
            say_surely(line)
        say_surely(f"run folder: {folder}")
    if not outcome.stop_confirmed:
        say_surely(NOT_OFF)
    say_surely(str(outcome))
