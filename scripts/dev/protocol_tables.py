"""Write the tables of SPEC.md between their marks, from protocol.toml."""

from __future__ import annotations

import re
from typing import Any

Protocol = dict[str, Any]  # what tomllib gives; its shape is plain in protocol.toml
Row = dict[str, Any]

MARKED = re.compile(r"<!-- table (\w+) -->\n.*?<!-- end -->", re.DOTALL)


def code(text: object) -> str:
    """The text as code."""
    return f"`{text}`"


def field(text: str) -> str:
    """One entry of `args` or `fields` as a reader sees it: its name, and its kind where the name does not tell."""
    name, kind, *rest = text.removesuffix("?").split(":")
    if kind == "group":
        return "for each of the " + name + ": " + ", ".join(code(part) for part in rest[0].split(","))
    shown = code(f"{name}") + (f" ({kind} of {rest[0]})" if kind == "word" else f" ({kind})")
    return f"[{shown}]" if text.endswith("?") else shown


def fields(texts: list[str]) -> str:
    """A list of fields, or a dash."""
    return ", ".join(field(text) for text in texts) or "-"


def table(heads: list[str], rows: list[list[str]]) -> str:
    """A Markdown table."""
    lines = ["| " + " | ".join(heads) + " |", "|" + "---|" * len(heads)]
    lines += ["| " + " | ".join(cell.replace("|", "\\|") for cell in row) + " |" for row in rows]
    return "\n".join(lines)


def words(rows: list[Row]) -> str:
    """Requests."""
    every = max(len(row["states"]) for row in rows)
    body = [
        [
            code(row["name"]),
            fields(row["args"]),
            fields(row["fields"]),
            "all" if len(row["states"]) == every else ", ".join(row["states"]),
            row["text"],
        ]
        for row in rows
    ]
    return table(["word", "arguments", "fields of `ok`", "states", "meaning"], body)


def limits(rows: list[Row]) -> str:
    """Limits."""
    keys = ("number", "per", "min", "max", "default", "unit", "tighter", "text")
    body = [[code(row["name"]), *(str(row[key]) for key in keys)] for row in rows]
    return table(["item", "number", "per", "least", "greatest", "default", "unit", "tighter", "meaning"], body)


def bit_range(row: Row) -> str:
    """The bits of a channel, such as `0, 3, 6, 9`."""
    count = 1 if row["per"] == "device" else 4
    return ", ".join(str(row["first_bit"] + i * row["step"]) for i in range(count))


def channels(rows: list[Row]) -> str:
    """Channels with their bits."""
    body = [
        [code(row["name"]), row["per"], bit_range(row), str(row["bits"]), str(row["order"]), row["unit"], row["text"]]
        for row in rows
    ]
    return table(["channel", "per", "bits in the mask", "width", "order", "unit", "meaning"], body)


def state_bits(rows: list[Row]) -> str:
    """Parts of the state channel."""
    body = []
    for row in rows:
        low, high = row["low"], row["low"] + row["width"] - 1
        body.append([code(row["name"]), str(low) if low == high else f"{low} to {high}", row["text"]])
    return table(["part", "bits", "meaning"], body)


def numbered(key: str) -> list[str]:
    """The heads of a table of words with a number or bit."""
    return ["word", key, "meaning"]


def text_of(name: str, protocol: Protocol) -> str:
    """The table called `name`; KeyError where there is none of that name."""
    rows: list[Row] = protocol[name]
    match name:
        case "words":
            return words(rows)
        case "limits":
            return limits(rows)
        case "channels":
            return channels(rows)
        case "state_bits":
            return state_bits(rows)
        case "numbers":
            body = [[code(row["name"]), str(row["value"]), row["unit"], row["text"]] for row in rows]
            return table(["name", "value", "unit", "meaning"], body)
        case "reasons":
            return table(["reason", "meaning"], [[code(row["name"]), row["text"]] for row in rows])
        case "notices":
            body = [[code(row["name"]), fields(row["fields"]), row["text"]] for row in rows]
            return table(["notice", "fields", "meaning"], body)
        case "trips":
            keys = ("number", "category", "value", "bound", "text")
            body = [[code(row["name"]), *(str(row[key]) for key in keys)] for row in rows]
            return table(["trip", "number", "category", "value", "bound", "meaning"], body)
        case _:
            key = "bit" if "bit" in rows[0] else "number"
            return table(numbered(key), [[code(row["name"]), str(row[key]), row["text"]] for row in rows])


def with_tables(spec: str, protocol: Protocol) -> str:
    """`spec` with every marked table made anew; KeyError where a mark names no table."""

    def made(mark: re.Match[str]) -> str:
        name = mark[1]
        return f"<!-- table {name} -->\n{text_of(name, protocol)}\n<!-- end -->"

    return MARKED.sub(made, spec)
