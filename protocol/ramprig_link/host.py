"""The host's end of the line as a state machine: one request at a time, repeats, and the numbers of what comes up.

Time comes in as `now_s` (seconds of any clock that does not go back) and nothing waits here. A driver reads what has
come, hands it to `receive`, then sends what `due` gives, and sleeps until `due_at_s` at the longest.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import NamedTuple

from .check import seal
from .faults import FieldError, LinkBusy, LinkMisuse, LinkSilent, SampleFault
from .fields import print_field
from .lines import LineSplitter, Overlong
from .messages import Answer, Data, Flaw, Garbled, Notice, Request, parse_device_line
from .samples import SampleBlock, decode_data
from .words import DEVICE_LINE_MAX, HOST_LINE_MAX, TAG_URGENT, WORDS

PREPARED_KEPT = 512  # requests: a beat under each tag, and as many others
AGAIN_WITHIN_LINES = 16  # a line asked for by `again` is taken for a new one after this many others
WAITING_MAX = 64  # data lines that are kept back to be read together
_DATA_HEADS = tuple(b"D%02x " % number for number in range(256))

# A stop goes out from signal handlers and other threads, so its bytes are made beforehand. The LF in front ends a
# half-sent line, which then counts as garbled.
_URGENT_STOPS = (
    b"\n" + seal(Request.of(TAG_URGENT, "stop", ("0",)).body.encode("ascii")) + b"stop\n",
    b"\n" + seal(Request.of(TAG_URGENT, "stop", ("1",)).body.encode("ascii")),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class RetryPolicy:
    """When a request is repeated, and when the link is held for lost.

    The first repeat comes `first_s` after the request; each wait is `growth` times the one before; after `repeats_max`
    repeats and the wait that follows the last, the link is silent. A notice `garbled` brings a repeat forward at once,
    at most `hurried_max` times a request: such a repeat begins the present wait again, and neither lengthens it nor
    counts among `repeats_max`.
    """

    first_s: float = 0.12
    growth: float = 2.0
    repeats_max: int = 4
    hurried_max: int = 4

    def longest_s(self) -> float:
        """The longest time from a request to `LinkSilent` for a driver that is never late."""
        waits = [self.first_s * self.growth**i for i in range(self.repeats_max + 1)]
        return sum(waits) + self.hurried_max * max(waits)


class Answered(NamedTuple):
    """The outstanding request has its answer.

    `sent_s` is when it was first sent; with `repeats` > 0 it is not known which sending was carried out, so the pair of
    times then says nothing about the clocks.
    """

    request: Request
    answer: Answer
    sent_s: float
    received_s: float
    repeats: int


@dataclass(frozen=True, slots=True)
class UrgentAnswered:
    """An urgent stop has been carried out."""

    answer: Answer


@dataclass(frozen=True, slots=True)
class Noticed:
    """A notice; `missed` of them were lost just before it."""

    notice: Notice
    missed: int


class Sampled(NamedTuple):
    """A data line, or several that follow each other, `number` being the last one's; `missed` were lost just before.

    `again` tells that it is an old one sent anew on request.
    """

    block: SampleBlock
    number: int
    missed: int
    again: bool = False


@dataclass(frozen=True, slots=True)
class Dropped:
    """Something that came and cannot be used."""

    raw: bytes
    why: str


HostEvent = Answered | UrgentAnswered | Noticed | Sampled | Dropped


class ReadLines(NamedTuple):
    """The samples of right data lines that follow each other without a gap, and where the last of them ends."""

    first_number: int
    last_number: int
    end: int
    block: SampleBlock


DataReader = Callable[[bytes, int], ReadLines | None]
"""Reads packed data lines, each ended by LF, from a place of a text on, one at least; None where there stands none."""


@dataclass(slots=True)
class _Outstanding:
    request: Request
    line: bytes
    sent_s: float
    wait_s: float
    repeats: int = 0
    hurried: int = 0
    hurry: bool = False


@lru_cache(PREPARED_KEPT)
def _prepared(tag: int, word: str, args: tuple[str, ...]) -> tuple[Request, bytes]:
    """A request and its line, kept since nearly all are the same few hundred beats; as `HostLink.ask` raises."""
    request = Request.of(tag, word, args)
    request.values()
    line = seal(request.body.encode("ascii"))
    if len(line) > HOST_LINE_MAX:
        raise LinkMisuse(f"a line of {len(line)} bytes is longer than {HOST_LINE_MAX}: {request.body!r}")
    return request, line


class HostLink:
    """One host's end. `first_tag` (0 to 0xfe) is best drawn at random, so that a host that has come back is told apart.

    A device may still keep the same tag from an earlier host; it then answers from memory, or `no tag`. The answer to a
    host's second request is always fresh.

    `read_data`, where given, is asked first for the samples of lines that begin as a data line does; what it does not
    take is read as if it were not there. It must agree with `decode_data`.

    `due_at_s` is when `due` has something to say next; None while nothing is outstanding.
    """

    def __init__(
        self,
        first_tag: int,
        retry: RetryPolicy | None = None,
        *,
        read_data: DataReader | None = None,
    ) -> None:
        if not 0 <= first_tag < TAG_URGENT:
            raise LinkMisuse(f"the first tag {first_tag} is not in 0 to {TAG_URGENT - 1}")
        self._next_tag = first_tag
        self._retry = retry or RetryPolicy()
        self._read_data = read_data
        self._splitter = LineSplitter(DEVICE_LINE_MAX)
        self._outstanding: _Outstanding | None = None
        self.due_at_s: float | None = None
        self._next_notice: int | None = None
        self._next_data: int | None = None
        self._again: int | None = None
        self._again_lines_left = 0
        self._waiting: list[bytes] = []

    @property
    def outstanding(self) -> Request | None:
        """The request that has no answer yet."""
        return self._outstanding.request if self._outstanding else None

    def ask(self, word: str, *args: object, now_s: float) -> bytes:
        """The line of a new request, which is outstanding from now on.

        LinkBusy where another one is; FieldError where the word is unknown or the arguments are not as its table asks.
        """
        if self._outstanding is not None:
            raise LinkBusy(f"`{self._outstanding.request.body}` has no answer yet")
        if word not in WORDS:
            raise FieldError(word, wanted="a word of the protocol")
        request, line = _prepared(self._next_tag, word, tuple(map(print_field, args)))
        self._next_tag = (self._next_tag + 1) % TAG_URGENT
        wait_s = self._retry.first_s
        self.due_at_s = now_s + wait_s
        self._outstanding = _Outstanding(request, line, now_s, wait_s)
        if word == "again":
            self._again = int(request.args[0])
            self._again_lines_left = AGAIN_WITHIN_LINES
        return line

    @staticmethod
    def urgent_stop(category: int) -> bytes:
        """The bytes of a stop that may go out at any time, from any thread; for category 0 a bare `stop` follows."""
        return _URGENT_STOPS[category]

    def due(self, now_s: float) -> bytes | None:
        """The repeat to send now, if one is due.

        LinkSilent past the last repeat's wait; the request is then no longer outstanding, and whether it was carried
        out is not known. Call it after `receive`: an answer may have come while the host slept.
        """
        waiting = self._outstanding
        if waiting is None or self.due_at_s is None or now_s < self.due_at_s:
            return None
        if waiting.hurry:
            waiting.hurry = False
            waiting.hurried += 1
        elif waiting.repeats < self._retry.repeats_max:
            waiting.repeats += 1
            waiting.wait_s *= self._retry.growth
        else:
            request = self.abandon()
            sendings = waiting.repeats + waiting.hurried
            raise LinkSilent(tag=request.tag, word=request.word, sent_s=waiting.sent_s, repeats=sendings)
        self.due_at_s = now_s + waiting.wait_s
        return waiting.line

    def abandon(self) -> Request:
        """Give up the outstanding request, whose answer will count as stale; LinkMisuse where there is none."""
        if self._outstanding is None:
            raise LinkMisuse("no request is outstanding")
        request = self._outstanding.request
        self._outstanding = self.due_at_s = None
        return request

    def receive(self, data: bytes, now_s: float, *, samples_wait: bool = False) -> list[HostEvent]:
        """What `data` brings, in order; never raises.

        With `samples_wait` data lines are kept back, to be read together: until something else comes than the answer
        to a beat, until WAITING_MAX are there, or for `samples`. It is for a line on which nothing is lost, since what
        is wrong with a line that waits is found late.
        """
        events: list[HostEvent] = []
        for line in self._splitter.feed(data):
            if samples_wait and self._keep_back(line):
                continue
            if self._waiting and not self._answers_beat(line):
                events += self.samples()
            events.append(self._judge(line, now_s))
        return events

    def _keep_back(self, line: bytes | Overlong) -> bool:
        """Have a line wait that is the data line due next; False where it is not, or the samples must not wait."""
        due = self._next_data
        if due is None or self._read_data is None or self._again is not None or len(self._waiting) >= WAITING_MAX:
            return False
        if isinstance(line, Overlong) or not line.startswith(_DATA_HEADS[due]):
            return False
        self._waiting.append(line)
        self._next_data = (due + 1) % 256
        return True

    def _answers_beat(self, line: bytes | Overlong) -> bool:
        waiting = self._outstanding
        if waiting is None or waiting.request.word != "beat" or isinstance(line, Overlong):
            return False
        return line[:2] == waiting.line[:2]

    def samples(self) -> list[HostEvent]:
        """What was kept back, in order."""
        lines, self._waiting = self._waiting, []
        if not lines or self._next_data is None or self._read_data is None:
            return []
        self._next_data = (self._next_data - len(lines)) % 256
        text = b"\n".join(lines) + b"\n"
        events: list[HostEvent] = []
        begin = 0
        while begin < len(text):
            found = self._read_data(text, begin)
            if found is None:
                end = text.index(b"\n", begin)
                events.append(self._judge_message(text[begin:end], 0.0))
                begin = end + 1
            else:
                events.append(self._placed(found.first_number, found.last_number, found.block))
                begin = found.end
        return events

    def _judge(self, line: bytes | Overlong, now_s: float) -> HostEvent:
        if isinstance(line, Overlong):
            return Dropped(b"", Flaw.OVERLONG)
        if self._read_data is not None and line[:1] == b"D":
            found = self._read_data(line + b"\n", 0)
            if found is not None:
                return self._placed(found.first_number, found.last_number, found.block)
        return self._judge_message(line, now_s)

    def _judge_message(self, line: bytes, now_s: float) -> HostEvent:
        message = parse_device_line(line)
        match message:
            case Answer():
                return self._answered(message, line, now_s)
            case Data():
                return self._sampled(message, line)
            case Notice():
                return self._noticed(message, now_s)
            case Garbled():
                return Dropped(message.raw, message.why)

    def _answered(self, answer: Answer, line: bytes, now_s: float) -> HostEvent:
        if answer.tag == TAG_URGENT:
            return UrgentAnswered(answer)
        waiting = self._outstanding
        if waiting is None or waiting.request.tag != answer.tag:
            return Dropped(line, "stale answer")
        self._outstanding = self.due_at_s = None
        if not answer.ok and waiting.request.word == "again":
            self._again = None
        return Answered(waiting.request, answer, waiting.sent_s, now_s, waiting.repeats + waiting.hurried)

    def _noticed(self, notice: Notice, now_s: float) -> Noticed:
        if notice.word == "boot":  # both counts begin again
            self._next_notice = self._next_data = None
        missed = 0 if self._next_notice is None else (notice.number - self._next_notice) % 256
        self._next_notice = (notice.number + 1) % 256
        waiting = self._outstanding
        if notice.word == "garbled" and waiting and waiting.hurried < self._retry.hurried_max:
            waiting.hurry = True
            self.due_at_s = now_s
        return Noticed(notice, missed)

    def _sampled(self, data: Data, line: bytes) -> HostEvent:
        """The line's samples. One that cannot be decoded counts as lost, so it does not move the running number."""
        try:
            block = decode_data(data.body)
        except SampleFault as fault:
            return Dropped(line, fault.why)
        return self._placed(data.number, data.number, block)

    def _placed(self, first: int, last: int, block: SampleBlock) -> Sampled:
        """The samples of data lines by the numbers of the first and the last."""
        if self._is_again(first):
            self._again = None
            return Sampled(block, first, 0, again=True)
        missed = 0 if self._next_data is None else (first - self._next_data) % 256
        self._next_data = (last + 1) % 256
        return Sampled(block, last, missed)

    def _is_again(self, number: int) -> bool:
        """Whether a data line of this number is the old one asked for: never where its number is the next one due."""
        if self._again == number != self._next_data:
            return True
        self._again_lines_left -= 1
        if self._again_lines_left <= 0:
            self._again = None
        return False
