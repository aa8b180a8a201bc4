"""The words, numbers, units, reasons, channels and trips of the line protocol, as constants and tables.

Made from protocol/protocol.toml by scripts/dev/generate_protocol.py; do not edit. SPEC.md says what they mean.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from enum import Enum, IntEnum, IntFlag, StrEnum
from types import MappingProxyType
from typing import Final, Self


class Worded(IntEnum):
    """A table whose entries travel as words in lines and as numbers in samples; `text` tells what an entry means."""

    text: str

    def __new__(cls, number: int, text: str = "") -> Self:
        entry = int.__new__(cls, number)
        entry._value_ = number
        entry.text = text
        return entry

    @property
    def word(self) -> str:
        """The entry as it stands in a line."""
        return self.name.lower()

    @classmethod
    def named(cls, word: str) -> Self | None:
        """The entry that the line's `word` names; None where this version knows none of that name."""
        entry = cls.__members__.get(word.upper())
        return entry if entry is not None and entry.word == word else None

    @classmethod
    def all_words(cls) -> tuple[str, ...]:
        """The words of the table, in order."""
        return tuple(entry.word for entry in cls)


class Kind(Enum):
    """How a field is spelt; see SPEC.md, section 4."""

    U32 = "u32"
    I32 = "i32"
    HEX2 = "hex2"
    HEX8 = "hex8"
    AXIS = "axis"
    SERVO = "servo"
    TICK = "tick"
    TICKS = "ticks"
    WORD = "word"
    TOKEN = "token"
    PAYLOAD = "payload"
    GROUP = "group"


class Per(Enum):
    """What a limit or channel there is one of."""

    DEVICE = "device"
    AXIS = "axis"
    SERVO = "servo"


class Tighter(Enum):
    """The way in which a limit may be moved while armed."""

    LOWER = "lower"
    HIGHER = "higher"
    NONE = "none"


@dataclass(frozen=True, slots=True)
class Field:
    """One field: `choices` are the words allowed where `kind` is WORD, `group` the parts repeated where it is GROUP."""

    name: str
    kind: Kind
    choices: tuple[str, ...] = ()
    group: tuple[str, ...] = ()
    optional: bool = False


@dataclass(frozen=True, slots=True)
class Word:
    """One request: its arguments, the fields of its `ok`, and the states that allow it."""

    name: str
    args: tuple[Field, ...]
    fields: tuple[Field, ...]
    states: frozenset[State]
    text: str


@dataclass(frozen=True, slots=True)
class NoticeWord:
    """One notice and its fields."""

    name: str
    fields: tuple[Field, ...]
    text: str


@dataclass(frozen=True, slots=True)
class TripRow:
    """The stop category of a trip and what its value and bound are."""

    category: int
    value: str
    bound: str


@dataclass(frozen=True, slots=True)
class Channel:
    """One kind of sample channel: axis, servo or device number i has bit `first_bit + i * step` of the mask."""

    name: str
    per: Per
    first_bit: int
    step: int
    bits: int
    order: int
    unit: str
    text: str


@dataclass(frozen=True, slots=True)
class StateBits:
    """One part of the `state` channel: `width` bits from bit `low` on."""

    name: str
    low: int
    width: int
    text: str

    def of(self, bits: int) -> int:
        """This part's value in the channel value `bits`."""
        return bits >> self.low & (1 << self.width) - 1


@dataclass(frozen=True, slots=True)
class Limit:
    """One limit: a number from `lowest` to `highest` by which the device judges."""

    name: str
    number: int
    per: Per
    lowest: int
    highest: int
    default: int
    unit: str
    tighter: Tighter
    text: str


