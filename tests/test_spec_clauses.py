"""Every clause of SPEC.md with a "must" is cited by a test or a vector, and nothing cites a clause there is not.

A test cites with the word SPEC and the ids behind it, `SPEC TAG-3` or `SPEC TAG-3, TAG-4 and S1`, in a comment or
string; a vector with `"clause": "TAG-3"`.
"""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parent.parent
SPEC = ROOT / "protocol" / "SPEC.md"

ID = r"(?:[A-Z]+-\d+|S\d+)"
CLAUSE = re.compile(rf"^(?:- |\d+\. )\[({ID})\](.*?)(?=^(?:- |\d+\. )\[|^#|^<!--|\Z)", re.DOTALL | re.MULTILINE)
CITATION = re.compile(rf"\bSPEC ({ID}(?:(?:, | and |, and ){ID})*)\b")

# Clauses with a "must" that nothing cites yet. The list must be exactly right: take an id out once something cites it.
UNCITED = ""


def clauses(spec: str) -> dict[str, str]:
    """Every clause of the text by its id."""
    found = CLAUSE.findall(spec)
    assert len({name for name, _ in found}) == len(found), "an id stands twice"
    return dict(found)


def cited_in_text(text: str) -> set[str]:
    return {name for match in CITATION.finditer(text) for name in re.findall(ID, match[1])}


def cited_in_vectors(value: Any) -> Iterator[str]:
    """The ids under every key `clause`, which holds one id or a list of them."""
    if isinstance(value, dict):
        for key, inner in value.items():
            if key == "clause":
                yield from [inner] if isinstance(inner, str) else inner
            else:
                yield from cited_in_vectors(inner)
    elif isinstance(value, list):
        for inner in value:
            yield from cited_in_vectors(inner)


def cited() -> set[str]:
    found: set[str] = set()
    for path in sorted((ROOT / "tests").glob("*.py")):
        if path != Path(__file__).resolve():
            found |= cited_in_text(path.read_text("utf-8"))
    for path in sorted((ROOT / "protocol" / "vectors").glob("*.json")):
        found.update(cited_in_vectors(json.loads(path.read_text("utf-8"))))
    return found


def test_every_clause_with_a_must_is_cited_but_for_those_listed() -> None:
    required = {name for name, text in clauses(SPEC.read_text("utf-8")).items() if re.search(r"\bmust\b", text)}
    assert sorted(required - cited()) == sorted(UNCITED.split())


def test_nothing_cites_a_clause_that_does_not_exist() -> None:
    assert sorted(cited() - set(clauses(SPEC.read_text("utf-8")))) == []


def test_the_spec_refers_to_clauses_that_exist() -> None:
    text = SPEC.read_text("utf-8")
    assert sorted(set(re.findall(rf"\[({ID})\]", text)) - set(clauses(text))) == []


def test_clauses_and_citations_are_recognised() -> None:
    spec = "- [TAG-1] A host must.\n  More of it.\n- [S2] May.\n\n1. [CHAIN-1] must [TAG-1]\n## 2\nmust"
    assert clauses(spec) == {
        "TAG-1": " A host must.\n  More of it.\n",
        "S2": " May.\n\n",
        "CHAIN-1": " must [TAG-1]\n",
    }
    assert cited_in_text("# SPEC TAG-1, S2 and CHAIN-1; see SPEC.md BAD-1, and SPEC BAD-2") == {
        *("TAG-1", "S2", "CHAIN-1", "BAD-2"),
    }
    assert set(cited_in_vectors({"a": [{"clause": "TAG-1"}, {"clause": ["S2", "S3"]}]})) == {"TAG-1", "S2", "S3"}
