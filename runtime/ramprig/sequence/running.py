"""A sequence on a port from begin to end: opens the device, makes the plan and the run folder, runs, writes the end."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from contextlib import AbstractContextManager, contextmanager, nullcontext
from dataclasses import dataclass, field, replace
from pathlib import Path

from ramprig.bench import Bench
from ramprig.errors import RecordError
from ramprig.port.base import Port
from ramprig.port.clock import Clock, VirtualClock
from ramprig.record.events import Json, jsonable, rfc3339
from ramprig.record.folder import InputFile, RunDescription, RunFolder
from ramprig.record.keeping import Keeping
from ramprig.record.manifest import Anchor, RunEnd
from ramprig.record.recorder import Recorder
from ramprig.record.space import check_space
from ramprig.record.writer import Trouble, TroubleKind
from ramprig.session.blocks import Block
from ramprig.session.limits import LimitKey
from ramprig.session.opening import Wanted
from ramprig.session.readings import Identity
from ramprig.session.session import Session

from .broken import broken_by
from .carry_on import CarryOn, check_same, end_latch, told_breaks
from .columns import bench_columns
from .compile import compile_plan
from .cycle_run import CycleBook, RunSoFar
from .cycle_watch import CycleWatch, Watched, Watching
from .ending import BY_USER, Bounds, run_plan
from .executive import Progress
from .listeners import Listeners
from .outcome import Outcome, Tally, Verdict
from .plan import Plan
from .reading import Sequence
from .rig import Rig
from .wear_limits import WearRules, rules_of

DISK_STALL_S = 3.0
"""The motors are stopped when the disk has made no progress for so long."""

STALL_SURE_S = 0.1
"""And none for so long after that was seen: a host that was itself held up (stopped, asleep) finds that time in it."""


@dataclass(frozen=True, slots=True, kw_only=True)
class RunResult:
    """What is left of a run: its outcome and its folder, None where none was wanted."""

    outcome: Outcome
    folder: Path | None


@dataclass(frozen=True, slots=True, kw_only=True)
class RunWish:
    """What to run and how to write it down.

    `runs` is the folder for run folders, None for none. `settings` are the values of the command line, for the record.
    `virtual` is for a port in virtual time: the log is written in the caller's thread, and the same input gives the
    same bytes; `durable` has it synced all the same. `latest_end_unix_s` is when the run must be over. `carry_on` makes
    it the next part of a run that was interrupted. `watching` makes who looks on at the cycles and judges their wear;
    without it the limits to wear in the file are not in force.
    """

    sequence: Sequence
    bench: Bench
    runs: Path | None = None
    title: str = ""
    settings: Mapping[str, object] | None = None
    seed: int | None = None
    virtual: bool = False
    short_id: str | None = None
    durable: bool | None = None
    latest_end_unix_s: float | None = None
    carry_on: CarryOn | None = None
    watching: Watching | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Recorded:
    """How something on a bench is written down: where, under which name, with which inputs beside the bench file."""

    bench: Bench
    runs: Path
    name: str
    port_name: str
    settings: Mapping[str, object] = field(default_factory=dict)
    inputs: tuple[InputFile, ...] = ()
    virtual: bool = False
    short_id: str | None = None
    durable: bool | None = None
    carry_on: CarryOn | None = None
    keeping: Keeping = field(default_factory=Keeping)


def wanted_of(bench: Bench) -> Wanted:
    """What a bench asks of the device that answers."""

    def limits(identity: Identity) -> dict[LimitKey, int]:
        return bench.limits(
            tick_us=identity.tick_us, axes=identity.axes, servos=identity.servos, max_duty=identity.max_duty
        )

    return Wanted(
        board=bench.board.name, serial=bench.board.serial, axes=bench.axes, servos=bench.channels, limits=limits
    )


def run_sequence(
    wish: RunWish,
    port: Port,
    *,
    progress: Callable[[Progress], None] | None = None,
    guard: Callable[[Session], AbstractContextManager[object]] | None = None,
    asked_by: Callable[[], str] | None = None,
    began: Callable[[Path], None] | None = None,
) -> RunResult:
    """Run a sequence on a port, which is closed at the end; tells how it ended.

    `guard` is entered while the device is open, such as `StopOnSignals`; `asked_by` tells who asked for a stop, where
    one was asked for; `began` is told of the run folder before anything moves. Raises what opening the device raises
    (LinkError and its kin), `FileError` where the plan does not fit the board, RecordError where the run folder cannot
    be made; in each case nothing has moved.
    """
    listeners = Listeners()
    try:
        compile_plan(wish.sequence, wish.bench)  # what cannot be carried out is refused before a device is touched
    except BaseException:
        port.close()
        raise
    session = Session.open(
        port,
        wanted=wanted_of(wish.bench),
        seed=wish.seed,
        on_block=listeners.on_block,
        on_event=listeners.on_event,
    )
    with session, guard(session) if guard is not None else nullcontext():
        return run_on_session(
            wish,
            session,
            clock=port.clock,
            port_name=port.name,
            listeners=listeners,
            progress=progress,
            asked_by=asked_by,
            began=began,
        )


def run_on_session(
    wish: RunWish,
    session: Session,
    *,
    clock: Clock,
    port_name: str,
    listeners: Listeners,
    progress: Callable[[Progress], None] | None = None,
    asked_by: Callable[[], str] | None = None,
    began: Callable[[Path], None] | None = None,
) -> RunResult:
    """Run a sequence on a session that is open with this bench's limits and disarmed, such as a shell's; it stays open.

    Raises as above.
    """
    identity = session.identity
    rig = Rig.of(wish.bench, tick_us=identity.tick_us)
    carry_on = wish.carry_on
    so_far = RunSoFar() if carry_on is None else carry_on.so_far
    plan = compile_plan(wish.sequence, wish.bench, tick_us=identity.tick_us, so_far=so_far.blocks)
    bounds = _bounds(wish, clock)
    watch = _watch(wish, plan, so_far.part)
    runs = wish.runs if carry_on is None else carry_on.folder.parent
    with _looking_on(watch, listeners):
        if runs is None:
            book = CycleBook(so_far, tick_s=plan.tick_us / 1e6, write=_nowhere, pending=lambda: 0, watch=watch)
            outcome = run_plan(
                session, plan, rig, clock=clock, listeners=listeners, progress=progress, book=book, bounds=bounds
            )
            return RunResult(outcome=_explained(outcome, [], asked_by), folder=None)
        if carry_on is not None:
            check_same(session, carry_on)
            end_latch(session, carry_on, rig)
        troubles: list[Trouble] = []
        what = _recorded(wish, runs, port_name, plan)
        with recording(what, session, clock=clock, listeners=listeners, troubles=troubles) as recorder:
            if began is not None:
                began(recorder.folder.path)
            outcome = run_plan(
                session,
                plan,
                rig,
                clock=clock,
                listeners=listeners,
                keeper=recorder,
                progress=progress,
                book=CycleBook(
                    so_far,
                    tick_s=plan.tick_us / 1e6,
                    write=recorder.on_cycle,
                    pending=recorder.cycles_pending,
                    watch=watch,
                ),
                tally=Tally(held=so_far.held, failed=so_far.failed, first=so_far.first_failure),
                bounds=bounds,
            )
            outcome = _explained(outcome, troubles, asked_by)
            if carry_on is not None:
                outcome = replace(outcome, sentence=outcome.sentence + told_breaks(carry_on))
            folder = recorder.finish(_end_of(session, plan, outcome, clock))
    return RunResult(outcome=outcome, folder=folder)


def _nowhere(event: object) -> None:
    """The count of cycles of a run that is not written down."""


def _watch(wish: RunWish, plan: Plan, part: int) -> CycleWatch | None:
    """Who looks on at the cycles; nobody where there are none, or nobody is to."""
    if wish.watching is None or not plan.counts_cycles:
        return None
    return wish.watching(
        Watched(
            rules=_rules(wish.carry_on, plan),
            columns=bench_columns(wish.bench, tick_us=plan.tick_us),
            tick_us=plan.tick_us,
            part=part,
            lines=() if wish.carry_on is None else wish.carry_on.lines,
        )
    )


def _rules(carry_on: CarryOn | None, plan: Plan) -> tuple[WearRules, ...]:
    """The limits to wear: those that the run began with, as its record has them, else those of the plan."""
    settings = {} if carry_on is None else carry_on.manifest.get("settings") or {}
    return rules_of(settings["wear"]) if "wear" in settings else plan.wear


@contextmanager
def _looking_on(watch: CycleWatch | None, listeners: Listeners) -> Iterator[None]:
    """Have it see the samples; before the run's own eye, so that it has them when a cycle is over."""
    if watch is None:
        yield
        return
    listeners.add(on_block=watch.on_block)
    try:
        yield
    finally:
        listeners.remove(on_block=watch.on_block)