VERSION: Final = 1
HOST_LINE_MAX: Final = 80  # bytes: longest line from host to device, LF included
DEVICE_LINE_MAX: Final = 200  # bytes: longest line from device to host, LF included
TAG_URGENT: Final = 255  # tag: the tag kept for `stop`, outside the exactly-once memory
ANSWER_TICKS: Final = 20  # ticks: a device begins its answer within this time of the request's LF
GARBLED_REST_TICKS: Final = 100  # ticks: least time between two `garbled` notices
HORIZON_TICKS: Final = 1_073_741_824  # ticks: an order may start or last at most this long
AXES_MAX: Final = 4  # axes: most motor axes a device may have
SERVOS_MAX: Final = 4  # servos: most servos a device may have
QUEUE_MIN: Final = 8  # orders: least depth of the order queue
DUTY_FULL: Final = 10000  # 1/10000: duty at full scale
BLOCK_SAMPLES_MAX: Final = 255  # samples: most samples in one packed block
FLUSH_TICKS: Final = 100  # ticks: a packed data line is sent at the latest this long after its first sample
PAYLOAD_MAX: Final = 190  # characters: longest packed payload of a data line
TRAIL_PAYLOAD_MAX: Final = 160  # characters: longest packed payload of a `trail` answer
TRAIL_MIN: Final = 32  # records: least length of the trail
RICE_QUOTIENT_MAX: Final = 16  # bits: a quotient this long or longer is replaced by the escape
RICE_RESET: Final = 32  # values: the running mean is halved after this many values
RICE_SUM_CAP: Final = 65535  # 1: a value counts at most this much in the running mean
RICE_K_MAX: Final = 15  # bits: largest Rice parameter
RICE_K_START: Final = 2  # bits: Rice parameter at the start of a logging
THERMAL_TICKS: Final = 64  # ticks: step of the thermal model
SPEED_TICKS: Final = 32  # ticks: window of the overspeed trip
TOKEN_MAX: Final = 24  # characters: longest token (a name or an identity)


class State(Worded):
    """What the device is in."""

    OFF = 0, "outputs off, nothing latched"
    ARMED = 1, "orders are carried out under the lease"
    STOPPING = 2, "a category 1 stop is running"
    TRIPPED = 3, "outputs off, a trip is latched"


class Trip(Worded):
    """Why the device stopped itself; the number is also the rank, the lowest first."""

    NONE = 0, "no trip"
    SELF_TEST = 1, "the board found itself faulty"
    RESTARTED = 2, "the board restarted by brown-out or watchdog"
    LINE_BREAK = 3, "a BREAK came on the receive line"
    OVERCURRENT = 4, "more than trip_ma for trip_ticks ticks in a row"
    OVERVOLTAGE = 5, "supply above over_mv for supply_ticks ticks in a row"
    UNDERVOLTAGE = 6, "supply below under_mv for supply_ticks ticks in a row"
    WRONG_WAY = 7, "the encoder ran against the duty"
    OVERSPEED = 8, "more than speed_counts in one window"
    STALL = 9, "duty and no counts for stall_ticks"
    OVERLOAD = 10, "the thermal model reached its limit"
    LINK_LOST = 11, "no valid new line for the lease"
    LATE_ORDER = 12, "an order came after its start tick"


class Source(Worded):
    """Who asked for a stop."""

    HOST = 0, "a checked `stop`"
    BARE = 1, "a bare `stop`"
    TRIP = 2, "a trip of category 1"
    DISARM = 3, "a `disarm`"


class Cause(Worded):
    """Why the device started."""

    POWER = 0, "power on"
    EXTERNAL = 1, "reset pin or DTR"
    BROWNOUT = 2, "supply of the board too low"
    WATCHDOG = 3, "the firmware hung"
    SOFTWARE = 4, "the firmware restarted itself"


class Rest(Worded):
    """What the bridge does at zero duty."""

    COAST = 0, "both bridge legs off"
    BRAKE = 1, "motor shorted by the bridge"


class Form(Worded):
    """How samples are sent."""

    PACKED = 0, "packed blocks"
    PLAIN = 1, "one decimal line a sample"


class Reason(StrEnum):
    """Why a request was refused."""

    WORD = "word"  # no such request
    ARGS = "args"  # wrong number or spelling of the arguments
    RANGE = "range"  # an argument is outside its range or its limit
    INDEX = "index"  # no such axis, servo or index
    STATE = "state"  # not in this state
    TAG = "tag"  # this tag was used last for another body
    DIGEST = "digest"  # the host's digest of the limits is not the device's
    ARMED = "armed"  # a limit cannot be loosened while armed
    LATE = "late"  # the order's start tick has passed
    FAR = "far"  # the order's start lies beyond the horizon
    FULL = "full"  # the order queue is full
    MOVING = "moving"  # the bridge is not at zero
    CAUSE = "cause"  # the cause of the trip persists
    GONE = "gone"  # no longer, or not yet, kept


class Cap(IntFlag):
    """What a board can do."""

    ENCODER = 1 << 0  # quadrature counts
    CURRENT = 1 << 1  # current sense
    SUPPLY = 1 << 2  # supply measurement
    TEMPERATURE = 1 << 3  # temperature measurement
    KEEPS_LIMITS = 1 << 4  # limits survive power-off
    BREAK = 1 << 5  # BREAK on the receive line is detected


