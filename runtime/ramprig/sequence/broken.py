"""What an error is called that broke off what was being recorded: for the end in `run.json`."""

from __future__ import annotations

from ramprig.errors import LinkError, RamprigError, RecordError, Refused, StoppedByUser, Tripped
from ramprig.record.manifest import RunEnd

from .outcome import Verdict

_VERDICTS: tuple[tuple[type[RamprigError], Verdict], ...] = (
    (StoppedByUser, Verdict.STOPPED),
    (RecordError, Verdict.NOT_RECORDED),
    (LinkError, Verdict.LINK_LOST),
    (Tripped, Verdict.TRIPPED),
    (Refused, Verdict.REFUSED),
)


def broken_by(error: BaseException) -> RunEnd:
    """The end by an error: a known kind by its verdict, anything else as a fault of the program."""
    for kind, verdict in _VERDICTS:
        if isinstance(error, kind):
            return RunEnd(verdict=verdict.word, stop_reason=str(error))
    return RunEnd(verdict="broken off", stop_reason=f"{type(error).__name__}: {error}")
