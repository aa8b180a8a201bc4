"""The grammar of one typed line: a form such as `jog MOTOR DUTY for TIME`, matched against words and completed.

In a form a word in small letters stands for itself. MOTOR, SERVO, NAME and WORD take one word each; DUTY, TIME and
ANGLE take a quantity with its unit, up to the form's next small word or its end; TEXT and FILE take the rest of the
line as it was typed.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, field

from ramprig.quantity import ANGLE, DURATION, DUTY, Kind

QUANTITIES: dict[str, Kind] = {"DUTY": DUTY, "TIME": DURATION, "ANGLE": ANGLE}
REST = ("TEXT", "FILE")
_NUMBER = re.compile(r"[-+]?[0-9]+(?:\.[0-9]*)?")


@dataclass(frozen=True, slots=True)
class Token:
    """One word of a line and where it begins."""

    text: str
    start: int


def tokens_of(line: str) -> list[Token]:
    """The words of a line, parted by blanks."""
    return [Token(found.group(), found.start()) for found in re.finditer(r"\S+", line)]


@dataclass(frozen=True, slots=True)
class Form:
    """One way to write a command; `parts` are its small words and slots."""

    text: str
    parts: tuple[str, ...] = field(init=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "parts", tuple(self.text.split()))

    @property
    def literals(self) -> int:
        """How many of its parts stand for themselves: of two forms that match, the one with more is meant."""
        return sum(not part.isupper() for part in self.parts)

    def match(self, line: str) -> dict[str, str] | None:
        """The texts of the slots, or None where the line is not of this form."""
        taken = _take(self.parts, tokens_of(line), line, partial=False)
        return None if taken is None else taken.slots

    def next_part(self, line: str) -> tuple[str, str] | None:
        """The part that may stand at the end of a line still being typed, and, in a quantity, its number so far.

        `line` is what was typed before the word at the cursor. None where the line is not the begin of this form.
        """
        taken = _take(self.parts, tokens_of(line), line, partial=True)
        return None if taken is None else (taken.next_part, taken.number)

    def literal_after(self, part: str) -> str | None:
        """The small word that follows a slot."""
        place = self.parts.index(part) + 1
        return self.parts[place] if place < len(self.parts) else None


@dataclass(slots=True)
class _Taken:
    slots: dict[str, str]
    next_part: str = ""
    number: str = ""


def _take(parts: Sequence[str], tokens: Sequence[Token], line: str, *, partial: bool) -> _Taken | None:
    """Walk the parts along the tokens; with `partial` the tokens may end early, and the part due next is told."""
    taken = _Taken({})
    at = 0
    for place, part in enumerate(parts):
        if at == len(tokens):
            taken.next_part = part
            return taken if partial else None
        if part in REST:
            taken.slots[part] = line[tokens[at].start :].strip()
            taken.next_part = part
            return taken
        if part in QUANTITIES:
            end = _quantity_end(parts[place + 1 : place + 2], tokens, at)
            taken.slots[part] = " ".join(token.text for token in tokens[at:end])
            if partial and end == len(tokens):
                taken.next_part, taken.number = part, taken.slots[part]
                return taken
            at = end
        elif part.isupper() or tokens[at].text == part:
            taken.slots[part] = tokens[at].text
            at += 1
        else:
            return None
    return taken if at == len(tokens) and not partial else None


def _quantity_end(following: Sequence[str], tokens: Sequence[Token], at: int) -> int:
    """Where the quantity that begins at token `at` ends: at the form's next small word, or with the line."""
    for place in range(at + 1, len(tokens)):
        if tokens[place].text in following:
            return place
    return len(tokens)


def is_bare_number(text: str) -> bool:
    """Whether a quantity typed so far lacks its unit."""
    return _NUMBER.fullmatch(text) is not None