REASONS: Final[Mapping[Reason, str]] = MappingProxyType({
    Reason.WORD: "no such request",
    Reason.ARGS: "wrong number or spelling of the arguments",
    Reason.RANGE: "an argument is outside its range or its limit",
    Reason.INDEX: "no such axis, servo or index",
    Reason.STATE: "not in this state",
    Reason.TAG: "this tag was used last for another body",
    Reason.DIGEST: "the host's digest of the limits is not the device's",
    Reason.ARMED: "a limit cannot be loosened while armed",
    Reason.LATE: "the order's start tick has passed",
    Reason.FAR: "the order's start lies beyond the horizon",
    Reason.FULL: "the order queue is full",
    Reason.MOVING: "the bridge is not at zero",
    Reason.CAUSE: "the cause of the trip persists",
    Reason.GONE: "no longer, or not yet, kept",
})

TRIPS: Final[Mapping[Trip, TripRow]] = MappingProxyType({
    Trip.NONE: TripRow(0, "0", "0"),
    Trip.SELF_TEST: TripRow(0, "test number", "0"),
    Trip.RESTARTED: TripRow(0, "cause number", "0"),
    Trip.LINE_BREAK: TripRow(0, "0", "0"),
    Trip.OVERCURRENT: TripRow(0, "current, mA", "trip_ma"),
    Trip.OVERVOLTAGE: TripRow(0, "supply, mV", "over_mv"),
    Trip.UNDERVOLTAGE: TripRow(0, "supply, mV", "under_mv"),
    Trip.WRONG_WAY: TripRow(0, "counts against the duty", "wrong_counts"),
    Trip.OVERSPEED: TripRow(0, "counts in SPEED_TICKS", "speed_counts"),
    Trip.STALL: TripRow(0, "duty, 1/10000", "stall_ticks"),
    Trip.OVERLOAD: TripRow(1, "root of the heat, mA", "rated_ma"),
    Trip.LINK_LOST: TripRow(1, "silence, ms", "the lease, ms"),
    Trip.LATE_ORDER: TripRow(1, "ticks late", "0"),
})

