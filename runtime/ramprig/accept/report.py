"""The folder that an acceptance leaves: `accept.json` for programs, `accept.html` to read, `lines.txt` with every line.

`lines.txt` has the host's seconds, `>` to the board or `<` from it, and the line as it was, data lines among them.
"""

from __future__ import annotations

import html
import json
import re
from collections.abc import Iterable, Iterator, Mapping
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from ramprig import __version__
from ramprig.accept.coverage import UNTESTABLE, covered
from ramprig.accept.examine import Verdict, all_checks, clauses_not_tested
from ramprig.accept.lines import CLAUSES
from ramprig.accept.talk import Talk
from ramprig.accept.trial import Result
from ramprig.errors import RecordError
from ramprig_link.words import VERSION

FORMAT = "ramprig acceptance 1"
JSON_FILE = "accept.json"
HTML_FILE = "accept.html"
LINES_FILE = "lines.txt"
SAME_NAME_MAX = 999
NAME_MAX = 40

MEANING = (
    "An acceptance shows that the board did what the clauses say in the situations that were tried, with this motor, "
    "once. It does not show that it always will, and it makes no safety function of it: a software stop is not an "
    "emergency stop, and a hard-wired power cut is needed all the same."
)


def verdict_sentence(verdict: Verdict) -> str:
    """How it ended, in a sentence."""
    name = verdict.identity.name if verdict.identity is not None else "the board"
    clauses = [clause for clause in verdict.failed if clause]
    if clauses:
        return f"NOT ACCEPTED: {name}: clauses {', '.join(clauses)} failed."
    if verdict.lost:
        return f"NOT ACCEPTED: {name}: the link was lost: {verdict.lost}"
    if verdict.failed:
        return f"NOT ACCEPTED: {name}: something beside the clauses failed."
    if verdict.stopped:
        return f"Not finished: {name}: {verdict.stopped}"
    if verdict.unrestored:
        return f"NOT ACCEPTED: {name}: it is not left as it was found."
    untested = sum(result.word == "not tested" for result in verdict.results)
    beside = f"; {untested} {'check was' if untested == 1 else 'checks were'} not made" if untested else ""
    if not verdict.energised:
        return f"{name} passed what needs no power{beside}. It is not accepted for a motor."
    if verdict.only:
        return f"{name} passed the checks with '{verdict.only}' in their name{beside}. All are needed to be accepted."
    motors = "" if verdict.identity is None or verdict.identity.axes else ", as a board without motors"
    return f"ACCEPTED: {name}{motors}{beside}."


def to_json(verdict: Verdict, *, port: str, when: datetime) -> dict[str, Any]:
    """Everything that was found."""
    who = verdict.identity
    return {
        "format": FORMAT,
        "program": f"ramprig {__version__}",
        "protocol": VERSION,
        "when": when.isoformat(timespec="seconds"),
        "port": port,
        "board": None if who is None else {name: getattr(who, name) for name in who.__slots__},
        "verdict": verdict_sentence(verdict),
        "exit_code": verdict.exit_code,
        "energised": verdict.energised,
        "failed": verdict.failed,
        "lost": verdict.lost,
        "stopped": verdict.stopped,
        "limits_not_put_back": verdict.unrestored,
        "notes": verdict.notes,
        "checks": [_result(result) for result in verdict.results],
        "not_tested_here": clauses_not_tested(verdict.results),
        "not_testable": UNTESTABLE,
        "coverage": covered(all_checks(), CLAUSES),
    }


def _result(result: Result) -> dict[str, Any]:
    return {
        "name": result.check.name,
        "text": result.check.text,
        "clauses": list(result.check.clauses),
        "power": result.check.power.value,
        "result": result.word,
        "why_not": result.untested,
        "faults": [{"clauses": list(fault.clauses), "text": fault.text} for fault in result.faults],
        "notes": result.notes,
        "seconds": round(result.seconds, 3),
    }


