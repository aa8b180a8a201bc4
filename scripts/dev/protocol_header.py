"""Write the C form of protocol.toml: `firmware_ref/core/words.h`."""

from __future__ import annotations

from typing import Any

Protocol = dict[str, Any]  # what tomllib gives; its shape is plain in protocol.toml
Row = dict[str, Any]

TOP = """\
/* The words, numbers, reasons, channels, limits and trips of the ramprig line protocol.
 *
 * Made from protocol/protocol.toml by scripts/dev/generate_protocol.py; do not edit. SPEC.md says what they mean.
 *
 * Each RR_..._LIST(X) is a table: define X to take a row's columns, expand the list where the table is wanted (an array
 * in flash, a switch), and undefine X. Nothing in this header takes memory by itself.
 *
 * Kinds of arguments, one letter each in a word's row, in order on the wire:
 *   u  unsigned 32 bits      i  signed 32 bits      h  eight hex digits
 *   a  axis number           s  servo number        n  duration in ticks     t  tick
 *   R  word of rests         F  word of forms       L  word of limits        ?  the kind before it may be absent
 */
#ifndef RAMPRIG_WORDS_H
#define RAMPRIG_WORDS_H
"""

LETTERS = {
    "u32": "u", "i32": "i", "hex8": "h", "axis": "a", "servo": "s", "ticks": "n", "tick": "t",
    "word:rests": "R", "word:forms": "F", "word:limits": "L",
}  # fmt: skip

LISTS = {"states": "STATE", "sources": "SOURCE", "causes": "CAUSE", "rests": "REST", "forms": "FORM"}

BEYOND_16_BITS = 32767


def number(value: int, suffix: str = "L") -> str:
    """The value as C writes it: with the suffix where an int of 16 bits is too small."""
    return f"{value}{suffix}" if abs(value) > BEYOND_16_BITS else str(value)


def padded(rows: list[list[str]]) -> list[str]:
    """Each row's cells joined with commas, in columns."""
    widths = [max(len(row[i]) for row in rows) for i in range(len(rows[0]))]
    lines = []
    for row in rows:
        cells = [f"{cell}," for cell in row[:-1]] + [row[-1]]
        lines.append(" ".join(cell.ljust(width + 1) for cell, width in zip(cells, widths, strict=True)).rstrip())
    return lines


def listed(name: str, columns: str, rows: list[list[str]]) -> list[str]:
    """One X-macro table."""
    body = [f"    X({line})" for line in padded(rows)]
    ends = [f"{line} \\" for line in body[:-1]] + [body[-1]]
    return ["", f"/* X({columns}) */", f"#define RR_{name}_LIST(X) \\", *ends]


def enumerated(name: str, rows: list[tuple[str, int, str]], *, count: bool = False) -> list[str]:
    """One enum, each entry with its meaning."""
    prefix = f"RR_{name}_"
    width = max(len(entry) for entry, _, _ in rows)
    entries = [f"    {prefix}{entry.ljust(width)} = {value},  /* {text} */" for entry, value, text in rows]
    if count:
        entries.append(f"    {prefix}{'COUNT'.ljust(width)} = {len(rows)}")
    else:
        entries[-1] = entries[-1].replace(",  /*", "   /*", 1)
    return ["", f"enum rr_{name.lower()} {{", *entries, "};"]


def letters(args: list[str]) -> str:
    """The kinds of a word's arguments in letters."""
    found = ""
    for arg in args:
        kind = arg.split(":", 1)[1]
        found += LETTERS[kind.removesuffix("?")] + ("?" if kind.endswith("?") else "")
    return found


def cased(row: Row) -> str:
    """A row's name in capitals, as identifiers end."""
    return str(row["name"]).upper()


def number_lines(protocol: Protocol) -> list[str]:
    """The constants."""
    rows = [("VERSION", protocol["version"], "version of the protocol")]
    rows += [(row["name"], row["value"], f"{row['unit']}: {row['text']}") for row in protocol["numbers"]]
    return [f"#define RR_{name.ljust(20)} {number(value, 'UL').ljust(13)} /* {text} */" for name, value, text in rows]