LIMITS: Final[Mapping[str, Limit]] = MappingProxyType({
    "lease_ms": Limit(
        "lease_ms", 1, Per.DEVICE, 50, 5000, 500, "ms", Tighter.LOWER,
        "longest lease that `arm` may ask for",
    ),
    "stop_ticks": Limit(
        "stop_ticks", 2, Per.DEVICE, 1, 5000, 500, "ticks", Tighter.LOWER,
        "longest category 1 stop; the bridge is cut at its end",
    ),
    "under_mv": Limit(
        "under_mv", 3, Per.DEVICE, 0, 65000, 9000, "mV", Tighter.HIGHER,
        "undervoltage; 0 = trip off",
    ),
    "over_mv": Limit(
        "over_mv", 4, Per.DEVICE, 1000, 65000, 16000, "mV", Tighter.LOWER,
        "overvoltage",
    ),
    "supply_ticks": Limit(
        "supply_ticks", 5, Per.DEVICE, 1, 1000, 5, "ticks", Tighter.LOWER,
        "ticks in a row before a voltage trip",
    ),
    "ceiling_duty": Limit(
        "ceiling_duty", 16, Per.AXIS, 0, 10000, 3000, "1/10000", Tighter.LOWER,
        "ceiling of the duty; at most the board's max_duty",
    ),
    "slew_up_duty": Limit(
        "slew_up_duty", 17, Per.AXIS, 1, 10000, 20, "1/10000 a tick", Tighter.LOWER,
        "most the duty grows away from zero in a tick",
    ),
    "slew_down_duty": Limit(
        "slew_down_duty", 18, Per.AXIS, 1, 10000, 40, "1/10000 a tick", Tighter.NONE,
        "most the duty falls towards zero in a tick",
    ),
    "dwell_ticks": Limit(
        "dwell_ticks", 19, Per.AXIS, 1, 60000, 250, "ticks", Tighter.HIGHER,
        "least time at zero before the other sign",
    ),
    "still_counts": Limit(
        "still_counts", 20, Per.AXIS, 0, 10000, 2, "counts", Tighter.LOWER,
        "standstill: the counts stay within this band",
    ),
    "still_ticks": Limit(
        "still_ticks", 21, Per.AXIS, 1, 10000, 50, "ticks", Tighter.HIGHER,
        "standstill: for this long",
    ),
    "sense": Limit(
        "sense", 22, Per.AXIS, -1, 1, 1, "sign", Tighter.NONE,
        "sign of the counts for positive duty; 0 = no encoder",
    ),
    "trip_ma": Limit(
        "trip_ma", 23, Per.AXIS, 1, 130000, 2000, "mA", Tighter.LOWER,
        "overcurrent",
    ),
    "trip_ticks": Limit(
        "trip_ticks", 24, Per.AXIS, 1, 1000, 5, "ticks", Tighter.LOWER,
        "ticks in a row before the overcurrent trip",
    ),
    "offset_ma": Limit(
        "offset_ma", 25, Per.AXIS, -5000, 5000, 0, "mA", Tighter.NONE,
        "subtracted from every current reading",
    ),
    "rated_ma": Limit(
        "rated_ma", 26, Per.AXIS, 0, 65535, 1000, "mA", Tighter.NONE,
        "current that may flow for ever (k I_B of the thermal model); 0 = trip off",
    ),
    "thermal_s": Limit(
        "thermal_s", 27, Per.AXIS, 1, 10000, 60, "s", Tighter.NONE,
        "time constant of the thermal model",
    ),
    "stall_duty": Limit(
        "stall_duty", 28, Per.AXIS, 0, 10000, 1500, "1/10000", Tighter.LOWER,
        "duty from which motion is expected; 0 = stall and wrong-way trips off",
    ),
    "stall_counts": Limit(
        "stall_counts", 29, Per.AXIS, 1, 10000, 4, "counts", Tighter.HIGHER,
        "this much motion ends the stall timer",
    ),
    "stall_ticks": Limit(
        "stall_ticks", 30, Per.AXIS, 1, 60000, 300, "ticks", Tighter.LOWER,
        "ticks without motion before the stall trip",
    ),
    "wrong_counts": Limit(
        "wrong_counts", 31, Per.AXIS, 1, 100000, 24, "counts", Tighter.LOWER,
        "counts against the duty before the wrong-way trip",
    ),
    "speed_counts": Limit(
        "speed_counts", 32, Per.AXIS, 0, 1000000, 0, "counts in SPEED_TICKS", Tighter.LOWER,
        "overspeed; 0 = trip off",
    ),
    "pulse_min_us": Limit(
        "pulse_min_us", 48, Per.SERVO, 400, 2600, 1100, "us", Tighter.HIGHER,
        "shortest pulse",
    ),
    "pulse_max_us": Limit(
        "pulse_max_us", 49, Per.SERVO, 400, 2600, 1900, "us", Tighter.LOWER,
        "longest pulse",
    ),
    "pulse_slew_ns": Limit(
        "pulse_slew_ns", 50, Per.SERVO, 1, 2000000, 500, "ns a tick", Tighter.LOWER,
        "most the pulse changes in a tick",
    ),
    "pulse_home_us": Limit(
        "pulse_home_us", 51, Per.SERVO, 400, 2600, 1500, "us", Tighter.NONE,
        "first pulse after none",
    ),
})

CHANNELS: Final[Mapping[str, Channel]] = MappingProxyType({
    "duty": Channel("duty", Per.AXIS, 0, 3, 15, 2, "1/10000", "duty at the bridge"),
    "counts": Channel("counts", Per.AXIS, 1, 3, 32, 2, "counts", "quadrature counts x4, wrapping"),
    "current_ma": Channel("current_ma", Per.AXIS, 2, 3, 18, 1, "mA", "motor current less offset_ma"),
    "pulse_us": Channel("pulse_us", Per.SERVO, 12, 1, 14, 1, "us", "pulse width commanded at the pin, 0 = none"),
    "supply_mv": Channel("supply_mv", Per.DEVICE, 16, 0, 18, 1, "mV", "supply voltage at the bridge"),
    "temperature_dc": Channel("temperature_dc", Per.DEVICE, 17, 0, 13, 1, "1/10 degC", "temperature of the board or motor"),
    "state": Channel("state", Per.DEVICE, 18, 0, 16, 1, "bits", "state bits"),
})