def _bounds(wish: RunWish, clock: Clock) -> Bounds | None:
    """When the run must be over, on the port's clock."""
    if wish.latest_end_unix_s is None:
        return None
    at = rfc3339(wish.latest_end_unix_s, decimals=0)
    text = f"ended in order at its latest end, {at}, before all steps were carried out"
    return Bounds(until_s=clock.now() + wish.latest_end_unix_s - clock.wall(), text=text)


def _explained(outcome: Outcome, troubles: list[Trouble], asked_by: Callable[[], str] | None) -> Outcome:
    """The outcome with who or what asked for a stop: a disk in trouble asks for one too."""
    name = asked_by() if asked_by is not None else ""
    by = f"{BY_USER} ({name})" if name else BY_USER
    if outcome.verdict is Verdict.NOT_RECORDED:  # which says why itself
        by = "stopped" if troubles and not name else by
        return replace(outcome, sentence=outcome.sentence.replace(BY_USER, by, 1))
    if outcome.verdict is not Verdict.STOPPED:
        return outcome
    if not troubles:
        return replace(outcome, sentence=outcome.sentence.replace(BY_USER, by, 1))
    why = f"stopped because {troubles[0].text}"
    by_it = BY_USER in outcome.sentence
    sentence = outcome.sentence.replace(BY_USER, why, 1) if by_it else f"{why}; {outcome.sentence}"
    return replace(outcome, verdict=Verdict.NOT_RECORDED, sentence=sentence)