def word_lines(protocol: Protocol) -> list[str]:
    """The requests, notices and reasons: numbers for a program's own use, which do not travel."""
    states = {row["name"]: row["number"] for row in protocol["states"]}
    words, notices, reasons = protocol["words"], protocol["notices"], protocol["reasons"]
    lines = []
    for name, rows in (("WORD", words), ("NOTICE", notices), ("REASON", reasons)):
        lines += enumerated(name, [(cased(row), i, row["text"]) for i, row in enumerate(rows)], count=True)
    cells = []
    for row in words:
        mask = sum(1 << states[state] for state in row["states"])
        cells.append([cased(row), f'"{row["name"]}"', f'"{letters(row["args"])}"', f"0x{mask:02x}"])
    lines += listed("WORD", 'NAME, "word", "kinds of the arguments", states allowed as bits', cells)
    for name, rows in (("NOTICE", notices), ("REASON", reasons)):
        lines += listed(name, 'NAME, "word"', [[cased(row), f'"{row["name"]}"'] for row in rows])
    return lines


def table_lines(protocol: Protocol) -> list[str]:
    """The tables whose numbers travel."""
    lines = []
    for table, name in LISTS.items():
        rows = protocol[table]
        lines += enumerated(name, [(cased(row), row["number"], row["text"]) for row in rows])
        cells = [[cased(row), f'"{row["name"]}"', str(row["number"])] for row in rows]
        lines += listed(name, 'NAME, "word", number', cells)
    trips = protocol["trips"]
    lines += enumerated("TRIP", [(cased(row), row["number"], row["text"]) for row in trips], count=True)
    cells = [[cased(row), f'"{row["name"]}"', str(row["number"]), str(row["category"])] for row in trips]
    lines += listed("TRIP", 'NAME, "word", number, stop category', cells)
    lines.append("")
    for row in protocol["caps"]:
        lines.append(f"#define RR_CAP_{cased(row).ljust(13)} (1u << {row['bit']})  /* {row['text']} */")
    return lines


def limit_lines(rows: list[Row]) -> list[str]:
    """The limits in order of their numbers, which is the order of the digest."""
    ordered = sorted(rows, key=lambda row: int(row["number"]))
    lines = enumerated("LIMIT", [(cased(row), row["number"], f"{row['unit']}: {row['text']}") for row in ordered])
    lines += enumerated("PER", [("DEVICE", 0, "one"), ("AXIS", 1, "one an axis"), ("SERVO", 2, "one a servo")])
    lines += enumerated(
        "TIGHTER",
        [("NONE", 0, "not while armed"), ("LOWER", 1, "less is tighter"), ("HIGHER", 2, "more is tighter")],
    )
    cells = []
    for row in ordered:
        place = [cased(row), f'"{row["name"]}"', str(row["number"]), row["per"].upper()]
        cells.append([*place, *(number(row[key]) for key in ("min", "max", "default")), row["tighter"].upper()])
    return lines + listed("LIMIT", 'NAME, "word", number, RR_PER_..., least, greatest, default, RR_TIGHTER_...', cells)


def channel_lines(protocol: Protocol) -> list[str]:
    """The channels of `log` and the parts of the state channel."""
    keys = ("first_bit", "step", "bits", "order")
    cells = [[cased(row), row["per"].upper(), *(str(row[key]) for key in keys)] for row in protocol["channels"]]
    lines = listed("CHANNEL", "NAME, RR_PER_..., first bit of the mask, step, width, order of the difference", cells)
    lines.append("")
    for row in protocol["state_bits"]:
        name = f"RR_BITS_{cased(row)}"
        mask = (1 << row["width"]) - 1
        lines.append(f"#define {(name + '_LOW').ljust(23)} {row['low']}  /* {row['text']} */")
        lines.append(f"#define {(name + '_MASK').ljust(23)} 0x{mask:x}u  /* after shifting down */")
    return lines


def header(protocol: Protocol) -> str:
    """The whole text of words.h."""
    lines = [TOP, *number_lines(protocol)]
    lines += table_lines(protocol)
    lines += word_lines(protocol)
    lines += limit_lines(protocol["limits"])
    lines += channel_lines(protocol)
    return "\n".join([*lines, "", "#endif"]) + "\n"
