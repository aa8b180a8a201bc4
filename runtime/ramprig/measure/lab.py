"""A procedure's way to the device: runs its stages one after the other, and hands back what was sampled in each."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Protocol

from ramprig.bench import Bench, Motor
from ramprig.errors import LinkLost, StoppedByUser
from ramprig.port.clock import Clock
from ramprig.record.recorder import Recorder
from ramprig.sequence.compile import compile_plan
from ramprig.sequence.ending import run_plan
from ramprig.sequence.executive import Progress
from ramprig.sequence.happened import Marked
from ramprig.sequence.listeners import Listeners
from ramprig.sequence.outcome import Outcome, Verdict
from ramprig.sequence.reading import sequence_of_text
from ramprig.sequence.rig import Rig
from ramprig.session.blocks import Block
from ramprig.session.events import Event, Restarted, Tripped
from ramprig.session.gaps import Accounting
from ramprig.session.session import Session

from .refusal import NotMeasurable
from .script import Script
from .trace import Trace, columns_of

BLOCKS_MAX = 200_000
"""Most sample blocks kept of one stage; a stage of ten minutes at 1 kHz has about 20,000."""


class Bystander(Protocol):
    """Whoever stands at the bench and can be asked; None means that nobody can."""

    def turn(self, motor: Motor, turns: int, pump: Callable[[float], None]) -> bool:
        """Have the output shaft turned by hand, forwards; `pump` must be called to let time pass. False: not done."""
        ...

    def turned_forwards(self, motor: Motor, duty: int, pump: Callable[[float], None]) -> bool | None:
        """Whether the shaft turned the way it is meant to at a pulse of this duty; None where that is not known."""
        ...


class Nobody:
    """A bystander who is not there."""

    def turn(self, motor: Motor, turns: int, pump: Callable[[float], None]) -> bool:
        """Nobody turns it."""
        return False

    def turned_forwards(self, motor: Motor, duty: int, pump: Callable[[float], None]) -> bool | None:
        """Nobody saw it."""
        return None


class _Listening:
    """Gathers what comes while one stage runs; it is the keeper of that stage's run, too."""

    def __init__(self, recorder: Recorder | None) -> None:
        self._recorder = recorder
        self.blocks: list[Block] = []
        self.marks: list[tuple[int, str]] = []
        self.trip: Tripped | None = None
        self.restarted: Restarted | None = None

    def on_block(self, block: Block) -> None:
        """Keep it."""
        if len(self.blocks) >= BLOCKS_MAX:
            raise NotMeasurable("a stage went on for longer than its samples can be kept")
        self.blocks.append(block)

    def on_session_event(self, event: Event) -> None:
        """Keep what ends a stage."""
        match event:
            case Tripped():
                self.trip = event
            case Restarted():
                self.restarted = event

    def on_event(self, event: object) -> None:
        """An event of the run."""
        if isinstance(event, Marked):
            self.marks.append((event.tick, event.name))
        if self._recorder is not None:
            self._recorder.on_event(event)

    def on_trail(self, blocks: Sequence[Block]) -> None:
        """The fast record around a trip."""
        if self._recorder is not None:
            self._recorder.on_trail(blocks)


