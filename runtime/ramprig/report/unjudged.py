"""What a run never came to judge: the expectations of its sequence that no judgement of the run names."""

from __future__ import annotations

from collections.abc import Iterator

from ramprig.errors import FileError, RecordError, UsageError
from ramprig.sequence.compile import compile_plan
from ramprig.sequence.kept import kept_sequence
from ramprig.sequence.plan import Branches, Cycles, Judge, Loop, Part, Series

from .facts import UNDER_WAY, Expectation, Facts


def unjudged(facts: Facts) -> tuple[list[Expectation], str]:
    """These expectations in the order of the sequence, and why they cannot be told where that is so, else empty.

    They are read from the copies in the run folder; a run without a sequence has none.
    """
    roles = {entry.get("role") for entry in facts.manifest.get("inputs") or []}
    if "sequence" not in roles:
        return [], ""
    if facts.bench is None:
        return [], facts.bench_trouble
    try:
        plan = compile_plan(kept_sequence(facts.folder, facts.manifest), facts.bench, tick_us=facts.tick_us)
    except (FileError, RecordError, UsageError) as error:
        return [], f"its copy of the sequence cannot be read: {error}"
    keys = dict.fromkeys((str(judge.mark.place), str(judge.measure)) for judge in judges(plan.root))
    return [Expectation(*key) for key in keys if key not in facts.expectations], ""


def judges(part: Part | None) -> Iterator[Judge]:
    """All that a part judges, in order; what comes again and again once or twice."""
    match part:
        case Judge():
            yield part
        case Series(parts=parts) | Branches(parts=parts):
            for inner in parts:
                yield from judges(inner)
        case Loop(first=first):
            yield from judges(first)
        case Cycles(before=before, first_check=check, first=first):
            for turn in (before, check, first):
                yield from judges(turn)
        case _:
            return


def why_unjudged(facts: Facts) -> str:
    """The reason for a reader of one expectation."""
    if facts.verdict == "passed":
        return "not judged: the run passed without coming to it"
    if facts.verdict == UNDER_WAY:
        return "not judged yet: the run is under way"
    return f"not judged: the run ended before ({facts.verdict})"
