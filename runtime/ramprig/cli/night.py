"""Starting a run that nobody stands beside: the rules, the door sheet, and a computer that stays awake."""

from __future__ import annotations

import platform
import time
from collections.abc import Callable, Iterable, Mapping
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from ramprig.cli.say import tell
from ramprig.errors import UsageError

if TYPE_CHECKING:
    from ramprig.bench import Bench
    from ramprig.cli.running import Way
    from ramprig.sequence.cycle_plan import BlockSoFar
    from ramprig.sequence.reading import Sequence


def seconds_of(text: str | None) -> float | None:
    """The duration of an option such as `--at-most '9 h'`. Raises UsageError."""
    from ramprig.quantity import DURATION, QuantityError, parse

    if text is None:
        return None
    try:
        value = float(parse(text, DURATION).value)
    except QuantityError as error:
        raise UsageError(f"--at-most {text}: {error}") from error
    if value <= 0:
        raise UsageError(f"--at-most {text}: it must be more than 0 s")
    return value


def refuse_missing(missing: Iterable[object]) -> None:
    """Raise UsageError that names every rule that does not hold, if there is one."""
    lines = [f"  {rule}" for rule in missing]
    if lines:
        count = "one rule does" if len(lines) == 1 else f"{len(lines)} rules do"
        raise UsageError(f"Not started unattended: {count} not hold.\n" + "\n".join(lines))


def carry_out_unattended(
    sequence: Sequence,
    bench: Bench,
    way: Way,
    *,
    so_far: Mapping[int, BlockSoFar],
    at_most: str | None,
    accept_sleep: bool,
    ask: Callable[[], None],
    run: Callable[[Way], int],
    latest_end_unix_s: float | None = None,
) -> int:
    """Check the rules, show the door sheet, ask, and run awake. Raises UsageError where a rule does not hold.

    `so_far` is what is done of a run that is gone on with, and `latest_end_unix_s` when it was to be over by its user's
    word, which a new `at_most` takes the place of.
    """
    from ramprig.endure.awake import keep_awake
    from ramprig.endure.doorsheet import door_sheet
    from ramprig.endure.unattended import longest_s, missing_rules
    from ramprig.record.events import rfc3339
    from ramprig.record.space import disk_free, standing
    from ramprig.sequence.compile import compile_plan

    at_most_s = seconds_of(at_most)
    if at_most_s is None and latest_end_unix_s is not None:
        at_most_s = latest_end_unix_s - time.time()
        if at_most_s <= 0:
            at = rfc3339(latest_end_unix_s, decimals=0)
            raise UsageError(f"the run's latest end, {at}, has gone by; say --at-most TIME anew")
    plan = compile_plan(sequence, bench, so_far=so_far)
    free_bytes = disk_free(standing(Path(".") if way.runs is None else way.runs))
    refuse_missing(missing_rules(bench, sequence, plan, url=way.url, free_bytes=free_bytes, at_most_s=at_most_s))
    with keep_awake(accept_sleep=accept_sleep) as awake:
        start_s = time.time()
        latest_s = start_s + longest_s(plan, sequence, at_most_s=at_most_s)
        sheet = door_sheet(
            bench, sequence, plan, start_unix_s=start_s, latest_end_unix_s=latest_s, host=platform.node()
        )
        tell(sheet.text())
        tell(str(awake))
        ask()
        settings = {**way.settings, "unattended": True, "kept_awake_by": awake.method or None}
        settings |= {"at_most": at_most} if at_most is not None else {}
        return run(replace(way, latest_end_unix_s=latest_s, settings=settings, sheet=sheet))
