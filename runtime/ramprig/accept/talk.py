"""One line at a time with a board under test: sends right and wrong lines, keeps what comes, judges its form.

Unlike a session it repeats nothing in silence, hides nothing, and can say what no host should.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable
from dataclasses import dataclass

from ramprig.accept.invariants import Witness
from ramprig.accept.lines import LineRules
from ramprig.errors import LinkLost, StoppedByUser
from ramprig.port.base import Port, at_port
from ramprig.session.ticks import TickCounter
from ramprig_link.check import seal
from ramprig_link.host import HostLink
from ramprig_link.lines import LineSplitter, Overlong
from ramprig_link.messages import Answer, Data, FromDevice, Garbled, Notice, Request
from ramprig_link.words import DEVICE_LINE_MAX, TAG_URGENT

ANSWER_S = 0.6
"""A board has 20 ticks to begin its answer, a line under way takes 17 ms at 115200 baud, and a USB adapter 16 ms."""
TRIES = 3
"""So often is a line sent that a check does not want to see lost; each repeat is counted in `repeats`."""
READ_S = 0.02
GRAIN_S = 1e-6
"""A wait with less than this left is over: a virtual clock does not move by parts of a nanosecond."""
TRACE_MAX = 50_000
"""Lines kept for the report."""
HEARD_MAX = 4000
"""Messages kept; a check looks at far fewer."""


@dataclass(frozen=True, slots=True)
class Heard:
    """A line that came: when, by the host's clock, and at which unwrapped tick of the device (None for data)."""

    host_s: float
    message: FromDevice
    tick: int | None


