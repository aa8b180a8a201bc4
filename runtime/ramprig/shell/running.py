"""Sequence files from inside the shell: checked, or run on the session that is open, with progress in the status."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from ramprig.bench import Bench
from ramprig.endure.live import watching
from ramprig.port.clock import Clock, VirtualClock
from ramprig.quantity import format_duration
from ramprig.sequence.compile import compile_plan
from ramprig.sequence.executive import Progress
from ramprig.sequence.listeners import Listeners
from ramprig.sequence.outcome import Outcome
from ramprig.sequence.reading import read_sequence
from ramprig.sequence.report import report_lines
from ramprig.sequence.running import RunWish, run_on_session
from ramprig.session import Session

Say = Callable[[str], None]


@dataclass(frozen=True, slots=True, kw_only=True)
class Stage:
    """Where a sequence runs: bench, session, its listeners and clock, the folder for run folders."""

    bench: Bench
    session: Session
    listeners: Listeners
    clock: Clock
    port_name: str
    runs: Path


def check_file(file: str, bench: Bench, tick_us: int, say: Say) -> None:
    """Say what a sequence would do on this bench; raises FileError where it cannot be carried out."""
    plan = compile_plan(read_sequence(file), bench, tick_us=tick_us)
    for line in report_lines(plan, bench):
        say(line)


def run_file(file: str, stage: Stage, *, say: Say, progress: Callable[[Progress], None]) -> Outcome:
    """Run a sequence on a disarmed session; says how it ended, and where the run folder is.

    Raises FileError, RecordError and what the session raises before anything has moved.
    """
    sequence = read_sequence(file)
    wish = RunWish(
        sequence=sequence,
        bench=stage.bench,
        runs=stage.runs,
        virtual=isinstance(stage.clock, VirtualClock),
        watching=watching(say),
    )
    result = run_on_session(
        wish,
        stage.session,
        clock=stage.clock,
        port_name=stage.port_name,
        listeners=stage.listeners,
        progress=progress,
    )
    outcome = result.outcome
    if result.folder is not None:
        from ramprig.report.explain import likely_lines

        for line in likely_lines(result.folder):
            say(line)
    say(str(outcome))
    for failure in outcome.failures:
        say(f"  failed: {failure.sentence} [{failure.place}]")
    if outcome.held or outcome.failed:
        say(f"expectations: {outcome.held} held, {outcome.failed} failed")
    if result.folder is not None:
        say(f"the run is in {result.folder}")
    if not outcome.stop_confirmed:
        say("*** NOT CONFIRMED: cut the power ***")
    return outcome


def progress_text(progress: Progress) -> str:
    """Such as `ramp vent to 60 %, 45 %, 12 s left`."""
    left = format_duration(round(progress.left_s, 1))
    return f"{progress.doing}, {progress.fraction * 100:.0f} %, {left} left"
