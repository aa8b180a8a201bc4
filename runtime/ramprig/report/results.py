"""The results of a run: every expectation with its verdict, what was measured, the cycles, and how sure it is."""

from __future__ import annotations

import math
from bisect import bisect_left
from collections.abc import Iterable, Mapping

from ramprig.endure.cycles import read_cycle_record
from ramprig.errors import RecordError

from . import page
from .facts import UNDER_WAY, Document, Expectation, Facts
from .plots import label_of
from .unjudged import unjudged, why_unjudged

RULE = (
    "Decision rule: an expectation passes where the value found lies within its limits, the limits included; there is "
    "no guard band and no allowance for uncertainty (simple acceptance; the term as in ISO/IEC Guide 98-4 and ILAC-G8, "
    "from memory). The run passes where every step was carried out, every expectation passed each time it was judged, "
    "and no limit to wear that ends the run was passed. A value near a limit may therefore be on either side of it by "
    "the resolution told below."
)
NOTHING_JUDGED = (
    "No expectation was judged. Waits, trips and limits to wear have their verdict at the head of this report."
)
ROWS_MAX = 400
"""Lines of one table; what is left out is counted and stands in the run folder."""
RESOLUTIONS = 3
"""The resolution of a speed is told for so many speeds, up to what the run came to."""


def results(facts: Facts, totals: Mapping[str, tuple[float, float, float]]) -> str:
    """Each expectation with limit, values and verdict; the rule; failures with their values; cycles; resolution.

    `totals` has least, mean and greatest of each column that was logged.
    """
    missed, trouble = unjudged(facts)
    found = list(facts.expectations.values())
    measured = (facts.manifest.get("results") or {}).get("measured") or {}
    parts = [_measured(measured)] if measured else [page.paragraph(RULE)]
    if found or missed:
        rows = [_expectation(entry) for entry in (found + missed)[:ROWS_MAX]]
        heads = ["what", "where", "limit", "values found", "judged", "failed", "verdict"]
        parts.append(page.table(heads, rows, numbers=(4, 5)))
    elif not measured:
        parts.append(page.paragraph(NOTHING_JUDGED))
    more = len(found) + len(missed) - ROWS_MAX
    if more > 0:
        parts.append(page.paragraph(f"{more} more expectations are in the run folder."))
    if missed:
        parts.append(page.paragraph(f"Of these, {len(missed)}: {why_unjudged(facts)}.", kind="note"))
    if trouble:
        parts.append(page.paragraph(f"Expectations that were not judged cannot be told: {trouble}.", kind="note"))
    return "".join((*parts, _failures(found), _cycles(facts), _resolution(facts, totals)))


def _measured(found: Document) -> str:
    """What a procedure of `measure` came to, with its own statement of uncertainty."""
    rows = []
    for name, each in (found.get("values") or {}).items():
        unit = f" {each['unit']}" if each.get("unit") else ""
        uncertain = each.get("standard_uncertainty")
        value, low, high = (_to_its_place(each.get(key), uncertain) for key in ("value", "low", "high"))
        standard = f"{uncertain:.2g}{unit}" if isinstance(uncertain, int | float) else page.NOT_KNOWN
        share = f", {100 * each['confidence']:g} %" if isinstance(each.get("confidence"), int | float) else ""
        interval = f"{low} to {high}{unit}{share}" if low and high else page.NOT_KNOWN
        rows.append(
            [page.text(name.replace("_", " ")), page.text(f"{value or page.NOT_KNOWN}{unit}"), standard, interval]
        )
    table = page.table(["measured", "value", "standard uncertainty", "interval"], rows) if rows else ""
    return page.paragraph(f"{found.get('procedure')}: {found.get('sentence')}") + table


def _to_its_place(value: object, uncertain: object) -> str:
    """A number to the place of the second figure of its standard uncertainty; empty where there is none."""
    if not isinstance(value, int | float):
        return ""
    if not isinstance(uncertain, int | float) or uncertain <= 0 or value == 0:
        return f"{value:.4g}"
    figures = math.floor(math.log10(abs(value))) - math.floor(math.log10(uncertain)) + 2
    return f"{value:.{min(max(figures, 1), 15)}g}"


def _expectation(entry: Expectation) -> list[str]:
    return [
        page.text(entry.what),
        page.place(entry.place),
        page.text(entry.limit),
        page.text(_values(entry)) if entry.judged else "",
        str(entry.judged),
        str(entry.failed),
        page.status(entry.failed == 0) if entry.judged else page.text("not judged"),
    ]


