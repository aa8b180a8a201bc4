"""The device's end of the line as a state machine: exactly once, refusals below the controller, running numbers.

The controller sees only requests that are new and well formed; it answers each with `ok` or `no` before it takes the
next.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from .check import seal
from .faults import FieldError, LinkMisuse
from .fields import print_field
from .lines import LineSplitter, Overlong
from .messages import Bare, Garbled, Request, parse_host_line
from .words import DEVICE_LINE_MAX, GARBLED_REST_TICKS, HOST_LINE_MAX, NOTICES, WORDS, Reason

_TICK_MASK = 2**32 - 1
URGENT_WORD = "stop"


@dataclass(frozen=True, slots=True)
class Reply:
    """A line to send as it is; `renews` tells whether what it answers renews the lease (SPEC.md LEASE-1)."""

    line: bytes
    renews: bool


Incoming = Request | Bare | Reply


@dataclass(slots=True)
class Counts:
    """Since boot: valid lines (bare ones and repeats too), garbled ones, the overlong among them, repeats answered."""

    lines: int = 0
    garbled: int = 0
    overlong: int = 0
    repeats: int = 0


@dataclass(frozen=True, slots=True)
class _Kept:
    """The last request that was not urgent, and its answer (TAG-3)."""

    tag: int
    body: str
    answer: bytes


class DeviceLink:
    """Lines in, requests out; answers, notices and data lines made and numbered."""

    def __init__(self) -> None:
        self.counts = Counts()
        self._splitter = LineSplitter(HOST_LINE_MAX)
        self._kept: _Kept | None = None
        self._open: Request | None = None
        self._next_notice = 0
        self._next_data = 0
        self._untold = False  # a garbled line has not been told of yet
        self._told_tick: int | None = None

    def receive(self, data: bytes, tick: int) -> Iterator[Incoming]:
        """What `data` brings, in order, as received in tick `tick`.

        To be taken up item by item: a Request must be answered by `ok` or `no` before the next item is asked for, else
        LinkMisuse. What is left of an iterator that is not used up is lost.
        """
        for line in self._splitter.feed(data):
            if self._open is not None:
                raise LinkMisuse(f"the request {self._open.body!r} has not been answered")
            incoming = self._judge(line, tick)
            if incoming is not None:
                yield incoming
        if self._open is not None:
            raise LinkMisuse(f"the request {self._open.body!r} has not been answered")

    def _judge(self, line: bytes | Overlong, tick: int) -> Incoming | None:
        """What one line is to the controller; None for one that is only counted."""
        message = None if isinstance(line, Overlong) else parse_host_line(line)
        if message is None or isinstance(message, Garbled):
            self.counts.garbled += 1
            self.counts.overlong += message is None
            self._untold = True
            return None
        self.counts.lines += 1
        return message if isinstance(message, Bare) else self._admit(message, tick)

    def _admit(self, request: Request, tick: int) -> Incoming:
        """The request where it is new and well formed, else the line that answers it."""
        if request.urgent:
            if request.word != URGENT_WORD:
                return Reply(_refusal(request, tick, Reason.TAG), renews=True)
        elif self._kept is not None and request.tag == self._kept.tag:
            if request.body != self._kept.body:
                return Reply(_refusal(request, tick, Reason.TAG), renews=True)
            self.counts.repeats += 1
            return Reply(self._kept.answer, renews=False)
        if request.word not in WORDS:
            return Reply(self._kept_refusal(request, tick, Reason.WORD), renews=True)
        try:
            request.values()
        except FieldError:
            return Reply(self._kept_refusal(request, tick, Reason.ARGS), renews=True)
        self._open = request
        return request

    def _kept_refusal(self, request: Request, tick: int, reason: Reason) -> bytes:
        return self._keep(request, _refusal(request, tick, reason))

    def ok(self, request: Request, tick: int, *fields: object) -> bytes:
        """The line that grants `request`, kept for its repeats; LinkMisuse where it is not the one to be answered."""
        return self._close(request, _line(f"{request.tag:02x} ok {tick}", fields))

    def no(self, request: Request, tick: int, reason: Reason) -> bytes:
        """The line that refuses `request`, kept for its repeats; LinkMisuse where it is not the one to be answered."""
        return self._close(request, _refusal(request, tick, reason))

    def _close(self, request: Request, answer: bytes) -> bytes:
        if request is not self._open:
            raise LinkMisuse(f"the request {request.body!r} is not the one to be answered")
        self._open = None
        return self._keep(request, answer)

    def _keep(self, request: Request, answer: bytes) -> bytes:
        if not request.urgent:
            self._kept = _Kept(request.tag, request.body, answer)
        return answer

    def notice(self, word: str, tick: int, *fields: object) -> bytes:
        """The line of the next notice; its number is used up whether or not it is sent."""
        if word not in NOTICES:
            raise LinkMisuse(f"there is no notice {word!r}")
        line = _line(f"N{self._next_notice:02x} {word} {tick}", fields)
        self._next_notice = (self._next_notice + 1) % 256
        return line

    def data(self, payload: str) -> tuple[int, bytes]:
        """Number and line of the next data line; the number is used up whether or not the line is sent."""
        number = self._next_data
        line = _line(f"D{number:02x} {payload}", ())
        self._next_data = (number + 1) % 256
        return number, line

    def garbled_news(self, tick: int) -> bytes | None:
        """The notice `garbled` where one is due at `tick`: something is untold and the rest since the last is over."""
        if not self._untold:
            return None
        if self._told_tick is not None and (tick - self._told_tick) & _TICK_MASK < GARBLED_REST_TICKS:
            return None
        self._untold = False
        self._told_tick = tick
        return self.notice("garbled", tick, self.counts.garbled)


def _refusal(request: Request, tick: int, reason: Reason) -> bytes:
    return seal(f"{request.tag:02x} no {tick} {reason}".encode("ascii"))


def _line(head: str, fields: tuple[object, ...]) -> bytes:
    """The sealed line; LinkMisuse where it is longer than a device's line may be."""
    line = seal(" ".join((head, *map(print_field, fields))).encode("ascii"))
    if len(line) > DEVICE_LINE_MAX:
        raise LinkMisuse(f"a line of {len(line)} bytes is longer than {DEVICE_LINE_MAX}: {head!r}")
    return line