STATE_BITS: Final[Mapping[str, StateBits]] = MappingProxyType({
    "state": StateBits("state", 0, 2, "number of the state"),
    "dwell_lock": StateBits("dwell_lock", 2, 1, "a dwell lock holds a demand back"),
    "at_ceiling": StateBits("at_ceiling", 3, 1, "a ceiling cuts a demand"),
    "at_slew": StateBits("at_slew", 4, 1, "a slew limit holds a duty or pulse back"),
    "braking": StateBits("braking", 5, 1, "an axis rests braked at zero"),
    "trip": StateBits("trip", 8, 4, "number of the latched trip"),
})

WORDS: Final[Mapping[str, Word]] = MappingProxyType({
    "who": Word(
        name="who",
        args=(),
        fields=(
            Field("version", Kind.U32),
            Field("firmware", Kind.TOKEN),
            Field("board", Kind.TOKEN),
            Field("serial", Kind.TOKEN),
            Field("boot", Kind.U32),
            Field("tick_us", Kind.U32),
            Field("axes", Kind.U32),
            Field("servos", Kind.U32),
            Field("max_duty", Kind.U32),
            Field("queue", Kind.U32),
            Field("trail", Kind.U32),
            Field("keep", Kind.U32),
            Field("caps", Kind.U32),
        ),
        states=frozenset({State.OFF, State.ARMED, State.STOPPING, State.TRIPPED}),
        text="identity and capabilities",
    ),
    "beat": Word(
        name="beat",
        args=(),
        fields=(Field("state", Kind.WORD, State.all_words()),),
        states=frozenset({State.OFF, State.ARMED, State.STOPPING, State.TRIPPED}),
        text="renews the lease; its answer fits the clocks",
    ),
    "state": Word(
        name="state",
        args=(),
        fields=(
            Field("state", Kind.WORD, State.all_words()),
            Field("trip", Kind.WORD, Trip.all_words()),
            Field("queued", Kind.U32),
            Field("supply_mv", Kind.I32),
            Field("temperature_dc", Kind.I32),
            Field("axes", Kind.GROUP, group=("duty", "counts", "current_ma")),
            Field("servos", Kind.GROUP, group=("pulse_us",)),
        ),
        states=frozenset({State.OFF, State.ARMED, State.STOPPING, State.TRIPPED}),
        text="what the device does and measures at this tick",
    ),
    "arm": Word(
        name="arm",
        args=(Field("lease_ms", Kind.U32), Field("digest", Kind.HEX8)),
        fields=(Field("lease_ms", Kind.U32),),
        states=frozenset({State.OFF}),
        text="enables the outputs under a lease",
    ),
    "disarm": Word(
        name="disarm",
        args=(),
        fields=(),
        states=frozenset({State.OFF, State.ARMED}),
        text="normal end: outputs off, refused while the bridge is not at zero",
    ),
    "ramp": Word(
        name="ramp",
        args=(
            Field("axis", Kind.AXIS),
            Field("duty", Kind.I32),
            Field("ticks", Kind.TICKS),
            Field("start", Kind.TICK),
        ),
        fields=(Field("queue_free", Kind.U32),),
        states=frozenset({State.ARMED}),
        text="order: move an axis's demand linearly to a duty",
    ),
    "swing": Word(
        name="swing",
        args=(
            Field("servo", Kind.SERVO),
            Field("pulse_us", Kind.U32),
            Field("ticks", Kind.TICKS),
            Field("start", Kind.TICK),
        ),
        fields=(Field("queue_free", Kind.U32),),
        states=frozenset({State.ARMED}),
        text="order: move a servo's pulse linearly to a width; 0 switches its pulses off",
    ),
    "rest": Word(
        name="rest",
        args=(
            Field("axis", Kind.AXIS),
            Field("mode", Kind.WORD, Rest.all_words()),
            Field("start", Kind.TICK),
        ),
        fields=(Field("queue_free", Kind.U32),),
        states=frozenset({State.ARMED}),
        text="order: what the bridge does at zero duty",
    ),
    "stop": Word(
        name="stop",
        args=(Field("category", Kind.U32),),
        fields=(Field("state", Kind.WORD, State.all_words()),),
        states=frozenset({State.OFF, State.ARMED, State.STOPPING, State.TRIPPED}),
        text="stop, category 0 or 1",
    ),
    "clear": Word(
        name="clear",
        args=(),
        fields=(),
        states=frozenset({State.TRIPPED}),
        text="ends the latch of a trip",
    ),
    "why": Word(
        name="why",
        args=(),
        fields=(
            Field("trip", Kind.WORD, Trip.all_words()),
            Field("trip_tick", Kind.TICK),
            Field("index", Kind.U32),
            Field("value", Kind.I32),
            Field("bound", Kind.I32),
        ),
        states=frozenset({State.OFF, State.ARMED, State.STOPPING, State.TRIPPED}),
        text="the last trip since boot with its values",
    ),
    "limit": Word(
        name="limit",
        args=(
            Field("item", Kind.WORD, tuple(LIMITS)),
            Field("index", Kind.U32),
            Field("value", Kind.I32, optional=True),
        ),
        fields=(Field("value", Kind.I32),),
        states=frozenset({State.OFF, State.ARMED, State.STOPPING, State.TRIPPED}),
        text="reads a limit, or sets it",
    ),
    "log": Word(
        name="log",
        args=(
            Field("period_ticks", Kind.TICKS),
            Field("mask", Kind.U32),
            Field("form", Kind.WORD, Form.all_words()),
        ),
        fields=(Field("first", Kind.TICK), Field("made", Kind.U32)),
        states=frozenset({State.OFF, State.ARMED, State.STOPPING, State.TRIPPED}),
        text="starts, changes or (period 0) ends sampling",
    ),
    "again": Word(
        name="again",
        args=(Field("number", Kind.U32),),
        fields=(),
        states=frozenset({State.OFF, State.ARMED, State.STOPPING, State.TRIPPED}),
        text="sends a kept data line again",
    ),
    "trail": Word(
        name="trail",
        args=(Field("axis", Kind.AXIS), Field("first", Kind.U32)),
        fields=(Field("total", Kind.U32), Field("payload", Kind.PAYLOAD)),
        states=frozenset({State.OFF, State.ARMED, State.STOPPING, State.TRIPPED}),
        text="reads the fast record kept from around the last trip",
    ),
    "counters": Word(
        name="counters",
        args=(),
        fields=(
            Field("lines", Kind.U32),
            Field("garbled", Kind.U32),
            Field("overlong", Kind.U32),
            Field("overrun", Kind.U32),
            Field("repeats", Kind.U32),
            Field("worst_us", Kind.U32),
            Field("made", Kind.U32),
            Field("dropped", Kind.U32),
            Field("illegal_edges", Kind.U32),
        ),
        states=frozenset({State.OFF, State.ARMED, State.STOPPING, State.TRIPPED}),
        text="running counts since boot",
    ),
})

