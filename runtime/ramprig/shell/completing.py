"""What may come next in a line: words, names of the bench, units and small words, out of the grammar's own table."""

from __future__ import annotations

from dataclasses import dataclass

from ramprig.bench import Bench

from .forms import QUANTITIES, Form, is_bare_number, tokens_of
from .words import WORDS


@dataclass(frozen=True, slots=True)
class Choice:
    """One possible continuation of the word at the cursor, and a few words on it."""

    text: str
    about: str = ""


def choices(line: str, bench: Bench) -> list[Choice]:
    """What the word at the end of `line` may become, each once, in the order of the table."""
    word = begun_word(line)
    before = line[: len(line) - len(word)]
    if not tokens_of(before):
        found = [Choice(name, entry.about) for name, entry in WORDS.items()]
    else:
        entry = WORDS.get(tokens_of(before)[0].text)
        found = [] if entry is None else [choice for form, _ in entry.forms for choice in _next(form, before, bench)]
    fitting = (choice for choice in found if choice.text.startswith(word) and choice.text != word)
    return list(dict.fromkeys(fitting))


def wants_file(line: str) -> str | None:
    """The begin of a file name that is being typed, None where no file stands there."""
    for name, entry in WORDS.items():
        if any("FILE" in form.parts for form, _ in entry.forms) and line.lstrip().startswith(name + " "):
            return line.lstrip()[len(name) :].lstrip()
    return None


def begun_word(line: str) -> str:
    """The word at the end of the line as far as it is typed, empty after a blank."""
    return "" if not line or line[-1].isspace() else tokens_of(line)[-1].text


def _next(form: Form, before: str, bench: Bench) -> list[Choice]:
    due = form.next_part(before)
    if due is None:
        return []
    part, number = due
    motors = [Choice(motor.name, "motor") for motor in bench.motors]
    servos = [Choice(servo.name, "servo") for servo in bench.servos]
    match part:
        case "MOTOR":
            return motors
        case "SERVO":
            return servos
        case "NAME":
            return motors + servos
        case "WORD":
            return [Choice(name, entry.about) for name, entry in WORDS.items()]
    if part in QUANTITIES:
        return _in_quantity(form, part, number)
    return [] if part.isupper() or not part else [Choice(part)]


def _in_quantity(form: Form, part: str, number: str) -> list[Choice]:
    if not number:
        return []
    if is_bare_number(number):
        return [Choice(symbol, "unit") for symbol in QUANTITIES[part].symbols]
    literal = form.literal_after(part)
    return [] if literal is None else [Choice(literal)]