def write_report(verdict: Verdict, talk: Talk, *, runs: Path, port: str) -> Path:
    """Make a folder of its own under `runs` with the three files; raises RecordError where that cannot be."""
    when = datetime.fromtimestamp(talk.clock.wall(), UTC)
    name = verdict.identity.name if verdict.identity is not None else "board"
    slug = re.sub(r"[^A-Za-z0-9]+", "-", name).strip("-").lower()[:NAME_MAX]
    content = to_json(verdict, port=port, when=when)
    try:
        folder = _folder(runs, f"{when:%Y%m%dT%H%M%SZ}-accept-{slug}")
        (folder / JSON_FILE).write_text(json.dumps(content, indent=2, ensure_ascii=False) + "\n", "utf-8")
        (folder / HTML_FILE).write_text("\n".join(page(content)) + "\n", "utf-8")
        with (folder / LINES_FILE).open("w", encoding="ascii") as file:
            for host_s, way, data in talk.trace:
                file.write(f"{host_s:.6f} {way} {data.decode('latin-1').encode('unicode_escape').decode('ascii')}\n")
    except OSError as error:
        raise RecordError(f"the report cannot be written to {runs}: {error.strerror}") from error
    return folder


def _folder(runs: Path, name: str) -> Path:
    runs.mkdir(parents=True, exist_ok=True)
    for number in range(1, SAME_NAME_MAX + 1):
        folder = runs / (name if number == 1 else f"{name}-{number}")
        try:
            folder.mkdir()
        except FileExistsError:
            continue
        return folder
    raise RecordError(f"{runs} has {SAME_NAME_MAX} reports called {name}")


STYLE = """
body { font: 15px/1.5 system-ui, sans-serif; max-width: 70em; margin: 2em auto; padding: 0 1em; color: #1d2327; }
table { border-collapse: collapse; width: 100%; } td, th { text-align: left; vertical-align: top; padding: .3em .6em;
border-bottom: 1px solid #d5d9dd; } .failed { color: #a3161b; font-weight: 600; } .untested { color: #6b5a00; }
.passed { color: #1b5e32; } code { font-size: 90%; } small { color: #555f69; }
"""
CLASSES = {"passed": "passed", "FAILED": "failed", "not tested": "untested"}


def page(content: Mapping[str, Any]) -> Iterator[str]:
    """The page, line by line."""
    title = html.escape(content["verdict"])
    yield f'<!doctype html><html lang="en"><head><meta charset="utf-8"><title>{title}</title>'
    yield f"<style>{STYLE}</style></head><body><h1>{title}</h1>"
    yield f"<p>{html.escape(MEANING)}</p><table>"
    yield from _row("When", content["when"])
    yield from _row("Port", content["port"])
    yield from _row("Program", f"{content['program']}, protocol version {content['protocol']}")
    for name, value in (content["board"] or {}).items():
        yield from _row(f"<code>{name}</code>", str(value))
    for note in (*content["notes"], *content["limits_not_put_back"], content["lost"], content["stopped"]):
        if note:
            yield from _row("Note", note)
    yield "</table>"
    if content["failed"]:
        yield "<h2>What failed, by clause</h2><table>"
        for clause, sentences in content["failed"].items():
            yield from _row(f'<span class="failed">{clause or "the bench"}</span>', sentences)
        yield "</table>"
    yield "<h2>Checks</h2><table><tr><th>Check</th><th>Result</th><th>What it does, and its clauses</th></tr>"
    for check in content["checks"]:
        yield from _check(check)
    yield "</table><h2>Clauses not tested here</h2><table>"
    for clause, reason in content["not_tested_here"].items():
        yield from _row(clause, reason)
    yield "</table><h2>Clauses that cannot be tested from outside, or not wholly</h2><table>"
    for clause, reason in content["not_testable"].items():
        yield from _row(clause, reason)
    yield "</table></body></html>"


def _row(head: str, text: str | Iterable[str]) -> Iterator[str]:
    """A row; `head` is markup, `text` is not."""
    parts = [text] if isinstance(text, str) else list(text)
    yield f"<tr><th>{head}</th><td>{'<br>'.join(html.escape(part) for part in parts)}</td></tr>"


def _check(check: Mapping[str, Any]) -> Iterator[str]:
    notes = [*([check["why_not"]] if check["why_not"] else []), *check["notes"]]
    faults = [f"{' '.join(fault['clauses']) or 'the bench'}: {fault['text']}" for fault in check["faults"]]
    said = "".join(f"<br>{html.escape(note)}" for note in notes)
    said += "".join(f'<br><span class="failed">{html.escape(fault)}</span>' for fault in faults)
    yield f'<tr><td>{check["name"]}</td><td class="{CLASSES[check["result"]]}">{check["result"]}</td>'
    yield f"<td>{html.escape(check['text'])} <small>{' '.join(check['clauses'])}</small>{said}</td></tr>"