class _Keeping:
    """Hands blocks to the recorder until that fails, and is told of once: what comes during the stop is let go.

    A disk that makes no progress must not keep the motors driven: after DISK_STALL_S they are stopped, and as nothing
    is pumped after the error, no lease is renewed either.
    """

    def __init__(self, recorder: Recorder, clock: Clock) -> None:
        self._recorder = recorder
        self._clock = clock
        self._stalled_since_s: float | None = None
        self._failed = False

    def on_block(self, block: Block) -> None:
        """Hand it on. Raises RecordError, once, with the motors told to stop."""
        if self._failed:
            return
        try:
            if self._is_stalled():
                stalled = Trouble(TroubleKind.DISK_STALLED, f"the disk has made no progress for {DISK_STALL_S:g} s")
                self._recorder.tell(stalled)
                raise RecordError(stalled.text)
            self._recorder.on_block(block)
        except RecordError:
            self._failed = True
            raise

    def _is_stalled(self) -> bool:
        if self._recorder.liveness_s() <= DISK_STALL_S:
            self._stalled_since_s = None
            return False
        now_s = self._clock.now()
        if self._stalled_since_s is None:
            self._stalled_since_s = now_s
        return now_s - self._stalled_since_s >= STALL_SURE_S


@contextmanager
def recording(
    what: Recorded, session: Session, *, clock: Clock, listeners: Listeners, troubles: list[Trouble]
) -> Iterator[Recorder]:
    """A recorder that listens to the session; a run that breaks off is written down as far as it came.

    A trouble that demands a stop is put into `troubles` after the stop was sent. What broke the run off is raised, also
    where its end could not be written: that is added to it as a note.
    """

    def on_trouble(trouble: Trouble) -> None:
        if trouble.kind.demands_stop:
            session.panic(1)
            troubles.append(trouble)

    recorder = _recorder(what, session, clock, on_trouble)
    keeping = _Keeping(recorder, clock)
    listeners.add(on_block=keeping.on_block, on_event=recorder.on_event)
    try:
        yield recorder
    except BaseException as error:
        try:
            recorder.finish(broken_by(error))
        except RecordError as unwritten:
            error.add_note(str(unwritten))
        raise
    finally:
        listeners.remove(on_block=keeping.on_block, on_event=recorder.on_event)


