"""Writes results into the `measured:` part of a bench file, and touches nothing else in it.

The user's text outside that part stays as it is to the byte: comments, order, spacing, line ends. Within it, results of
other subjects and procedures are kept, comments are not. The new text is read back before the file is replaced.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from datetime import UTC, datetime, timedelta
from pathlib import Path

from ramprig.bench import Bench, bench_of_text, load_bench
from ramprig.errors import Bug, FileError, RecordError, UsageError
from ramprig.record.appendfile import replace_file
from ramprig.yamlfile import Mapping as Tree
from ramprig.yamlfile import load_text

from .running import Measurement

HEAD = "measured:  # written by `ramprig measure --save`; a procedure that is saved again replaces its results"


@dataclass(frozen=True, slots=True, kw_only=True)
class Entry:
    """The results of one procedure, as text."""

    date: str
    board: str
    run: str
    values: Mapping[str, str]

    @classmethod
    def of(cls, measurement: Measurement) -> Entry:
        """What is saved of a measurement. Raises UsageError without a run folder to refer to."""
        if measurement.folder is None:
            raise UsageError("results are saved with the run folder they come from; there is none")
        day = datetime(1970, 1, 1, tzinfo=UTC) + timedelta(seconds=measurement.unix_s)
        values = {name: str(value) for name, value in measurement.findings.values.items()}
        return cls(date=day.strftime("%Y-%m-%d"), board=measurement.board, run=measurement.folder.name, values=values)


Part = dict[str, dict[str, Entry]]


def save(path: Path, measurement: Measurement) -> None:
    """Put a measurement into the bench file at `path`. Raises FileError where the file is no bench file any longer,
    RecordError where it cannot be written, UsageError without a run folder; the file then is as it was."""
    findings = measurement.findings
    entry = Entry.of(measurement)
    target = path.resolve()
    bench = load_bench(target)
    part: Part = {
        subject: {
            procedure: Entry(
                date=kept.date,
                board=kept.board,
                run=kept.run,
                values={name: value.text for name, value in kept.values.items()},
            )
            for procedure, kept in entries.items()
        }
        for subject, entries in bench.measured.items()
    }
    part.setdefault(findings.subject, {})[findings.procedure] = entry
    text = bench.file_bytes.decode("utf-8")
    changed = with_part(text, str(path), part)
    _check(bench, changed, part)
    try:
        mode = target.stat().st_mode
        replace_file(target, changed.encode("utf-8"))
        target.chmod(mode)
    except OSError as error:
        raise RecordError(f"{path} cannot be written: {error.strerror or error}") from error


def with_part(text: str, file: str, part: Part) -> str:
    """The file's text with this `measured:` part in place of the one it has, or at its end. Raises FileError where a
    file in braces, or one that says where it ends, takes no more lines."""
    newline = next((end for end in ("\r\n", "\n", "\r") if end in text), "\n")
    block = newline.join(_lines(part)) + newline
    root = load_text(text, file)
    assert isinstance(root, Tree), "a bench file is a mapping"
    if root.mark.text[root.mark.column - 1] == "{":
        raise root.error("results cannot be written into a bench in braces", "write it as lines of 'key: value'")
    lines = text.splitlines(keepends=True)
    ended = next((number for number, line in enumerate(lines, 1) if f"{line} "[:4].rstrip() == "..."), None)
    if ended is not None:
        mark = root.mark.source.mark(ended, 1)
        raise mark.error("results cannot be written behind the file's end", "remove the '...'")
    begins = [entry.key.mark.line for entry in root]
    found = [entry for entry in root if entry.key.text == "measured"]
    if not found:
        end = "" if not lines or lines[-1].endswith(("\n", "\r")) else newline
        return text + end + newline + block
    first = found[0].key.mark.line - 1
    last = min((line - 1 for line in begins if line - 1 > first), default=len(lines))
    while last > first + 1 and not _belongs(lines[last - 1]):
        last -= 1
    return "".join(lines[:first]) + block + "".join(lines[last:])


def _belongs(line: str) -> bool:
    """Whether a line is indented text: blank lines and comments at the margin belong to what follows."""
    return bool(line.strip()) and line[0] in " \t"


def _lines(part: Part) -> list[str]:
    lines = [HEAD]
    for subject, entries in part.items():
        lines.append(f"  {subject}:")
        for procedure, entry in entries.items():
            lines.append(f"    {procedure}:")
            lines += [f"      {key}: {_quoted(getattr(entry, key))}" for key in ("date", "board", "run")]
            if entry.values:
                lines.append("      values:")
                lines += [f"        {name}: {value}" for name, value in entry.values.items()]
    return lines


def _quoted(text: str) -> str:
    """A text as YAML takes it, in quotes."""
    return '"' + text.replace("\\", "\\\\").replace('"', '\\"') + '"'


def _check(before: Bench, changed: str, part: Part) -> None:
    """The new text must say the same bench, and these results. Raises Bug."""
    try:
        after = bench_of_text(changed, before.file)
    except FileError as error:
        raise Bug(f"the bench file would no longer be readable: {error}") from error
    if replace(after, measured={}) != replace(before, measured={}):
        raise Bug("the bench file would no longer mean the same")
    said = {subject: {name: len(entry.values) for name, entry in entries.items()} for subject, entries in part.items()}
    found = {
        subject: {name: len(entry.values) for name, entry in entries.items()}
        for subject, entries in after.measured.items()
    }
    if said != found:
        raise Bug("the results could not be read back from the bench file")
