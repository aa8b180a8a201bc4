"""The parts of a report that are words and tables: item and rig, method, deviations, findings, the list of a clause."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from ramprig.errors import FileError
from ramprig.quantity import format_duration
from ramprig.record.events import from_rfc3339
from ramprig.sequence.rig import Rig
from ramprig.sequence.tripsay import explain_trip
from ramprig.sequence.wear_limits import WearRules
from ramprig.session.events import Learned, Tripped

from . import page
from .digest import Digest
from .facts import UNDER_WAY, Document, Facts
from .protections import stop_text
from .trends import Seen

ROWS_MAX = 400
"""Lines of one table; what is left out is counted and stands in the run folder."""
CLOCKS_WITHIN_S = 1e-3
"""Clocks are compared over a link whose delays differ by about so much: a choice of this program, typical of USB."""
SEQUENCE_MAX = 60_000
"""Characters of one file of the sequence that are shown."""
NO_STANDARD = (
    "Sudden changes are looked for by CUSUM, slow ones by EWMA, drifts by Mann-Kendall and Sen. Where the figures are "
    "not those of the file they are choices of this program and no standard."
)


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
        ("board", _board(device)),
        ("start of the board (boot)", device.get("boot", page.NOT_KNOWN)),
        ("port", manifest.get("port") or page.NOT_KNOWN),
        ("instruments, as entered", entries.get("instruments")),
        ("computer", (manifest.get("software") or {}).get("os") or page.NOT_KNOWN),
        ("software", _software(manifest) or page.NOT_KNOWN),
    ]
    found = page.facts(pairs) + _parts_table(facts) + _notes(facts)
    if settings.get("rehearsal") or facts.is_simulated:
        what = "A rehearsal on" if settings.get("rehearsal") else "A run on"
        note = f"{what} a simulated board: it shows what the sequence does, and nothing about a real motor."
        return page.paragraph(note, kind="differs") + found
    return found


def _board(device: Document) -> str:
    names = [str(device[name]) for name in ("board", "serial") if device.get(name)]
    firmware = [f"firmware {device['firmware']}"] if device.get("firmware") else []
    return ", ".join([*([" ".join(names)] if names else []), *firmware]) or page.NOT_KNOWN


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
    rows = [[page.short(note.get("utc")), page.text(_note_text(facts, note))] for note in facts.notes[:ROWS_MAX]]
    more = len(facts.notes) - len(rows)
    rest = page.paragraph(f"{more} notes more are in the run folder.") if more else ""
    return "<h3>Noted by hand</h3>" + page.table(["when (UTC)", "what"], rows) + rest


def _note_text(facts: Facts, note: Document) -> str:
    """What somebody wrote, who, and the name of the picture beside it, which may be missing."""
    text = str(note.get("text") or "")
    text += f" ({note['by']})" if note.get("by") else ""
    names = [str(photo.get("file")) for photo in note.get("photos") or []]
    names = [name if (facts.folder / name).is_file() else f"{name}, MISSING" for name in names]
    return text + (f" [{', '.join(names)}]" if names else "")


def method(facts: Facts) -> str:
    """The sequence as it was run, with its values and the hashes of all files."""
    manifest = facts.manifest
    clocks = manifest.get("clocks") or {}
    values = (manifest.get("settings") or {}).get("values") or {}
    period = ((manifest.get("samples") or {}).get("loggings") or [{}])[0].get("period_ticks")
    pairs: list[tuple[str, object]] = [
        ("begun", manifest.get("started") or page.NOT_KNOWN),
        ("ended", manifest.get("ended") or ("not yet" if facts.verdict == UNDER_WAY else "not in order")),
        ("first step", _first_step(facts)),
        *_lengths(facts),
        ("values given", ", ".join(f"{name} = {value}" for name, value in values.items()) or "none"),
        ("sampled", f"every {period} ticks of {clocks.get('tick_us')} us" if period else page.NOT_KNOWN),
        *([("speed", speed)] if (speed := (manifest.get("speed") or {}).get("method")) and facts.motors else []),
        ("clocks", _clock_text(facts)),
    ]
    rows = [
        [
            page.short(entry.get("role")),
            page.place(str(entry.get("name"))),
            f"<code>{page.text(entry.get('sha256'))}</code>",
        ]
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
    return format_duration(round(value, 3)) if isinstance(value, int | float) else page.NOT_KNOWN


def _first_step(facts: Facts) -> str:
    """When the steps of the last part began; the sentence at the head counts from there."""
    found = (facts.manifest.get("results") or {}).get("steps_from_tick")
    zero = ((facts.parts[-1].get("clocks") or {}) or (facts.manifest.get("clocks") or {})).get("tick_zero")
    if not isinstance(found, int) or not isinstance(zero, int):
        return page.NOT_KNOWN
    at = _seconds((found - zero) * facts.tick_us / 1e6)
    part = ", in its last part" if len(facts.parts) > 1 else ""
    return f"at {at} of the run{part}; 'into the run' at the head counts from there"


def _clock_text(facts: Facts) -> str:
    """What the times mean, and how far the clocks ran apart, where that can be told."""
    clocks = facts.manifest.get("clocks") or {}
    text = "times count from the begin of the record by the board's clock; times of day are UTC"
    ppm, lasted_s = clocks.get("drift_ppm"), clocks.get("device_s")
    if facts.is_simulated or not isinstance(ppm, int | float) or not isinstance(lasted_s, int | float) or lasted_s <= 0:
        return text
    within_ppm = 1e6 * CLOCKS_WITHIN_S / lasted_s
    if abs(ppm) < within_ppm:
        return f"{text}; the board's clock and the computer's differ by less than {within_ppm:.2g} ppm"
    way = "fast" if ppm > 0 else "slow"
    return (
        f"{text}; the board's clock ran {abs(ppm):.3g} ppm {way} against the computer's, give or take {within_ppm:.2g}"
    )


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
        texts = [_trip_text(facts, event) if kind == "tripped" else _event_text(event) for event in shown]
        rows += [
            [page.short(event.get("utc")), page.short(name), page.text(text)]
            for event, text in zip(shown, texts, strict=True)
        ]
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
        ("stop at the end", stop_text(facts)),
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
    return _at(event) + ", ".join(said)


def _at(event: Document) -> str:
    return f"at {event['time_s']} s: " if isinstance(event.get("time_s"), int | float) else ""


def _trip_text(facts: Facts, event: Document) -> str:
    """A trip as the run's last sentence tells one; without the bench file's copy by its fields."""
    if facts.bench is None:
        return _event_text(event)
    try:
        trip = Tripped(
            tick=event.get("tick"),
            host_s=0.0,
            trip=str(event["trip"]),
            index=int(event["index"]),
            value=int(event["value"]),
            bound=int(event["bound"]),
            learned=Learned.NOTICE,
        )
        text = explain_trip(trip, Rig.of(facts.bench, tick_us=facts.tick_us))
    except (FileError, KeyError, TypeError, ValueError):
        return _event_text(event)
    return _at(event) + text + ("; the run was gone on with" if facts.was_outlived(event) else "")


def _said(key: str, value: object) -> str:
    """A field of an event in words; a duration with its unit."""
    if key.endswith("_s") and isinstance(value, int | float):
        return f"{key.removesuffix('_s').replace('_', ' ')} {format_duration(round(value, 3))}"
    shown = f"{value:.4g}" if isinstance(value, float) else value
    return f"{key.replace('_', ' ')} {shown}"


def _wall_text(facts: Facts) -> str:
    moved = (facts.manifest.get("clocks") or {}).get("wall_moved_s")
    return (
        page.NOT_KNOWN if moved is None else f"moved by {round(moved, 3) + 0.0:.3f} s"
    )  # + 0.0 takes the sign off a zero


def trend_findings(seen: Seen, rules: Sequence[WearRules]) -> str:
    """What the trends of the features showed, all of it, and by which rules; without rules nothing was judged."""
    if not rules:
        return page.paragraph("No trend is judged: the sequence says 'wear: off'.", kind="note")
    lines = [[page.text(line)] for each in rules for line in each.lines()]
    rule = page.table(["looked for"], lines) + page.paragraph(NO_STANDARD, kind="note")
    told = sorted(seen.findings, key=lambda pair: -pair[1].level)
    rows = [
        [page.short(f"{finding.turn} {finding.cycle}"), page.text(f"{prefix}{finding}")] for prefix, finding in told
    ]
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


def clauses(entries: Mapping[str, str], facts: Sequence[Facts]) -> str:
    """The list of the clause, with where each is found here."""
    told = dict(entries)
    if all(each.bench is not None and each.bench.safety.place for each in facts):
        told["place"] = "in the bench file"
    rows = []
    for letter, what, where, keys in _CLAUSES:
        missing = [key for key in keys if not told.get(key)]
        lacking = f"{where}: not entered" + (f" ({', '.join(missing)})" if len(keys) > 1 else "")
        rows.append([letter, page.text(what), page.text(lacking if missing else where)])
    note = (
        "The list of ISO/IEC 17025:2017, 7.8.2.1, with letters and wording from memory, to see at a glance what a "
        "complete report still lacks. This report claims no accreditation."
    )
    return page.paragraph(note) + page.table(["", "what", "where"], rows)


_CLAUSES = (
    ("a", "title", "top of the report", ()),
    ("b", "name and address of the laboratory", "Item, rig and environment", ("lab",)),
    ("c", "place of the work", "Item, rig and environment", ("place",)),
    ("d", "identification on every part, and a clear end", "beside each heading, foot of each page, end", ()),
    ("e", "customer", "Item, rig and environment", ("customer",)),
    ("f", "method", "Method", ()),
    ("g", "item, its identification and condition", "Item, rig and environment", ("item", "condition")),
    ("h", "date of receipt", "Item, rig and environment", ("received",)),
    ("i", "dates of the work", "Method", ()),
    ("j", "date of issue", "top of the report", ()),
    ("k", "sampling plan", "does not apply: the items given were tested", ()),
    ("l", "the results relate only to the items tested", "end of the report", ()),
    ("m", "results with their units", "Results", ()),
    ("n", "additions, deviations, exclusions", "Deviations and interruptions", ("deviations",)),
    ("o", "who authorises the report", "end of the report", ("authorised",)),
    ("p", "results from others", "none", ()),
)
