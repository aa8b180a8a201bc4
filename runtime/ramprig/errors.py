"""Every exception ramprig raises on purpose, in branches by who must act.

`RamprigError` is the root; anything else that leaves a public function is a bug. Each branch carries its facts as
attributes, so that the shell, the report and the exit code need not read the message.
"""

from __future__ import annotations

from dataclasses import dataclass


class RamprigError(Exception):
    """Root of all exceptions that ramprig raises on purpose."""

    exit_code = 2


@dataclass(frozen=True, slots=True)
class Place:
    """A place in a user's text: `file` as the user named it, `line` and `column` counted from 1."""

    file: str
    line: int
    column: int

    def __str__(self) -> str:
        return f"{self.file}:{self.line}:{self.column}"


class FileError(RamprigError):
    """The user's file must be mended: says where, what was found and what would be right.

    `place` is where, `text` the whole offending line without its end, `found` what stands there and `wanted` what
    would be right. `str()` shows the place, the sentence, the line itself (a piece of a long one) and a caret under
    the column.
    """

    def __init__(self, found: str, *, wanted: str = "", place: Place | None = None, text: str | None = None) -> None:
        self.found = found
        self.wanted = wanted
        self.place = place
        self.text = text
        super().__init__(self._render())

    def _render(self) -> str:
        sentence = f"{self.found}; {self.wanted}" if self.wanted else self.found
        if self.place is None:
            return sentence
        if self.text is None:
            return f"{self.place}: {sentence}"
        excerpt, column = _excerpt(self.text, self.place.column)
        return f"{self.place}: {sentence}\n    {excerpt}\n    {' ' * (column - 1)}^"


EXCERPT_MAX = 160
"""Longest piece of a user's line that a message shows, in characters."""


def _excerpt(text: str, column: int) -> tuple[str, int]:
    """The part of `text` around `column` that a message shows, and the column's place in it."""
    if len(text) <= EXCERPT_MAX:
        return text, column
    start = max(0, column - 1 - EXCERPT_MAX // 2)
    head = "..." if start else ""
    tail = "..." if start + EXCERPT_MAX < len(text) else ""
    return f"{head}{text[start : start + EXCERPT_MAX]}{tail}", column - start + len(head)


class UsageError(RamprigError):
    """The command line or a typed command must be mended."""


class PackageMissing(UsageError):
    """A package that only some commands need is not installed: `package` is its name, `purpose` what it is for."""

    def __init__(self, package: str, *, purpose: str, extra: str | None = None) -> None:
        self.package = package
        self.purpose = purpose
        how = f"pip install {package}" + (f", or pip install 'ramprig[{extra}]'" if extra else "")
        super().__init__(f"{purpose} needs the Python package {package}, which is not installed; get it with: {how}")


class LinkError(RamprigError):
    """The link to the device must be seen to."""

    exit_code = 4


class PortNotFound(LinkError):
    """No port, or more than one, matches what was asked for; the message lists what is there."""

    exit_code = 2


class PortUnavailable(LinkError):
    """The port exists and could not be opened; the message says why and what to do."""


class LinkLost(LinkError):
    """The link stopped working: unplugged, closed by the far end, or silent past every retry. `reason` says which."""

    def __init__(self, reason: str) -> None:
        self.reason = reason
        super().__init__(reason)


class WrongDevice(LinkError):
    """Another board, protocol version or set of limits than the bench file names answered."""


class Refused(RamprigError):
    """The device answered `no`: `word` is the request, `reason` the device's reason word."""

    exit_code = 3

    def __init__(self, word: str, reason: str, explanation: str) -> None:
        self.word = word
        self.reason = reason
        super().__init__(f"the device refused '{word}': {reason} ({explanation})")


class Tripped(RamprigError):
    """The device tripped and is off: `trip` is the trip's word, `tick` when it happened."""

    exit_code = 3

    def __init__(self, trip: str, tick: int, explanation: str) -> None:
        self.trip = trip
        self.tick = tick
        super().__init__(explanation)


class StoppedByUser(RamprigError):
    """The user asked for a stop and it was carried out."""

    exit_code = 5


class RecordError(RamprigError):
    """The log cannot be written (disk full, folder gone): the motor is stopped before this is raised."""


class Bug(RamprigError):
    """ramprig broke a promise of its own; please report it."""
