"""Write the Verilog form of protocol.toml: `firmware_ref/fpga/words.vh`, what gates speak of."""

from __future__ import annotations

from typing import Any

Protocol = dict[str, Any]  # what tomllib gives; its shape is plain in protocol.toml

TOP = """\
// The numbers, states and trips of the ramprig line protocol that gates speak of.
//
// Made from protocol/protocol.toml by scripts/dev/generate_protocol.py; do not edit. SPEC.md says what they mean.
`ifndef RAMPRIG_WORDS_VH
`define RAMPRIG_WORDS_VH
"""

DUTY_BITS = 14
STATE_BITS = 2
TRIP_BITS = 4
NUMBERS = ("DUTY_FULL",)
"""The only number of the protocol that a gate needs as such; the limits come from the processor."""


def value_of(bits: int, value: int) -> str:
    """A number of so many bits, as Verilog writes it."""
    return f"{bits}'d{value}"


def defined(name: str, bits: int, value: int, text: str) -> str:
    """One constant with its meaning."""
    return f"`define {('RR_' + name).ljust(24)} {value_of(bits, value).ljust(10)} // {text}"


def header(protocol: Protocol) -> str:
    """The whole text of words.vh."""
    lines = [
        defined(row["name"], DUTY_BITS, row["value"], f"{row['unit']}: {row['text']}")
        for row in protocol["numbers"]
        if row["name"] in NUMBERS
    ]
    for table, name, bits in (("states", "STATE", STATE_BITS), ("trips", "TRIP", TRIP_BITS)):
        rows = protocol[table]
        lines += ["", *(defined(f"{name}_{row['name'].upper()}", bits, row["number"], row["text"]) for row in rows)]
    return "\n".join([TOP, *lines, "", "`endif"]) + "\n"