def _recorder(what: Recorded, session: Session, clock: Clock, on_trouble: Callable[[Trouble], None]) -> Recorder:
    return Recorder(
        _folder(what, session, clock),
        bench_columns(what.bench, tick_us=session.identity.tick_us),
        start=anchor(session, clock),
        tick_us=session.identity.tick_us,
        clock=clock,
        on_trouble=on_trouble,
        threaded=not (what.virtual or isinstance(clock, VirtualClock)),  # a virtual clock does not wait for a thread
        durable=not what.virtual if what.durable is None else what.durable,
        limits_digest=session.limits.digest,
        keeping=what.keeping,
    )


def _folder(what: Recorded, session: Session, clock: Clock) -> RunFolder:
    """A new run folder, or the one of the run that is to be gone on with."""
    check_space(what.runs if what.carry_on is None else what.carry_on.folder)
    identity = jsonable(session.identity)
    assert isinstance(identity, dict)  # a dataclass is written as an object
    carry_on = what.carry_on
    if carry_on is not None:
        return RunFolder.reopen(
            carry_on.folder, dict(carry_on.manifest), carry_on.interruption, port=what.port_name, identity=identity
        )
    bench = what.bench
    description = RunDescription(
        name=what.name,
        port=what.port_name,
        identity=identity,
        settings=what.settings,
        inputs=[InputFile("bench", bench.file, bench.file_bytes), *what.inputs],
    )
    return RunFolder.create(what.runs, description, started_unix_s=clock.wall(), short_id=what.short_id)


def _recorded(wish: RunWish, runs: Path, port_name: str, plan: Plan) -> Recorded:
    """How a run of a sequence is written down."""
    sequence = wish.sequence
    settings: dict[str, object] = {"values": dict(sequence.values), **(wish.settings or {})}
    if plan.counts_cycles and wish.watching is not None:
        settings["wear"] = list(plan.wear)
    if wish.latest_end_unix_s is not None:
        settings["latest_end"] = rfc3339(wish.latest_end_unix_s)
    roles = ["sequence", *["include"] * (len(sequence.files) - 1)]
    return Recorded(
        bench=wish.bench,
        runs=runs,
        name=wish.title or sequence.name,
        port_name=port_name,
        settings=settings,
        inputs=tuple(InputFile(role, file.file, file.data) for role, file in zip(roles, sequence.files, strict=True)),
        virtual=wish.virtual,
        short_id=wish.short_id,
        durable=wish.durable,
        carry_on=wish.carry_on,
        keeping=replace(sequence.keeping, cycle_ranges=plan.counts_cycles),
    )


def anchor(session: Session, clock: Clock) -> Anchor:
    """This instant on all clocks."""
    return Anchor(tick=session.tick_now(), host_s=clock.now(), unix_s=clock.wall())


def _end_of(session: Session, plan: Plan, outcome: Outcome, clock: Clock) -> RunEnd:
    """The end of the run for `run.json`."""
    known = session.valid and outcome.verdict is not Verdict.LINK_LOST
    fit = session.clock_fit if known else None
    account = session.accounting
    health = jsonable(session.health)
    results: dict[str, Json] = {
        "exit_code": outcome.exit_code,
        "carried_out": outcome.carried_out,
        "steps_from_tick": outcome.start_tick,
        "place": None if outcome.place is None else str(outcome.place),
        "expectations_held": outcome.held,
        "expectations_failed": outcome.failed,
        "failures": [jsonable(failure) for failure in outcome.failures],
        "passes": outcome.passes,
        "elapsed_s": round(outcome.elapsed_s, 3),
        "stop_confirmed": outcome.stop_confirmed,
        "orders_overdue": outcome.overdue,
        "planned_s": round(plan.totals.least * plan.tick_us / 1e6, 3),
        "remarks": list(plan.remarks),
        "trip": outcome.trip,
        "device_restarted": outcome.restarted,
        "host_slept_s": list(outcome.slept_s),
        "host_away_s": outcome.away_s,
    }
    if outcome.cycles is not None:
        results["cycles"] = jsonable(outcome.cycles)
    return RunEnd(
        verdict=outcome.verdict.word,
        stop_reason=outcome.sentence,
        end=None if fit is None else anchor(session, clock),  # without a fit the board would have to be asked
        drift_ppm=None if fit is None else fit.drift_ppm,
        accounts=() if account is None else (account,),
        link=health if isinstance(health, dict) else {},
        results=results,
    )
