"""The parts of a report that are words and tables, from item and rig to the protections in force."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from ramprig.endure.cycles import read_cycle_record
from ramprig.errors import RecordError
from ramprig.quantity import format_duration
from ramprig.record.events import from_rfc3339
from ramprig.record.reading import Audit
from ramprig.sequence.wear_limits import WearRules
from ramprig.session.limits import LimitTable
from ramprig_link.words import LIMITS, Per

from . import page
from .digest import Digest
from .facts import Document, Expectation, Facts
from .kept import said_of_thinning, whole_of
from .trends import Seen
from .unjudged import unjudged, why_unjudged

RULE = (
    "Decision rule: an expectation passes where the value found lies within its limits, the limits included; there is "
    "no guard band and no allowance for uncertainty (simple acceptance; the term as in ISO/IEC Guide 98-4 and ILAC-G8, "
    "from memory). The run passes where it was carried out to its end and every expectation passed each time it was "
    "judged. A value near a limit may therefore be on either side of it by the resolution told below."
)
NOTHING_JUDGED = (
    "No expectation was judged. Waits, trips and limits to wear have their verdict at the head of this report."
)
ROWS_MAX = 400
"""Lines of one table; what is left out is counted and stands in the run folder."""
RESOLUTION_AT_RPM = (1.0, 10.0, 100.0, 1000.0)
SEQUENCE_MAX = 60_000
"""Characters of one file of the sequence that are shown."""
NO_STANDARD = (
    "Sudden changes are looked for by CUSUM, slow ones by EWMA, drifts by Mann-Kendall and Sen. Where the figures are "
    "not those of the file they are choices of this program and no standard."
)
TRIP_LIMITS = ("trip_ma", "rated_ma", "stall_duty", "wrong_counts", "speed_counts", "under_mv", "over_mv")
ZERO_IS_OFF = ("rated_ma", "stall_duty", "speed_counts", "under_mv")


def item_and_rig(facts: Facts, entries: Mapping[str, str]) -> str:
    """What was tested, on what, where."""
    manifest = facts.manifest
    bench, device = facts.bench, manifest.get("device") or {}
    settings = manifest.get("settings") or {}
    pairs: list[tuple[str, object]] = [
        ("item", entries.get("item") or ", ".join((*facts.motors, *facts.servos))),
        ("condition of the item", entries.get("condition")),
        ("received", entries.get("received")),
        ("customer", entries.get("customer")),
        ("laboratory", entries.get("lab")),
        ("place of the rig", "" if bench is None else bench.safety.place),
        ("environment, as entered", entries.get("environment")),
        ("bench", facts.bench_trouble if bench is None else f"{bench.name} ({bench.file})"),
        ("board", f"{device.get('board')} {device.get('serial')}, firmware {device.get('firmware')}"),
        ("start of the board (boot)", device.get("boot")),
        ("port", manifest.get("port")),
        ("instruments, as entered", entries.get("instruments")),
        ("computer", (manifest.get("software") or {}).get("os")),
        ("software", _software(manifest)),
    ]
    if settings.get("rehearsal"):
        note = "A rehearsal on a simulated board: it shows what the sequence does, and nothing about a real motor."
        return page.paragraph(note, kind="differs") + page.facts(pairs) + _notes(facts)
    return page.facts(pairs) + _parts_table(facts) + _notes(facts)


def _software(manifest: Document) -> str:
    found = manifest.get("software") or {}
    return ", ".join(f"{name} {found[name]}" for name in ("ramprig", "python", "numpy") if name in found)


def _parts_table(facts: Facts) -> str:
    bench = facts.bench
    if bench is None:
        return ""
    rows = []
    for motor in bench.motors:
        rated = f"{motor.rated_ma} mA" + (f", {motor.rated_rpm:g} rpm" if motor.rated_rpm else "")
        counts = f"{float(motor.counts_per_turn):g} counts a turn" if motor.encoder else "no encoder"
        rows.append([page.text(motor.name), "motor", f"axis {motor.axis}", page.text(f"{rated}; {counts}")])
    for servo in bench.servos:
        angles = f"{servo.low_deg:g} deg to {servo.high_deg:g} deg; positions are commanded, not measured"
        rows.append([page.text(servo.name), "servo", f"output {servo.channel}", page.text(angles)])
    return page.table(["name", "kind", "where", "as the bench file has it"], rows)


def _notes(facts: Facts) -> str:
    if not facts.notes:
        return ""
    rows = [[page.short(note.get("utc")), page.text(_note_text(note))] for note in facts.notes[:ROWS_MAX]]
    return "<h3>Noted by hand</h3>" + page.table(["when (UTC)", "what"], rows)


def _note_text(note: Document) -> str:
    """What somebody wrote, who, and the name of the picture beside it."""
    text = str(note.get("text") or "")
    text += f" ({note['by']})" if note.get("by") else ""
    names = [str(photo.get("file")) for photo in note.get("photos") or []]
    return text + (f" [{', '.join(names)}]" if names else "")


def method(facts: Facts) -> str:
    """The sequence as it was run, with its values and the hashes of all files."""
    manifest = facts.manifest
    clocks = manifest.get("clocks") or {}
    values = (manifest.get("settings") or {}).get("values") or {}
    period = ((manifest.get("samples") or {}).get("loggings") or [{}])[0].get("period_ticks")
    pairs: list[tuple[str, object]] = [
        ("begun", manifest.get("started")),
        ("ended", manifest.get("ended") or "not in order"),
        *_lengths(facts),
        ("values given", ", ".join(f"{name} = {value}" for name, value in values.items()) or "none"),
        ("sampled", f"every {period} ticks of {clocks.get('tick_us')} us" if period else ""),
        ("speed", (manifest.get("speed") or {}).get("method")),
        ("clocks", _clock_text(clocks)),
    ]
    rows = [
        [page.text(entry.get("role")), page.text(entry.get("name")), f"<code>{page.text(entry.get('sha256'))}</code>"]
        for entry in manifest.get("inputs") or []
    ]
    return page.facts(pairs) + page.table(["file", "name", "SHA-256 of the copy"], rows) + _sequence_texts(facts)


def _lengths(facts: Facts) -> list[tuple[str, object]]:
    """How long it lasted; of a run that was gone on with, the whole by the time of day and the last part."""
    manifest = facts.manifest
    lasted_s = (manifest.get("clocks") or {}).get("device_s")
    planned_s = (manifest.get("results") or {}).get("planned_s")
    if len(facts.parts) < 2:
        return [("lasted, by the board's clock", _seconds(lasted_s)), ("planned at least", _seconds(planned_s))]
    found: list[tuple[str, object]] = [
        ("last part, by the board's clock", _seconds(lasted_s)),
        ("last part, planned at least", _seconds(planned_s)),
    ]
    try:
        whole = from_rfc3339(str(manifest.get("ended"))) - from_rfc3339(str(manifest.get("started")))
    except ValueError:
        return found
    return [("lasted, interruptions included", _seconds(whole.total_seconds())), *found]


def _sequence_texts(facts: Facts) -> str:
    parts = []
    for entry in facts.manifest.get("inputs") or []:
        if entry.get("role") not in ("sequence", "include"):
            continue
        try:
            content = (facts.folder / str(entry["file"])).read_text("utf-8", errors="replace")
        except OSError:
            content = "the copy in the run folder cannot be read"
        cut = content[:SEQUENCE_MAX] + ("\n... cut here; the copy is whole" if len(content) > SEQUENCE_MAX else "")
        parts.append(f"<h3>{page.text(entry.get('name'))}, as run</h3><pre>{page.text(cut)}</pre>")
    return "".join(parts)


def _seconds(value: object) -> str:
    return format_duration(round(value, 3)) if isinstance(value, int | float) else ""


def _clock_text(clocks: Document) -> str:
    ppm = clocks.get("drift_ppm")
    text = "times count from the start of the run by the board's clock; times of day are UTC"
    if isinstance(ppm, int | float):
        text += f"; the board's clock ran {abs(ppm):g} ppm {'fast' if ppm > 0 else 'slow'} against the computer's"
    return text


def results(facts: Facts) -> str:
    """Each expectation with limit, values and verdict; the rule; failures with their values; cycles; resolution."""
    missed, trouble = unjudged(facts)
    found = list(facts.expectations.values())
    parts = [page.paragraph(RULE)]
    if found or missed:
        rows = [_expectation(entry) for entry in (found + missed)[:ROWS_MAX]]
        heads = ["what", "where", "limit", "values found", "judged", "failed", "verdict"]
        parts.append(page.table(heads, rows, numbers=(4, 5)))
    else:
        parts.append(page.paragraph(NOTHING_JUDGED))
    more = len(found) + len(missed) - ROWS_MAX
    if more > 0:
        parts.append(page.paragraph(f"{more} more expectations are in the run folder."))
    if missed:
        parts.append(page.paragraph(f"Of these, {len(missed)}: {why_unjudged(facts)}.", kind="note"))
    if trouble:
        parts.append(page.paragraph(f"Expectations that were not judged cannot be told: {trouble}.", kind="note"))
    return "".join((*parts, _failures(found), _cycles(facts), _resolution(facts)))


def _expectation(entry: Expectation) -> list[str]:
    return [
        page.text(entry.what),
        f"<code>{page.text(entry.place)}</code>",
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
        ("broken off", counted.interrupted + (record.open_number is not None)),
    ]
    return "<h3>Cycles</h3>" + page.facts((name, str(value)) for name, value in pairs)


def _resolution(facts: Facts) -> str:
    """How far a value may be off by the way it was measured."""
    rows = []
    for column in (facts.manifest.get("speed") or {}).get("columns") or []:
        rows += [
            [page.text(column["column"]), f"{entry['at_rpm']:g} rpm", f"{entry['rpm']:g} rpm"]
            for entry in column.get("resolution") or []
            if entry.get("at_rpm") in RESOLUTION_AT_RPM
        ]
    single = (
        "Resolution of a single logged speed, from the encoder's counts alone; a mean over a window is finer by the "
        "window's length. "
    )
    sensors = (
        "The uncertainty of current and supply is that of the board's sensors, which this program does not know: enter "
        "the instruments' calibration. No expanded uncertainty is claimed."
    )
    table = page.table(["speed", "at", "resolution"], rows, numbers=(1, 2)) if rows else ""
    return "<h3>Uncertainty</h3>" + page.paragraph(single + sensors if rows else sensors) + table


def interruptions(facts: Facts, digest: Digest, entries: Mapping[str, str]) -> str:
    """Everything that came between: sleep, restarts, resumptions, a late host, disk trouble, stops."""
    rows: list[list[str]] = []
    for number, entry in enumerate(facts.manifest.get("interruptions") or [], 1):
        said = "; ".join(f"{key}: {value}" for key, value in entry.items() if value not in (None, ""))
        told = str(entry.get("text") or "").removeprefix(f"interruption {number}: ")
        text = f"{told}; before: {entry.get('reason') or 'nothing was said'}" if told else said
        rows.append([page.short(entry.get("resumed_utc")), page.short(f"interruption {number}"), page.text(text)])
    for kind, name in _INTERRUPTIONS.items():
        shown = facts.of(kind)[:50]
        rows += [[page.short(event.get("utc")), page.short(name), page.text(_event_text(event))] for event in shown]
        more = facts.counts[kind] - len(shown)
        if more > 0:
            rows.append([page.short(shown[-1].get("utc")), page.short(name), f"and {more} more after that"])
    rows.sort(key=lambda row: row[0])
    remarks = (facts.manifest.get("results") or {}).get("remarks") or []
    pairs: list[tuple[str, object]] = [
        ("deviations, as entered", entries.get("deviations")),
        ("remarks of the plan", "; ".join(map(str, remarks)) or "none"),
        ("all steps carried out", {True: "yes", False: "NO", None: "not written down"}[facts.carried_out]),
        ("parts of the run", str(len(facts.parts))),
        ("stop at the end", _stop_text(facts)),
        ("wall clock against the monotonic one", _wall_text(facts)),
    ]
    if digest.breaks:
        pairs.append(("ticks began anew", ", ".join(f"after {at_s:.3f} s" for at_s in digest.breaks)))
    body = page.table(["when (UTC)", "what", "details"], rows) if rows else ""
    none = page.paragraph("No interruption, restart, sleep of the computer or disk trouble was recorded.")
    return page.facts(pairs) + (body or none)


_INTERRUPTIONS = {
    "run_resumed": "gone on with",
    "restarted": "board restarted",
    "device_exchanged": "another board",
    "host_slept": "computer slept",
    "late_host": "program held up",
    "wall_clock_set": "wall clock set",
    "tripped": "trip",
    "disk_trouble": "disk",
    "notices_missed": "notices lost",
    "order_overdue": "end of order not told",
}
_HEAD_KEYS = ("tick", "time_s", "utc", "kind")


def _event_text(event: Document) -> str:
    said = [_said(key, value) for key, value in event.items() if key not in _HEAD_KEYS and value not in ("", None)]
    at = f"at {event['time_s']} s: " if isinstance(event.get("time_s"), int | float) else ""
    return at + ", ".join(said)


def _said(key: str, value: object) -> str:
    """A field of an event in words; a duration with its unit."""
    if key.endswith("_s") and isinstance(value, int | float):
        return f"{key.removesuffix('_s').replace('_', ' ')} {format_duration(round(value, 3))}"
    shown = f"{value:.4g}" if isinstance(value, float) else value
    return f"{key.replace('_', ' ')} {shown}"


def _stop_text(facts: Facts) -> str:
    confirmed = (facts.manifest.get("results") or {}).get("stop_confirmed")
    if confirmed is None:
        return "not known"
    return "outputs off, confirmed" if confirmed else "NOT CONFIRMED that the outputs were off"


def _wall_text(facts: Facts) -> str:
    moved = (facts.manifest.get("clocks") or {}).get("wall_moved_s")
    return "not known" if moved is None else f"moved by {moved + 0.0:.3f} s"


def account(facts: Facts, audit: Audit) -> str:
    """Where every sample is, checked against the rows when the report was made."""
    found = facts.manifest.get("samples") or {}
    names = (
        *("expected", "received", "lost", "written", "thinned", "unwritten"),
        *("recovered", "duplicates", "strange_lines"),
    )
    pairs: list[tuple[str, object]] = [(name.replace("_", " "), str(found[name])) for name in names if name in found]
    pairs.append(("rows in the file", str(audit.rows)))
    pairs.append(("confirmed by the board", "yes, for every logging" if found.get("complete") else "no"))
    statements = audit.statements or (f"{whole_of(found)}, and no file was changed.",)
    thinned = said_of_thinning(facts)
    statements = (thinned, *statements) if thinned else statements
    gaps = [
        [str(gap.get("first_tick")), str(gap.get("count")), str(gap.get("period_ticks")), page.text(gap.get("reason"))]
        for gap in (found.get("gaps") or [])[:ROWS_MAX]
    ]
    table = page.table(["lost from tick", "samples", "every", "why"], gaps, numbers=(0, 1, 2)) if gaps else ""
    files = [
        [page.text(entry.get("file")), str(entry.get("lines")), f"<code>{page.text(entry.get('sha256'))}</code>"]
        for entry in facts.manifest.get("files") or []
    ]
    hashes = page.table(["file", "lines", "SHA-256"], files, numbers=(1,)) if files else ""
    return page.facts(pairs) + "".join(page.paragraph(text) for text in statements) + table + hashes


def trend_findings(seen: Seen, rules: Sequence[WearRules]) -> str:
    """What the trends of the features showed, all of it, and by which rules; without rules nothing was judged."""
    if not rules:
        return page.paragraph("No trend is judged: the sequence says 'wear: off'.", kind="note")
    lines = [[page.text(line)] for each in rules for line in each.lines()]
    rule = page.table(["looked for"], lines) + page.paragraph(NO_STANDARD, kind="note")
    told = sorted(seen.findings, key=lambda pair: -pair[1].level)
    rows = [[f"{finding.turn} {finding.cycle}", page.text(f"{prefix}{finding}")] for prefix, finding in told]
    waiting = page.paragraph(_still_waiting(seen, rules), kind="note") if seen.waiting or not seen.judged else ""
    if rows:
        return page.table(["at", "found"], rows) + waiting + rule
    none = f"{seen.judged} features were judged, and none was found changed."
    return (page.paragraph(none, kind="note") if seen.judged else "") + waiting + rule


def _still_waiting(seen: Seen, rules: Sequence[WearRules]) -> str:
    """What was not judged against a baseline, as there were too few turns."""
    needed = [f"{each.run_in_turns + each.baseline} {each.turn}s" for each in rules]
    which = f"Of {seen.waiting} features no trend is judged" if seen.judged else "No trend is judged"
    return f"{which}: that takes more than {' or '.join(dict.fromkeys(needed))}."


def protections(facts: Facts) -> str:
    """What the bench file declares, and what the board was shown to have in force."""
    bench = facts.bench
    declared: list[tuple[str, object]] = []
    if bench is not None:
        safety = bench.safety
        declared = [
            ("power cut", safety.power_cut),
            ("fuse", f"{safety.fuse_a:g} A" if safety.fuse_a else ""),
            ("guard", safety.guard),
            ("who answers for the rig", safety.contact),
        ]
    text = "Declared by people in the bench file; this program cannot check them."
    limits = "The software stop is not an emergency stop and not a safety function."
    return (
        "<h3>Declared</h3>"
        + page.paragraph(f"{text} {limits}")
        + page.facts(declared)
        + "<h3>In force on the board</h3>"
        + page.facts(_in_force(facts))
        + _limits_table(facts)
    )


def _in_force(facts: Facts) -> list[tuple[str, object]]:
    opened, armed = facts.of("opened"), facts.of("armed")
    told = str(opened[-1].get("limits_digest")) if opened else ""
    table = facts.limits
    own = LimitTable(table).digest if table else ""
    same = "not known"
    if told and own:
        same = f"yes: {told}" if told == own else f"NO: the board has {told}, the bench file comes to {own}"
    return [
        ("limits of the board are those of the bench file (digest)", same),
        ("armed", f"{'once' if len(armed) == 1 else f'{len(armed)} times'}, under that digest" if armed else "never"),
        ("lease: the board stops by itself after", f"{armed[-1].get('lease_ms')} ms of silence" if armed else ""),
        ("trips in this run", str(facts.counts["tripped"])),
        ("stop confirmed by measurement", _stop_text(facts)),
    ]


def _limits_table(facts: Facts) -> str:
    rows = []
    for (item, index), value in facts.limits.items():
        limit = LIMITS[item]
        whose = "board"
        if limit.per is Per.AXIS:
            whose = facts.motor_on(index)
        elif limit.per is Per.SERVO:
            whose = facts.servos[index] if index < len(facts.servos) else f"servo {index}"
        off = item in ZERO_IS_OFF and value == 0
        state = "off" if off else ("trip" if item in TRIP_LIMITS else "limit")
        rows.append([page.text(whose), f"<code>{page.text(item)}</code>", str(value), state])
    return page.table(["whose", "limit (protocol units)", "value", ""], rows, numbers=(2,)) if rows else ""


def clauses(entries: Mapping[str, str]) -> str:
    """The list of the clause, with where each is found here."""
    rows = [
        [letter, page.text(what), page.text(where if not key or entries.get(key) else f"{where}: not entered")]
        for letter, what, where, key in _CLAUSES
    ]
    note = (
        "The list of ISO/IEC 17025:2017, 7.8.2.1, with letters and wording from memory, to see at a glance what a "
        "complete report still lacks. This report claims no accreditation."
    )
    return page.paragraph(note) + page.table(["", "what", "where"], rows)


_CLAUSES = (
    ("a", "title", "top of the report", ""),
    ("b", "name and address of the laboratory", "Item, rig and environment", "lab"),
    ("c", "place of the work", "Item, rig and environment", ""),
    ("d", "identification on every part, and a clear end", "beside each heading, foot of each page, end", ""),
    ("e", "customer", "Item, rig and environment", "customer"),
    ("f", "method", "Method", ""),
    ("g", "item, its identification and condition", "Item, rig and environment", "condition"),
    ("h", "date of receipt", "Item, rig and environment", "received"),
    ("i", "dates of the work", "Method", ""),
    ("j", "date of issue", "top of the report", ""),
    ("k", "sampling plan", "does not apply: the items given were tested", ""),
    ("l", "the results relate only to the items tested", "end of the report", ""),
    ("m", "results with their units", "Results", ""),
    ("n", "additions, deviations, exclusions", "Deviations and interruptions", "deviations"),
    ("o", "who authorises the report", "not part of a run", "authorised"),
    ("p", "results from others", "none", ""),
)