def _values(entry: Expectation) -> str:
    if entry.judged == 1 or not entry.span:
        return entry.last_found
    return f"{entry.span}, last {entry.last_found}"


def _failures(found: list[Expectation]) -> str:
    failures = [(entry, event) for entry in found for event in entry.failures]
    if not failures:
        return ""
    rows = [
        [
            page.text(event.get("time_s")),
            page.text(entry.what),
            page.text(entry.limit),
            page.text(f"{event.get('found')} {event.get('why') or ''}".strip()),
        ]
        for entry, event in failures[:ROWS_MAX]
    ]
    total = sum(entry.failed for entry in found)
    more = "" if total == len(rows) else page.paragraph(f"{total - len(rows)} more failures are in the run folder.")
    heads = ["at, s of the run", "what", "limit", "found"]
    return "<h3>What did not hold</h3>" + page.table(heads, rows, numbers=(0,)) + more


def _cycles(facts: Facts) -> str:
    """The count of cycles; a commanded one without an end was under way when the run broke off."""
    if not facts.cycles:
        return ""
    try:
        record = read_cycle_record(facts.folder)
    except RecordError as error:
        return "<h3>Cycles</h3>" + page.paragraph(f"The count of cycles cannot be told: {error}.")
    counted = record.counted
    pairs = [
        ("cycles commanded", counted.commanded),
        ("confirmed by the encoder", counted.confirmed),
        ("failed", counted.failed),
        ("not judged", counted.unjudged),
    ]
    if facts.verdict == UNDER_WAY:
        pairs += [("broken off", counted.interrupted), ("under way", int(record.open_number is not None))]
    else:
        pairs.append(("broken off", counted.interrupted + (record.open_number is not None)))
    return "<h3>Cycles</h3>" + page.facts((name, str(value)) for name, value in pairs)


def _resolution(facts: Facts, totals: Mapping[str, tuple[float, float, float]]) -> str:
    """How far a value may be off by the way it was measured."""
    rows = []
    for column in (facts.manifest.get("speed") or {}).get("columns") or []:
        name = str(column["column"])
        if name not in totals or not facts.has_encoder(name.rpartition(".")[0]):
            continue
        least, _, greatest = totals[name]
        found: dict[float, float] = {}  # at the coarsest of the rates that were logged at
        for entry in column.get("resolution") or []:
            at_rpm, rpm = float(entry["at_rpm"]), float(entry["rpm"])
            found[at_rpm] = max(rpm, found.get(at_rpm, rpm))
        rows += [
            [page.text(label_of(name)[0]), f"{at_rpm:g} rpm", f"{found[at_rpm]:.3g} rpm"]
            for at_rpm in _speeds_up_to(max(-least, greatest), found)
        ]
    single = (
        "Resolution of a single logged speed, from the encoder's counts alone; a mean over a window is finer, about as "
        "the window is longer than the span that a single speed is taken over."
    )
    table = page.table(["", "at", "resolution"], rows, numbers=(1, 2)) if rows else ""
    table = page.paragraph(single) + table if rows else ""
    sensors = (
        "The uncertainty of current and supply is that of the board's sensors, which this program does not know: enter "
        "the instruments' calibration. No expanded uncertainty is claimed but what stands beside a measured value."
    )
    counts = "".join(page.paragraph(text) for text in _by_counts(facts))
    return "<h3>Uncertainty</h3>" + counts + table + page.paragraph(sensors)


def _speeds_up_to(top_rpm: float, told_rpm: Iterable[float]) -> list[float]:
    """Of the speeds whose resolution the record tells, the last RESOLUTIONS up to the first that is not below the
    greatest one of the run."""
    speeds = sorted(told_rpm)
    return speeds[: bisect_left(speeds, top_rpm) + 1][-RESOLUTIONS:]


def _by_counts(facts: Facts) -> list[str]:
    """What one count of each encoder comes to, and where it sits."""
    texts = []
    for motor in () if facts.bench is None else facts.bench.motors:
        if motor.encoder is None:
            texts.append(f"{motor.name} has no encoder: no position and no speed of it was measured.")
            continue
        text = f"One count of {motor.name} is {360 / float(motor.counts_per_turn):.3g} deg of the output shaft"
        if motor.encoder.on_motor_shaft:
            text += ", by the ratio of the gear: its play and wind-up are not seen by the encoder on the motor's shaft"
        texts.append(text + ".")
    return texts