class Talk:
    """The host's end for one acceptance. `rules` judges each line; `witness`, where set, is told of all.

    Every use may raise LinkLost, and StoppedByUser after `panic`.
    """

    def __init__(self, port: Port) -> None:
        self.port = port
        self.clock = port.clock
        self.rules = LineRules()
        self.witness: Witness | None = None
        self.ticks = TickCounter()
        self.tick_s = 0.001
        self.beat_s: float | None = None
        """While set, `listen` asks `beat` so often."""
        self.repeats = 0
        self.boots = 0
        self.bytes_heard = 0
        self.echoes = 0
        """Lines that came back as they were sent."""
        self.worst_answer_s = 0.0
        self.heard: deque[Heard] = deque(maxlen=HEARD_MAX)
        self.heard_count = 0
        self.trace: deque[tuple[float, str, bytes]] = deque(maxlen=TRACE_MAX)
        self._splitter = LineSplitter(DEVICE_LINE_MAX)
        self._last_sent = b""
        self._tag = 0x0F
        self._spoken_s = 0.0
        self._asked_to_stop = False
        self._seen: tuple[float, int] | None = None

    # ---- speaking --------------------------------------------------------------------------------------------------

    def raw(self, data: bytes) -> None:
        """Send bytes as they are."""
        self._check_stop()
        self.trace.append((self.clock.now(), ">", data))
        self._last_sent = data
        self.port.write(data)

    def say(self, body: str, *, tag: int | None = None) -> int:
        """Send a request and do not wait; under the next tag of 10 to 9f where none is given. Returns the tag."""
        if tag is None:
            self._tag = tag = 0x10 + (self._tag - 0x0F) % 0x90
        word, *arguments = body.split(" ")
        self.rules.sent(tag, word)
        line = f"{tag:02x} {body}"
        if self.witness is not None:
            self.witness.sent(Request(tag, word, tuple(arguments), line))
        self.raw(seal(line.encode("latin-1")))
        self._spoken_s = self.clock.now()
        return tag

    def repeat(self, body: str, tag: int) -> None:
        """Send a line once more, under the same tag."""
        self.rules.sent(tag, body.split(" ")[0])
        self.raw(seal(f"{tag:02x} {body}".encode("latin-1")))

    def ask(self, body: str, *, tag: int | None = None) -> Answer:
        """The answer to a new request, which is repeated on silence. Raises LinkLost where none comes at all."""
        since = self.heard_count
        begun_s = self.clock.now()
        tag = self.say(body, tag=tag)
        for _ in range(TRIES):
            heard = self.answer(tag, since)
            if heard is not None:
                if self.repeats == 0:
                    self.worst_answer_s = max(self.worst_answer_s, heard.host_s - begun_s)
                assert isinstance(heard.message, Answer)
                return heard.message
            if tag == TAG_URGENT:
                break
            self.repeats += 1
            self.repeat(body, tag)
        raise LinkLost(f"{at_port(self.port.name)}no answer to `{body}`, sent {TRIES} times in {TRIES * ANSWER_S:g} s")

    def panic(self, category: int) -> bool:
        """Send a stop from a signal handler; the next use raises StoppedByUser."""
        self._asked_to_stop = True
        for _ in range(1 if category else 2):  # a category 0 stop is sent with and without a check
            self.rules.sent(TAG_URGENT, "stop")
        return self.port.urgent(HostLink.urgent_stop(category))

    def let_go(self) -> None:
        """Forget a stop asked for, so that the limits can still be put back."""
        self._asked_to_stop = False

    def _check_stop(self) -> None:
        if self._asked_to_stop:
            raise StoppedByUser("Stopped by the user.")

    # ---- listening -------------------------------------------------------------------------------------------------

    def answer(self, tag: int, since: int, timeout_s: float = ANSWER_S) -> Heard | None:
        """The first answer under this tag among the messages from number `since` on; None where none comes."""
        return self.wait(lambda m: isinstance(m, Answer) and m.tag == tag, since, timeout_s)

    def notice(self, word: str, since: int, timeout_s: float = ANSWER_S) -> Heard | None:
        """The first notice of this word from message `since` on; None where none comes in time. Beats go on."""
        until_s = self.clock.now() + timeout_s
        while True:
            heard = self.wait(lambda m: isinstance(m, Notice) and m.word == word, since, 0.0)
            left_s = until_s - self.clock.now()
            if heard is not None or left_s <= GRAIN_S:
                return heard
            self.listen(min(left_s, READ_S))

    def wait(self, wanted: Callable[[FromDevice], bool], since: int, timeout_s: float) -> Heard | None:
        """The first wanted message from number `since` on, heard already or within `timeout_s`."""
        until_s = self.clock.now() + timeout_s
        while True:
            for heard in self.since(since):
                if wanted(heard.message):
                    return heard
            left_s = until_s - self.clock.now()
            if left_s <= GRAIN_S:
                return None
            self._read(min(left_s, READ_S))

    def since(self, count: int) -> list[Heard]:
        """The messages from number `count` on."""
        new = min(self.heard_count - count, len(self.heard))
        return [self.heard[i] for i in range(len(self.heard) - new, len(self.heard))] if new > 0 else []

    def notices(self, since: int, word: str | None = None) -> list[tuple[int, Notice]]:
        """The notices from message `since` on, of one word where it is given, each with its unwrapped tick."""
        found = [(h.tick or 0, h.message) for h in self.since(since) if isinstance(h.message, Notice)]
        return [(tick, notice) for tick, notice in found if word in (None, notice.word)]

    def listen(self, duration_s: float) -> None:
        """Let time pass, with beats where `beat_s` asks for them."""
        until_s = self.clock.now() + duration_s
        while True:
            now_s = self.clock.now()
            if until_s - now_s <= GRAIN_S:
                return
            if self.beat_s is not None and now_s - self._spoken_s >= self.beat_s:
                self.ask("beat")
                continue
            self._read(min(until_s - now_s, READ_S))

    def listen_ticks(self, ticks: int) -> None:
        """As `listen`, in ticks of the device."""
        self.listen(ticks * self.tick_s)

    def until_tick(self, tick: int, bound_s: float = 90.0) -> None:
        """Listen until the device has passed this unwrapped tick, by its answers; at most `bound_s`."""
        until_s = self.clock.now() + bound_s
        while self.tick_now() <= tick and self.clock.now() < until_s:
            self.listen(max(self.tick_s, min(0.1, (tick - self.tick_now()) * self.tick_s)))

    def tick_now(self) -> int:
        """The device's tick about now, from the last line that told one."""
        if self._seen is None:
            return 0
        host_s, tick = self._seen
        return tick + round((self.clock.now() - host_s) / self.tick_s)

    def _read(self, timeout_s: float) -> None:
        self._check_stop()
        data = self.port.read(timeout_s)
        if not data:
            return
        self.bytes_heard += len(data)
        now_s = self.clock.now()
        for piece in data.splitlines(keepends=True) if b"\r" in data else (data,):
            for line in self._splitter.feed(piece):
                self._hear(line, now_s, had_cr=piece.endswith(b"\r\n"))

    def _hear(self, line: bytes | Overlong, now_s: float, *, had_cr: bool) -> None:
        if isinstance(line, Overlong):
            self.rules.overlong(line.length)
            return
        self.trace.append((now_s, "<", line + b"\n"))
        self.echoes += line + b"\n" == self._last_sent
        message = self.rules.judge(line, had_cr)
        tick = None
        if isinstance(message, Notice) and message.word == "boot":
            self.boots += 1
            self.ticks.restart()
        if isinstance(message, Answer | Notice):
            tick = self.ticks.see(message.tick)
            if self._seen is None or tick >= self._seen[1] or isinstance(message, Notice):
                self._seen = (now_s, tick)
        if self.witness is not None and not isinstance(message, Garbled):
            self.witness.hear(message)
        self.heard.append(Heard(now_s, message, tick))
        self.heard_count += 1

    def data_lines(self, since: int) -> list[Data]:
        """The data lines from message `since` on."""
        return [heard.message for heard in self.since(since) if isinstance(heard.message, Data)]
