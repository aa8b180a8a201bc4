"""The controller of a board: everything SPEC.md says a device must enforce, one tick at a time, over bytes and inputs.

`Controller(board, inputs, limits)` is a board that has just started. Bytes given to `receive` are read in the next
`tick`; `take_output` is what has been sent since it was last asked. Ages are ticks since the start that do not wrap.

A little over 400 lines, since the tick's order and the states it moves between are one thing and read best together.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

from ramprig_link.device import DeviceLink, Reply
from ramprig_link.messages import Bare
from ramprig_link.samples import channels_of
from ramprig_link.words import (
    SPEED_TICKS,
    STATE_BITS,
    TRIPS,
    VERSION,
    Cause,
    Source,
    State,
    Trip,
)

from .board import Board
from .drive import BRAKING, Drive
from .guard import AxisWatch, Finding, SupplyWatch
from .inputs import Inputs, fitted
from .limits import LimitStore
from .orders import NEVER, OrderQueue
from .requests import carry_out
from .sampling import TICK_MASK, Sampling
from .servos import ServoPulse
from .trail import Trail
from .transmit import Transmitter

NOT_LATCHED = Finding(Trip.NONE, 0, 0, 0)
RESTARTING = frozenset({Cause.BROWNOUT, Cause.WATCHDOG})
"""Causes after which the board starts tripped."""


class Controller:
    """One board from its start to its end. Read `state`, `latched`, `drives`, `pulses`; change nothing but by bytes.

    `age` is the tick that has ended last, or is under way; its low 32 bits are the tick of the protocol.
    """

    def __init__(
        self,
        board: Board,
        inputs: Inputs,
        limits: LimitStore | None = None,
        *,
        boot: int = 1,
        cause: Cause = Cause.POWER,
        self_test: int = 0,
        start_tick: int = 0,
        transmitter: Transmitter | None = None,
    ) -> None:
        """`self_test` other than 0 is the number of the test that failed; `start_tick` is for tests of the wrap."""
        self.board = board
        self.inputs = fitted(inputs, board.caps)
        self._read_counts = self.inputs.read_counts  # bound once: asked for in every tick
        self._read_current_ma = self.inputs.read_current_ma
        self._read_supply_mv = self.inputs.read_supply_mv
        self.limits = limits if limits is not None else LimitStore(board)
        self.boot = boot
        self.link = DeviceLink()
        self.transmitter = transmitter or Transmitter(data_bytes_max=board.transmit_bytes, tick_us=board.tick_us)
        self.sampling = Sampling(self.link, self.transmitter, keep=board.keep)
        self.trail = Trail(board.trail)
        self.orders = OrderQueue(board.queue)
        self.age = start_tick - 1
        self._found: list[Finding] = []
        self._notices: list[tuple[object, ...]] = []
        self.drives = tuple(Drive(i, self.limits, age=start_tick, tell=self.tell) for i in range(board.axes))
        self.watches = tuple(AxisWatch(i, self.limits, age=start_tick, found=self._found) for i in range(board.axes))
        self.pulses = tuple(ServoPulse(i, self.limits, tell=self.tell) for i in range(board.servos))
        self.supply = SupplyWatch(self.limits, found=self._found)
        self._axes = tuple(zip(range(board.axes), self.watches, self.drives, strict=True))
        self.overrun = 0
        self.state = State.OFF
        self.latched = NOT_LATCHED
        self.last_trip = NOT_LATCHED
        self.last_trip_age = 0
        self.lease_ms = 0
        self.lease_ticks = 0
        self.renewed_age = 0
        self._lease_due = NEVER
        self._live = False
        self._stop_began = NEVER
        self._stop_ticks = self.limits["stop_ticks", 0]
        self._state_bits = 0
        self._bits = 0
        self._received = bytearray()
        self._garbled_told = 0
        self._asked = 0  # notices of (a), which come before `garbled`
        self._break = False
        self.limits_set = False
        self.encore: bytes | None = None
        self._start(cause, self_test)

    def _start(self, cause: Cause, self_test: int) -> None:
        self.tell("boot", self.boot, cause)
        if self_test:
            self.latched = Finding(Trip.SELF_TEST, 0, self_test, 0)
        elif cause in RESTARTING:
            self.latched = Finding(Trip.RESTARTED, 0, int(cause), 0)
        if self.latched.trip:
            self.last_trip = self.latched
            self.last_trip_age = self.age + 1
            self.tell("trip", *_fields(self.latched))
            self._enter(State.TRIPPED)
            self.tell("off", self.state)
        self._send_notices(self.age + 1)  # before any answer of the first tick (RUN-1)

    # ---- the outside -----------------------------------------------------------------------------------------------

    def receive(self, data: bytes) -> None:
        """Take bytes from the line, to be read in the next tick; what does not fit the buffer is lost and counted."""
        room = self.board.receive_bytes - len(self._received)
        self._received += data[:room]
        self.overrun += max(0, len(data) - room)

    def line_break(self) -> None:
        """A BREAK has come on the receive line (STOP-6)."""
        self._break = True

    def take_output(self) -> bytes:
        """Everything sent since the last call."""
        return self.transmitter.take_all()

    def tell(self, word: object, *fields: object) -> None:
        """Note a notice, to be sent at this tick's end."""
        self._notices.append((word, *fields))

    def tick(self) -> None:  # noqa: C901  the order of RUN-2 in one place; a call a step would cost a third of the speed
        """One tick, in the order of RUN-2."""
        self.age = age = self.age + 1
        if self._received:  # (a)
            self._take_requests(age)
        read_counts, read_current_ma = self._read_counts, self._read_current_ma  # (b), (c)
        for index, watch, drive in self._axes:
            watch.read(read_counts(index), read_current_ma(index), age, drive.duty)
        supply = self.supply
        supply_mv = self._read_supply_mv()
        if supply.quiet and supply.under_mv <= supply_mv <= supply.over_mv:
            supply.supply_mv = supply_mv
        else:
            supply.read(supply_mv)
        if not age % SPEED_TICKS:
            for watch in self.watches:
                watch.window(age)
        if age >= self._lease_due or self._break:
            self._judge_line(age)
        if self._found:
            self._judge(age)
        bits = 0
        if self._live:
            if age >= self.orders.due:  # (d)
                self._start_orders(age)
            for _, watch, drive in self._axes:  # (d), (e)
                if not drive.steady:
                    if drive.demand.moving:
                        drive.demand.advance(age)
                    bits |= drive.step(age, watch.still(age))
                if drive.brake and not drive.duty:
                    bits |= BRAKING
            for pulse in self.pulses:
                if not pulse.steady:
                    if pulse.demand.moving:
                        pulse.demand.advance(age)
                    bits |= pulse.step()
            if age >= self._stop_began:
                bits = self._end_stop(age, bits)
        self._bits = bits
        if self._notices or self._garbled_told != self.link.counts.garbled:  # (f)
            self._send_notices(age)
        if self._live or self.trail.running_on:  # (g)
            self._record(age)
        if age >= self.sampling.due:
            self.sampling.take(age)
        if age >= self.sampling.flush_due:
            self.sampling.flush()
        if self.limits_set:
            self._take_over_limits()

    # ---- (a) requests ----------------------------------------------------------------------------------------------

    def _take_requests(self, age: int) -> None:
        tick = age & TICK_MASK
        data = bytes(self._received)
        self._received.clear()
        for incoming in self.link.receive(data, tick):
            if isinstance(incoming, Bare):
                self._bare(incoming.word)
                continue
            if isinstance(incoming, Reply):
                if incoming.renews:
                    self.renew()
                self.transmitter.say(incoming.line)
                continue
            self.renew()
            result = carry_out(self, incoming)
            if isinstance(result, tuple):
                self.transmitter.say(self.link.ok(incoming, tick, *result))
            else:
                self.transmitter.say(self.link.no(incoming, tick, result))
            if self.encore is not None:
                self.transmitter.say(self.encore)
                self.encore = None
        self._asked = len(self._notices)

    def _bare(self, word: str) -> None:
        if word == "who":
            self.tell("who", *self.identity())
        elif self._live:
            self.cut(Source.BARE)
        else:
            self.tell("off", self.state)

    def renew(self) -> None:
        """A valid new request has come (LEASE-1)."""
        self.renewed_age = self.age
        if self._lease_due != NEVER:
            self._lease_due = self.age + self.lease_ticks

    def identity(self) -> tuple[object, ...]:
        """The fields of `who`."""
        board = self.board
        return (
            VERSION, board.firmware, board.board, board.serial, self.boot, board.tick_us, board.axes, board.servos,
            board.max_duty, board.queue, board.trail, board.keep, int(board.caps),
        )  # fmt: skip

    def channel_values(self, mask: int) -> Callable[[], Sequence[int]]:
        """A function that gives the values of the mask's channels at the end of the tick under way."""
        owners: dict[str, Sequence[object]] = {
            "duty": self.drives, "counts": self.watches, "current_ma": self.watches, "pulse_us": self.pulses,
            "supply_mv": (self.supply,), "temperature_dc": (self,), "state": (self,),
        }  # fmt: skip
        names = {"state": "state_word"}
        sources = [(owners[ref.kind][ref.index], names.get(ref.kind, ref.kind)) for ref in channels_of(mask)]
        return lambda: [getattr(owner, name) for owner, name in sources]

    @property
    def temperature_dc(self) -> int:
        """The temperature in 1/10 degC."""
        return self.inputs.read_temperature_dc()

    @property
    def state_word(self) -> int:
        """The value of the channel `state`."""
        return self._state_bits | self._bits

    # ---- (c) judgement ---------------------------------------------------------------------------------------------

    def late_order(self, ticks_late: int) -> None:
        """An order has come too late: trip in this tick (ORDER-2)."""
        self._found.append(Finding(Trip.LATE_ORDER, 0, min(ticks_late, 0x7FFFFFFF), 0))

    def _judge_line(self, age: int) -> None:
        if self._break:
            self._break = False
            self._found.append(Finding(Trip.LINE_BREAK, 0, 0, 0))
        if age >= self._lease_due:
            silence_ms = (age - self.renewed_age) * self.board.tick_us // 1000
            self._found.append(Finding(Trip.LINK_LOST, 0, silence_ms, self.lease_ms))

    def _judge(self, age: int) -> None:
        """Latch the lowest of the trips found in this tick, where one may latch (TRIP-1, TRIP-2)."""
        finding = min(self._found)
        self._found.clear()
        category = TRIPS[finding.trip].category
        if not self._live or (self.state is State.STOPPING and category == 1):
            return
        self.latched = finding
        self.last_trip = finding
        self.last_trip_age = age
        self.trail.trip()
        self.tell("trip", *_fields(finding))
        if category == 1:
            self.begin_stop(Source.TRIP)
        else:
            self._switch_off()

    def persists(self) -> bool:
        """Whether the cause of the latched trip is still there (CLEAR-1)."""
        trip, index = self.latched.trip, self.latched.index
        if trip is Trip.OVERCURRENT:
            return self.watches[index].over
        if trip is Trip.OVERLOAD:
            return self.watches[index].heat.still_hot
        if trip in (Trip.OVERVOLTAGE, Trip.UNDERVOLTAGE):
            return self.supply.beyond(trip)
        return trip is Trip.SELF_TEST

    # ---- states ----------------------------------------------------------------------------------------------------

    @property
    def live(self) -> bool:
        """Whether the outputs can act: in the states armed and stopping."""
        return self._live

    def _enter(self, state: State) -> None:
        self.state = state
        self._live = state in (State.ARMED, State.STOPPING)
        self._state_bits = int(state) << STATE_BITS["state"].low | int(self.latched.trip) << STATE_BITS["trip"].low
        self._stop_began = self.age if state is State.STOPPING else NEVER
        self._lease_due = self.renewed_age + self.lease_ticks if state is State.ARMED else NEVER

    def arm(self, lease_ms: int) -> None:
        """Enter the state armed (ARM-3)."""
        self.lease_ms = lease_ms
        self.lease_ticks = -(-lease_ms * 1000 // self.board.tick_us)
        self.renewed_age = self.age
        self.orders.empty()
        self.trail.begin()
        self._enter(State.ARMED)

    def clear(self) -> None:
        """End the latch."""
        self.latched = NOT_LATCHED
        self._enter(State.OFF)

    def begin_stop(self, source: Source) -> None:
        """Begin a stop of category 1 (STOP-5)."""
        self.tell("stop", 1, source)
        self.orders.empty()
        for drive in self.drives:
            drive.release()
        for pulse in self.pulses:
            pulse.release()
        self._enter(State.STOPPING)

    def cut(self, source: Source) -> None:
        """A stop of category 0 (STOP-1)."""
        self.tell("stop", 0, source)
        self._switch_off()

    def _switch_off(self) -> None:
        """All outputs off in this tick; the state becomes off, or tripped where a trip is latched."""
        self.orders.empty()
        for drive in self.drives:
            drive.switch_off(self.age)
        for pulse in self.pulses:
            pulse.switch_off()
        self._enter(State.TRIPPED if self.latched.trip else State.OFF)
        self.tell("off", self.state)

    def _end_stop(self, age: int, bits: int) -> int:
        """End a category 1 stop once all bridges are at zero, or its time is over; returns the chain's state bits."""
        if age - self._stop_began < self._stop_ticks and any(drive.duty for drive in self.drives):
            return bits
        self._switch_off()
        return 0

    # ---- (d) to (g) ------------------------------------------------------------------------------------------------

    def _start_orders(self, age: int) -> None:
        for order in self.orders.take(age):
            if order.word == "swing":
                self.pulses[order.index].start(order, age)
            else:
                self.drives[order.index].start(order, age)

    def _send_notices(self, age: int) -> None:
        tick = age & TICK_MASK
        for at in range(len(self._notices) + 1):
            if at == self._asked:
                self._tell_garbled(tick)
            if at < len(self._notices):
                word, *fields = self._notices[at]
                self.transmitter.say(self.link.notice(str(word), tick, *fields))
        self._notices.clear()
        self._asked = 0

    def _tell_garbled(self, tick: int) -> None:
        news = self.link.garbled_news(tick)
        if news is not None:
            self.transmitter.say(news)
            self._garbled_told = self.link.counts.garbled

    def _record(self, age: int) -> None:
        if self.trail.frozen:
            return
        record: tuple[int, ...] = (self.supply.supply_mv, self._state_bits | self._bits)
        for _, watch, drive in self._axes:
            record += (drive.duty, watch.counts, watch.current_ma)
        self.trail.add(record, age)

    def _take_over_limits(self) -> None:
        self.limits_set = False
        self._stop_ticks = self.limits["stop_ticks", 0]
        for watch in self.watches:
            watch.refresh(self.limits)
        for drive in self.drives:
            drive.refresh(self.limits)
        for pulse in self.pulses:
            pulse.refresh(self.limits)
        self.supply.refresh(self.limits)


def _fields(finding: Finding) -> tuple[object, ...]:
    return finding.trip, finding.index, finding.value, finding.bound