NOTICES: Final[Mapping[str, NoticeWord]] = MappingProxyType({
    "boot": NoticeWord(
        name="boot",
        fields=(Field("boot", Kind.U32), Field("cause", Kind.WORD, Cause.all_words())),
        text="the device has started",
    ),
    "who": NoticeWord(
        name="who",
        fields=(
            Field("version", Kind.U32),
            Field("firmware", Kind.TOKEN),
            Field("board", Kind.TOKEN),
            Field("serial", Kind.TOKEN),
            Field("boot", Kind.U32),
            Field("tick_us", Kind.U32),
            Field("axes", Kind.U32),
            Field("servos", Kind.U32),
            Field("max_duty", Kind.U32),
            Field("queue", Kind.U32),
            Field("trail", Kind.U32),
            Field("keep", Kind.U32),
            Field("caps", Kind.U32),
        ),
        text="answer to a bare `who`",
    ),
    "stop": NoticeWord(
        name="stop",
        fields=(Field("category", Kind.U32), Field("source", Kind.WORD, Source.all_words())),
        text="a stop has begun",
    ),
    "off": NoticeWord(
        name="off",
        fields=(Field("state", Kind.WORD, State.all_words()),),
        text="all outputs are off",
    ),
    "trip": NoticeWord(
        name="trip",
        fields=(
            Field("trip", Kind.WORD, Trip.all_words()),
            Field("index", Kind.U32),
            Field("value", Kind.I32),
            Field("bound", Kind.I32),
        ),
        text="a trip has latched",
    ),
    "done": NoticeWord(
        name="done",
        fields=(Field("tag", Kind.HEX2),),
        text="the order sent under this tag has been carried out",
    ),
    "dwell": NoticeWord(
        name="dwell",
        fields=(Field("axis", Kind.AXIS), Field("held_ticks", Kind.U32)),
        text="the dwell lock has let go after holding a demand back",
    ),
    "garbled": NoticeWord(
        name="garbled",
        fields=(Field("garbled", Kind.U32),),
        text="a line was refused below the answers; the count since boot",
    ),
})