class Lab:
    """Runs stages on an open session whose limits are `bench`'s, the procedure's own.

    `tell` takes sentences for the person at the bench, `progress` one line that is rewritten. Raises LinkLost and
    StoppedByUser where a stage ended by them.
    """

    def __init__(
        self,
        session: Session,
        bench: Bench,
        *,
        clock: Clock,
        listeners: Listeners,
        recorder: Recorder | None = None,
        bystander: Bystander | None = None,
        tell: Callable[[str], None] = lambda text: None,
        progress: Callable[[str], None] = lambda text: None,
    ) -> None:
        self.session = session
        self.bench = bench
        self.clock = clock
        self.rig = Rig.of(bench, tick_us=session.identity.tick_us)
        self.bystander: Bystander = bystander or Nobody()
        self.tell = tell
        self.accounts: list[Accounting] = []
        self._listeners = listeners
        self._recorder = recorder
        self._progress = progress
        self._stages = 0

    def script(self, name: str, *, period_ms: int | None = None) -> Script:
        """A new sequence for `run`; sampled as fast as the line carries, or every `period_ms`."""
        return Script(self.rig, name=name, period_ms=period_ms or self.period_ms)

    @property
    def period_ms(self) -> int:
        """A period that a line of 115200 baud carries well: 2 ms for a motor and a servo, more for more channels."""
        return max(1, 2 * max(1, len(self.rig.axes)), -(-self.rig.tick_us // 1000))

    def run(self, script: Script) -> Trace:
        """Carry out a stage to its end; raises NotMeasurable where it did not come there. A trip stays latched."""
        trace = self.attempt(script, recover=False)
        if not trace.whole:
            raise NotMeasurable(f"'{trace.name}' was not carried out to its end: {trace.ending}")
        if not len(trace.ticks):
            raise NotMeasurable(f"no samples came in '{trace.name}'")
        return trace

    def attempt(self, script: Script, *, recover: bool = True) -> Trace:
        """Carry out a stage as far as it comes.

        With `recover` the device is made ready for the next stage: a trip of this one is cleared, for it is a finding
        like others, and a device that restarted is opened again.
        """
        self._stages += 1
        sequence = sequence_of_text(script.text, f"stage {self._stages}")
        self._keep(f"{self._stages:02d}-{sequence.name.replace(' ', '-')}.yaml", script.text.encode())
        plan = compile_plan(sequence, self.bench, tick_us=self.session.identity.tick_us)
        heard = _Listening(self._recorder)

        def progress(far: Progress) -> None:
            self._progress(f"{sequence.name}: {far.fraction:4.0%}  {far.doing}")

        self._listeners.add(on_block=heard.on_block, on_event=heard.on_session_event)
        try:
            outcome = run_plan(
                self.session,
                plan,
                self.rig,
                clock=self.clock,
                listeners=self._listeners,
                keeper=heard,
                progress=progress,
            )
        finally:
            self._listeners.remove(on_block=heard.on_block, on_event=heard.on_session_event)
        self._raise_for(outcome)
        self._account()
        trace = self._trace(sequence.name, heard, outcome)
        if recover:
            self._recover(heard)
        return trace

    def watch(self, name: str, seconds: float, *, during: Callable[[], None] | None = None) -> Trace:
        """Sample with the outputs off for so long, or while `during` lasts, which must let time pass by `pump`."""
        self._progress(f"{name}: outputs off")
        heard = _Listening(self._recorder)
        ticks = max(1, round(self.period_ms * 1000 / self.rig.tick_us))
        self._listeners.add(on_block=heard.on_block, on_event=heard.on_session_event)
        try:
            self.session.log(ticks, self.rig.mask)
            if during is not None:
                during()
            self.pump(seconds)
            self.session.stop_log()
        finally:
            self._listeners.remove(on_block=heard.on_block, on_event=heard.on_session_event)
        self._account()
        return self._trace(name, heard, None)

    def pump(self, seconds: float) -> None:
        """Let time pass."""
        self.session.pump(self.clock.now() + seconds)

    def _account(self) -> None:
        account = self.session.accounting
        if account is not None:
            self.accounts.append(account)

    def _keep(self, name: str, data: bytes) -> None:
        """A file into the run folder."""
        if self._recorder is None:
            return
        file = self._recorder.folder.new_file(name)
        try:
            file.append(data)
        finally:
            file.close()

    def _trace(self, name: str, heard: _Listening, outcome: Outcome | None) -> Trace:
        ticks, columns = columns_of(heard.blocks)
        return Trace(
            name=name,
            tick_s=self.rig.tick_us / 1e6,
            ticks=ticks,
            columns=columns,
            marks=tuple(heard.marks),
            whole=outcome is None or outcome.verdict is Verdict.PASSED,
            ending="" if outcome is None else outcome.sentence,
            trip=heard.trip,
            restarted=heard.restarted,
        )

    @staticmethod
    def _raise_for(outcome: Outcome) -> None:
        match outcome.verdict:
            case Verdict.STOPPED:
                raise StoppedByUser(outcome.sentence)
            case Verdict.LINK_LOST:
                raise LinkLost(outcome.sentence)

    def _recover(self, heard: _Listening) -> None:
        """Ready for the next stage. Raises Refused where a trip cannot be cleared, LinkError for a device gone."""
        if not self.session.valid:
            self.session.reopen()
        if heard.trip is not None or self.session.trip is not None:
            self.session.clear()
