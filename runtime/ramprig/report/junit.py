"""`junit.xml` of runs: one test case for each expectation, each limit to wear or that trips, the run, and its account.

An expectation that was never judged, as the run ended before it, is skipped with the reason.

The attributes are those that the schema of the Jenkins xUnit plugin (G. Boissinot, MIT, as kept by pytest in
`junit-10.xsd`) takes in the places where it takes them. Measured values stand in `system-out`, as some readers refuse
properties inside a test case.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from xml.sax.saxutils import escape, quoteattr

from ramprig.record.events import from_rfc3339, rfc3339
from ramprig.record.reading import Audit
from ramprig_link.words import LIMITS

from .explain import explain
from .facts import UNDER_WAY, Expectation, Facts
from .page import clean
from .protections import TRIPS, is_off
from .unjudged import unjudged, why_unjudged
from .worn import wear_cases

FAILURES_TOLD = 20


@dataclass(frozen=True, slots=True)
class Case:
    """One test case; `failure` or `error` say why it did not pass, `skipped` why it was not judged."""

    group: str
    name: str
    out: str
    failure: str = ""
    error: str = ""
    skipped: str = ""

    def xml(self) -> str:
        """As an element."""
        inner = ""
        for kind, message in (("failure", self.failure), ("error", self.error), ("skipped", self.skipped)):
            if message:
                inner += f"<{kind} message={_quoted(message)}></{kind}>"
        inner += f"<system-out>{escape(clean(self.out))}</system-out>"
        return f'<testcase classname={_quoted(self.group)} name={_quoted(self.name)} time="0">{inner}</testcase>'


def _quoted(text: str) -> str:
    return quoteattr(clean(text).replace("\n", " ").replace("\t", " "))


def junit_xml(runs: Sequence[Facts], audits: Sequence[Audit] = ()) -> str:
    """The whole file, one suite for each run; where audits of them are given, with a case of the account of each."""
    suites = [(facts, list(cases_of(facts))) for facts in runs]
    for (_, cases), audit in zip(suites, audits, strict=False):
        cases.insert(1, _account_case(audit))
    every = [case for _, cases in suites for case in cases]
    total = sum(_elapsed_s(facts) for facts in runs)
    body = "\n".join(_suite(facts, cases) for facts, cases in suites)
    return (
        '<?xml version="1.0" encoding="UTF-8"?>\n'
        f'<testsuites name="ramprig" {_counts(every)} time="{total:.3f}">\n{body}\n</testsuites>\n'
    )


def _counts(cases: Sequence[Case]) -> str:
    failures = sum(bool(case.failure) for case in cases)
    errors = sum(bool(case.error) for case in cases)
    return f'tests="{len(cases)}" failures="{failures}" errors="{errors}"'


def _suite(facts: Facts, cases: Sequence[Case]) -> str:
    manifest = facts.manifest
    device = manifest.get("device") or {}
    pairs = {
        "run": facts.name,
        "verdict": facts.verdict,
        "stop_reason": str(manifest.get("stop_reason")),
        "port": str(manifest.get("port")),
        "board": f"{device.get('board')} {device.get('serial')}",
        "ramprig": str((manifest.get("software") or {}).get("ramprig")),
    }
    properties = "".join(f"<property name={_quoted(key)} value={_quoted(value)}/>" for key, value in pairs.items())
    skipped = sum(bool(case.skipped) for case in cases)
    body = "\n".join(case.xml() for case in cases)
    return (
        f'<testsuite name={_quoted(facts.name)} {_counts(cases)} skipped="{skipped}" time="{_elapsed_s(facts):.3f}"'
        f"{_timestamp(facts)}>\n<properties>{properties}</properties>\n{body}\n</testsuite>"
    )


def _timestamp(facts: Facts) -> str:
    """When it began, without fractions: readers of the format take no others."""
    try:
        started = from_rfc3339(str(facts.manifest.get("started")))
    except ValueError:
        return ""
    return f' timestamp="{rfc3339(started.timestamp(), decimals=0)}"'


def _elapsed_s(facts: Facts) -> float:
    return sum(float((part.get("results") or {}).get("elapsed_s") or 0.0) for part in facts.parts)


def cases_of(facts: Facts) -> Iterator[Case]:
    """The run itself, its expectations, the limits to wear, and the limits in force."""
    yield _run_case(facts)
    for found in facts.expectations.values():
        yield _expectation_case(found)
    missed, trouble = unjudged(facts)
    for found in missed:
        yield Case(found.place, found.text, f"limit: {found.limit}", skipped=why_unjudged(facts))
    if trouble:
        yield Case("run", "expectations that were not judged", trouble, skipped=f"they cannot be told: {trouble}")
    for worn in wear_cases(facts):
        yield Case(worn.group, worn.name, worn.out, failure=worn.failure, skipped=worn.skipped)
    yield from _limit_cases(facts)


def _limit_cases(facts: Facts) -> Iterator[Case]:
    """Each limit of the board that trips."""
    armed = bool(facts.counts["armed"])
    tripped = {(event["trip"], int(event.get("index", 0))): event for event in facts.of("tripped")}
    for (item, index), value in facts.limits.items():
        if item not in TRIPS:
            continue
        per_axis = LIMITS[item].per.name == "AXIS"
        name = f"{facts.motor_on(index)}: {item}" if per_axis else item
        out = f"limit {item} = {value} (protocol units), trip {TRIPS[item]}"
        event = tripped.get((TRIPS[item], index))
        if event is not None and facts.was_outlived(event):
            yield Case("limits", name, f"{out}\ntripped at {event.get('time_s')} s; the run was gone on with")
        elif event is not None:
            failure = f"tripped: {TRIPS[item]}, value {event.get('value')}, bound {event.get('bound')}"
            yield Case("limits", name, f"{out}\nat {event.get('time_s')} s of the run", failure=failure)
        elif is_off(facts.limits, item, index):
            yield Case("limits", name, out, skipped="this protection is off in the bench file")
        elif not armed:
            yield Case("limits", name, out, skipped="the outputs were never enabled in this run")
        else:
            yield Case("limits", name, f"{out}\nnot reached")


def _run_case(facts: Facts) -> Case:
    """Whether every step was carried out. A failed expectation or limit to wear has a case of its own; where none has
    failed, a failed run's reason fails this one. A run that wrote nothing down of its steps is not judged.
    """
    name = "carried out to its end"
    none = "the run was still being written" if facts.verdict == UNDER_WAY else "the run never ended in order"
    reason = str(facts.manifest.get("stop_reason") or none)
    explanation = explain(facts)
    out = f"verdict: {facts.verdict}\n{reason}"
    if explanation is not None:
        out += "\n" + "\n".join(explanation.lines())
    if facts.verdict == "passed":
        return Case("run", name, out)
    message = f"{facts.verdict}: {reason}"
    if facts.verdict == "failed" and facts.carried_out is not False and _has_failure(facts):
        unknown = "" if facts.carried_out else "whether every step was carried out was not written down"
        return Case("run", name, out, skipped=unknown)
    if facts.verdict in ("failed", "tripped"):
        return Case("run", name, out, failure=message)
    return Case("run", name, out, error=message)


def _account_case(audit: Audit) -> Case:
    """Whether every sample is in the files or told as lost, and no file was changed."""
    out = "\n".join([f"{audit.rows} rows, {audit.known_lost} samples told as lost", *audit.statements])
    return Case("run", "account of the samples", out, failure="; ".join(audit.statements))


def _has_failure(facts: Facts) -> bool:
    """Whether an expectation or a limit to wear has failed, which has a case of its own."""
    return any(found.failed for found in facts.expectations.values()) or any(w.failure for w in wear_cases(facts))


def _expectation_case(found: Expectation) -> Case:
    lines = [
        f"judged {found.judged} times, failed {found.failed} times",
        f"limit: {found.limit}",
        f"last found: {found.last_found}",
    ]
    if found.span:
        lines.append(f"values: {found.span}")
    lines += [f"failed at {e.get('time_s')} s: found {e.get('found')}" for e in found.failures[:FAILURES_TOLD]]
    failure = ""
    if found.failed:
        first = found.failures[0]
        why = f" ({first['why']})" if first.get("why") else ""
        failure = f"{found.text}: found {first.get('found')}{why}, {found.failed} of {found.judged} times"
    return Case(found.place, found.text, "\n".join(lines), failure=failure)
