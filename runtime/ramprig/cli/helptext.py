"""How `--help` is set: paragraphs filled to the terminal, lists with a hanging indent, examples left as they are."""

from __future__ import annotations

import argparse
import re
import textwrap

WIDTH_MAX = 110
"""Columns beyond which lines are hard to read."""


ENTRY = re.compile(r" +\S+ {2,}(?=\S)")
"""The begin of an entry of a list: its name, and blanks up to where its text begins."""


class HelpText(argparse.HelpFormatter):
    """Fills each paragraph of a description or an epilog by itself; where it has indented lines, each of them."""

    def _fill_text(self, text: str, width: int, indent: str) -> str:
        paragraphs = (self._paragraph(part, width, indent) for part in text.strip("\n").split("\n\n"))
        return "\n\n".join(paragraphs)

    def _paragraph(self, text: str, width: int, indent: str) -> str:
        lines = text.split("\n")
        if not any(line.startswith(" ") for line in lines):
            return _filled(" ".join(lines), width, indent, indent)
        return "\n".join(self._entry(line, width, indent) for line in lines)

    def _entry(self, line: str, width: int, indent: str) -> str:
        entry = ENTRY.match(line)
        if entry is None:
            return indent + line
        head = indent + entry.group()
        return _filled(line[entry.end() :], width, head, " " * len(head))


def _filled(text: str, width: int, first: str, later: str) -> str:
    return textwrap.fill(
        text,
        min(width, WIDTH_MAX),
        initial_indent=first,
        subsequent_indent=later,
        break_long_words=False,
        break_on_hyphens=False,
    )
