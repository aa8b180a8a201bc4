"""What holds of every line a board sends, whatever is being checked: its form, its fields, its numbers, its coding."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

from ramprig_link.faults import FieldError, SampleFault
from ramprig_link.fields import read_fields, read_i32, read_u32
from ramprig_link.messages import Answer, Data, FromDevice, Garbled, Notice, parse_device_line
from ramprig_link.samples import Encoder, SampleBlock, decode_data
from ramprig_link.words import DEVICE_LINE_MAX, NOTICES, REASONS, WORDS, Kind

FAULTS_MAX = 200
"""More of them say nothing new."""

CLAUSES = (
    *("LINE-2", "LINE-3", "LINE-4", "LINE-5", "CHECK-1", "FIELD-1", "KIND-1", "KIND-3", "TAG-2", "NOTE-1"),
    *("DATA-1", "DATA-2", "DATA-3", "DATA-4", "DATA-5", "DATA-6", "DATA-7", "DATA-8", "DATA-10"),
)
"""What is looked at in every line."""


@dataclass(frozen=True, slots=True)
class Fault:
    """Something a clause does not allow: the clauses, and what was found."""

    clauses: tuple[str, ...]
    text: str


class LineRules:
    """Judges the lines of one board in their order; `faults` has what was wrong.

    `axes` and `servos` are how many it has, once known: then the fields of `state` are counted too.
    """

    def __init__(self) -> None:
        self.faults: list[Fault] = []
        self.axes: int | None = None
        self.servos = 0
        self.awaited: Counter[int] = Counter()
        """Sendings without an answer, by tag."""
        self.asked: dict[int, str] = {}
        """The word last sent under each tag."""
        self.resent: set[int] = set()
        """Data lines that `again` asked for."""
        self._notice: int | None = None
        self._notice_tick: int | None = None
        self._data: int | None = None
        self._encoder: Encoder | None = None
        self._logged: tuple[int, int] | None = None

    def _fault(self, clauses: str, text: str) -> None:
        if len(self.faults) < FAULTS_MAX:
            self.faults.append(Fault(tuple(clauses.split()), text))

    def sent(self, tag: int, word: str) -> None:
        """A request has been sent, for the first time or again."""
        self.awaited[tag] += 1
        self.asked[tag] = word

    def logging_begins(self, period: int, mask: int) -> None:
        """A new packed logging has been granted: its coding begins anew (DATA-8)."""
        self._encoder = Encoder(mask, period) if period else None

    def overlong(self, length: int) -> None:
        """A line longer than it may be."""
        self._fault("LINE-5", f"a line of {length} bytes; at most {DEVICE_LINE_MAX} are allowed")

    def judge(self, line: bytes, had_cr: bool) -> FromDevice:
        """The line, given without its LF, as a message."""
        if had_cr:
            self._fault("LINE-2", f"a CR before LF, which a sender must not send: {line!r}")
        message = parse_device_line(line)
        match message:
            case Garbled():
                clauses = {"BYTE": "LINE-3", "CHECK": "LINE-2 CHECK-1", "KIND": "KIND-1", "FORM": "LINE-4"}
                self._fault(clauses[message.why.name], f"{line!r} cannot be used: {message.why}")
            case Answer():
                self._answer(message)
            case Notice():
                self._noticed(message)
            case Data():
                self._sampled(message)
        return message

    def _answer(self, answer: Answer) -> None:
        what = f"the answer {answer.tag:02x} {'ok' if answer.ok else 'no'} {answer.tick} {' '.join(answer.fields)}"
        if self.awaited[answer.tag] == 0:
            self._fault("TAG-2", f"{what}: nothing asked for it, or it was answered already")
            return
        self.awaited[answer.tag] -= 1
        word = self.asked[answer.tag]
        if not answer.ok:
            if answer.reason not in REASONS:
                self._fault("BAD-5", f"{what}: '{answer.reason}' is no reason of version 1")
            return
        if not word:  # a check that looks for itself
            return
        if word not in WORDS:
            self._fault("BAD-5", f"{what}: there is no word '{word}'")
            return
        self._fields(what, word, answer.fields)

    def _fields(self, what: str, word: str, texts: Sequence[str]) -> None:
        fields = WORDS[word].fields
        try:
            read_fields(fields, texts)
            if word == "state" and self.axes is not None:
                for text in _groups(texts, self.axes, self.servos):
                    read_i32(text)
        except FieldError as error:
            clause = {"state": "STATE-1", "who": "WHO-1", "beat": "BEAT-1", "why": "WHY-1", "counters": "COUNT-1"}
            self._fault(f"FIELD-1 {clause.get(word, '')}", f"{what}: {error}")
            return
        for field, text in zip(fields, texts, strict=False):
            if field.kind is Kind.WORD and text not in field.choices:
                self._fault("FIELD-4", f"{what}: '{text}' is not one of {', '.join(field.choices)}")

    def _noticed(self, notice: Notice) -> None:
        if notice.word == "boot":
            self._notice = self._notice_tick = self._data = self._encoder = None
            self.awaited.clear()
            if notice.number != 0:
                self._fault("KIND-1 RUN-1", f"the notice `boot` has number {notice.number:02x}, not 00")
        if self._notice is not None and notice.number != self._notice:
            self._fault("KIND-1 NOTE-1", f"notice {notice.number:02x} came where {self._notice:02x} was next")
        self._notice = (notice.number + 1) % 256
        if self._notice_tick is not None and (notice.tick - self._notice_tick) % (1 << 32) >= 1 << 31:
            self._fault("NOTE-1", f"a notice of tick {notice.tick} came after one of tick {self._notice_tick}")
        self._notice_tick = notice.tick
        try:
            if notice.word in NOTICES:
                read_fields(NOTICES[notice.word].fields, notice.fields)
        except FieldError as error:
            self._fault("FIELD-1", f"the notice {notice.word} {' '.join(notice.fields)}: {error}")

    def _sampled(self, data: Data) -> None:
        if data.number in self.resent:
            self.resent.discard(data.number)
            return
        lost = self._data is not None and data.number != self._data
        if lost:  # dropped by the board, and counted, or lost on the way: the checks account for it
            self._encoder = None
        self._data = (data.number + 1) % 256
        try:
            block = decode_data(data.body)
        except SampleFault as fault:
            self._encoder = None
            self._fault("DATA-1 DATA-10" if " " in data.body else "DATA-2 DATA-10", f"data line: {fault.why}")
            return
        if " " not in data.body and self._encoder is not None:
            self._coded(data.body, block, self._encoder)

    def _coded(self, payload: str, block: SampleBlock, encoder: Encoder) -> None:
        """DATA-3 to DATA-8 fix a line to a bit, so the same samples coded here must give the same payload."""
        made = None
        for i in range(block.rows):
            tick = (block.first_tick + i * block.period) & 0xFFFFFFFF
            made = encoder.add(tick, [column[i] for column in block.columns])
        if encoder.oldest_tick is not None:
            made = encoder.flush()
        if made != payload:
            self._encoder = None
            self._fault("DATA-3 DATA-4 DATA-5 DATA-6 DATA-7 DATA-8", f"{block.rows} samples are coded as {payload}")


def _groups(texts: Sequence[str], axes: int, servos: int) -> Sequence[str]:
    """The fields of `state` behind the first five; raises FieldError where there are too few."""
    groups = texts[5 : 5 + 3 * axes + servos]
    if len(groups) < 3 * axes + servos:
        raise FieldError(" ".join(texts), wanted=f"long enough for {axes} axes and {servos} servos")
    for text in groups[3 * axes :]:
        read_u32(text)
    return groups
