"""`ramprig read RUN`: how a run ended and why, and whether every sample is where its account says."""

from __future__ import annotations

import argparse
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ramprig.cli.say import say, width_of

if TYPE_CHECKING:
    from ramprig.record.reading import Audit

GAPS_SHOWN = 10
NOTES_SHOWN = 20
UNSOUND_CODE = 2
CYCLE_WORDS = {"unjudged": "not judged", "interrupted": "broken off"}
"""What a count is called where its key in `run.json` is no plain word."""


def declare(parser: argparse.ArgumentParser) -> None:
    """The run folder."""
    parser.add_argument("run", type=Path, metavar="RUN", help="the run's folder")
    parser.epilog = "Exits with 0 where the account holds, with 2 where it does not or the run never ended in order."


def carry_out(args: argparse.Namespace) -> int:
    """Print why the run ended as it did, unless it passed, then what the folder says and what it holds."""
    from ramprig.record.reading import audit, read_manifest
    from ramprig.report.explain import WIDTH, explain
    from ramprig.report.facts import UNDER_WAY, gather

    manifest = read_manifest(args.run)
    facts = gather(args.run)
    explanation = explain(facts)
    if explanation is not None:
        for line in [*explanation.lines(width_of(sys.stdout, most=WIDTH)), ""]:
            say(line)
    if facts.verdict == UNDER_WAY:
        say("The run is under way: a program is still writing it. What follows is how far it has come.")
    found = audit(args.run)
    for line in [*summary(manifest, found), *open_count_lines(args.run, manifest), *note_lines(args.run)]:
        say(line)
    return 0 if found.exact else UNSOUND_CODE


def summary(manifest: dict[str, Any], found: Audit) -> list[str]:  # Any: JSON as it comes, of a checked format
    """The run in a few lines, and the statements of the audit."""
    from ramprig.report.kept import whole_of

    device = manifest.get("device") or {}
    board = " ".join(str(device[key]) for key in ("board", "serial") if key in device)
    cycles = (manifest.get("results") or {}).get("cycles")
    facts = [
        ("run", manifest.get("run")),
        ("name", manifest.get("name")),
        ("started", manifest.get("started")),
        ("ended", manifest.get("ended") or "not in order"),
        ("port", manifest.get("port") or "not said"),
        ("board", board or "not said"),
        ("verdict", manifest.get("verdict") or "none"),
        ("reason", manifest.get("stop_reason") or "none was written"),
        ("samples", samples_line(manifest, found)),
    ]
    lines = [f"{name:<9}{value}" for name, value in facts]
    if cycles:
        words = [f"{count} {CYCLE_WORDS.get(name, name)}" for name, count in cycles.items()]
        lines.append("cycles   " + ", ".join(words))
    lines += [f"{'broken' if i == 0 else '':<9}{text}" for i, text in enumerate(found.interruptions)]
    lines += [f"{'':9}{line}" for line in gap_lines(manifest.get("samples") or {})]
    whole = whole_of(manifest.get("samples") or {})
    verdicts = found.statements or (f"{whole[0].lower()}{whole[1:]}, and no file was changed",)
    return lines + [f"{'checked' if i == 0 else '':<9}{text}" for i, text in enumerate(verdicts)]


def open_count_lines(folder: Path, manifest: dict[str, Any]) -> list[str]:  # Any: as in summary
    """The count of cycles of a run that never ended in order, from what it wrote down at each."""
    from ramprig.endure.cycles import read_cycle_record
    from ramprig.record.folder import CYCLES_FILE

    if manifest.get("status") == "finished" or not (folder / CYCLES_FILE).exists():
        return []
    record = read_cycle_record(folder)
    lines = [f"cycles   {record.counted}"]
    if record.open_number is not None:
        lines.append(f"{'':9}cycle {record.open_number} was commanded, and its end is not known: it counts as not done")
    return lines


def samples_line(manifest: dict[str, Any], found: Audit) -> str:  # Any: as in summary
    """The account in one line; of a run that broke off, what can be counted."""
    account = manifest.get("samples")
    if not account:
        return f"{found.rows} rows in the file, {found.known_lost} told as lost"
    parts = [f"{account[key]} {key}" for key in ("expected", "received", "lost", "written")]
    parts += [f"{account[key]} {key}" for key in ("thinned", "recovered", "unwritten") if account.get(key)]
    volumes = sum(len(part.get("samples_files") or [""]) for part in manifest.get("parts") or [manifest])
    text = ", ".join(parts) + f"; {found.rows} rows in {'the file' if volumes == 1 else f'{volumes} files'}"
    beside = found.rows - int(account["written"])
    return text + (f", {beside} of them from before a break, of which there is no account" if beside > 0 else "")


def gap_lines(account: dict[str, Any]) -> list[str]:  # Any: as in summary
    """The gaps by tick, so many as fit a screen."""
    gaps = account.get("gaps", [])
    lines = [
        f"lost: {gap['count']} from tick {gap['first_tick']}, every {gap['period_ticks']} ({gap['reason']})"
        for gap in gaps[:GAPS_SHOWN]
    ]
    more = len(gaps) - len(lines) + int(account.get("gaps_unlisted", 0))
    return [*lines, f"and {more} gaps more"] if more else lines


def note_lines(folder: Path) -> list[str]:
    """What people noted by hand, the last of it where it is much."""
    from ramprig.record.reading import read_notes

    notes = read_notes(folder)
    lines = [f"noted    {len(notes) - NOTES_SHOWN} notes more before these"] if len(notes) > NOTES_SHOWN else []
    for note in notes[-NOTES_SHOWN:]:
        photos = ", ".join(str(photo["file"]) for photo in note.get("photos", []))
        by = f" ({note['by']})" if note.get("by") else ""
        lines.append(f"noted    {note['utc']} {note['text']}{by}" + (f" [{photos}]" if photos else ""))
    return lines
