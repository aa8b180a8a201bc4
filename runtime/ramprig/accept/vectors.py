"""The protocol's vectors that a live board can answer: which they are, read from the files that the codec is tested by.

Of `lines.json` every line for the board that ends and says nothing of arming; of `exchanges.json` those that need
neither inputs nor limits nor a board of their own, and whose answers are the same on any board.
"""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

HERE = Path(__file__).resolve()
INSTALLED = HERE.parents[1] / "_vectors"
"""Where a wheel has them."""
CHECKOUT = HERE.parents[3] / "protocol" / "vectors"
"""Where a checkout has them."""

SAME_ON_ANY_BOARD = {"beat", "why", "stop", "swing", "rest", "clear", "disarm", "nonsense", "boot", ""}
"""Requests whose answers in state `off` do not depend on the board; `rest` and `swing` are refused there."""
STEP_OWN = {"device", "limits", "inputs"}


@dataclass(frozen=True, slots=True)
class LineVector:
    """Bytes for the board and what they are: `gives` has kind, tag and reason of each line in them."""

    clause: str
    note: str
    data: bytes
    gives: tuple[tuple[str, str, str], ...]


@dataclass(frozen=True, slots=True)
class Step:
    """At `tick`, the exchange's own: bytes to send or lines to expect (bodies)."""

    tick: int
    send: str | None
    raw: bytes | None
    expect: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Exchange:
    """An exchange in state `off` on any board."""

    name: str
    clauses: tuple[str, ...]
    steps: tuple[Step, ...]


def _load(name: str) -> Any:
    """A file of vectors, None where they are not installed."""
    for folder in (INSTALLED, CHECKOUT):
        if (folder / name).exists():
            return json.loads((folder / name).read_text("utf-8"))
    return None


def line_vectors() -> list[LineVector]:
    """Every vector of `lines.json` that can be put to a live board in state `off`; none where the file is missing."""
    content = _load("lines.json")
    found = []
    for vector in content["from_host"] if content is not None else ():
        data = vector["bytes"].encode("latin-1")
        if data.endswith(b"\n") and b" arm " not in data:
            gives = tuple((g["kind"], g.get("tag", ""), g.get("reason", "")) for g in vector["gives"])
            found.append(LineVector(vector["clause"], vector["note"], data, gives))
    return found


def exchanges() -> list[Exchange]:
    """Every vector of `exchanges.json` that any board in state `off` must answer alike; none where it is missing."""
    content = _load("exchanges.json")
    return [_exchange(vector) for vector in (content["vectors"] if content is not None else ()) if _fits(vector)]


def _fits(vector: Any) -> bool:
    if STEP_OWN & set(vector) or any({"event", "inputs"} & set(step) for step in vector["steps"]):
        return False
    words = list(_words(vector))
    return bool(words) and set(words) <= SAME_ON_ANY_BOARD


def _words(vector: Any) -> Iterator[str]:
    """The words of the requests with a well-formed tag and, in raw lines, what looks like one."""
    for step in vector["steps"]:
        if "send" in step:
            yield "".join(step["send"].split(" ")[1:2])
        for match in re.finditer(r"(?:^|\n)[0-9a-f]{2} ([a-z]+)", step.get("raw", "")):
            yield "beat" if match[1] == "be" else match[1]
        if re.search(r"(?:^|\n)who\r?\n", step.get("raw", "")):
            yield "who"


def _exchange(vector: Any) -> Exchange:
    """The exchange, each expected line with the sending of its tick, without the board's start."""
    steps: list[Step] = []
    for step in vector["steps"]:
        expect = tuple(line for line in step.get("expect", ()) if not line.startswith("N00 boot"))
        raw = step["raw"].encode("latin-1") if "raw" in step else None
        if steps and raw is None and "send" not in step and steps[-1].tick == step["tick"]:
            steps[-1] = replace(steps[-1], expect=(*steps[-1].expect, *expect))
        else:
            steps.append(Step(step["tick"], step.get("send"), raw, expect))
    return Exchange(vector["name"], tuple(vector["clause"]), tuple(steps))
