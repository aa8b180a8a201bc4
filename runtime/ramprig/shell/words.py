"""The words of the shell: one table with the forms, the help and the examples of each, and what a line means."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from fractions import Fraction

from ramprig.bench import Bench, Motor, Servo, duty_parts
from ramprig.errors import UsageError
from ramprig.quantity import ANGLE, DURATION, DUTY, parse
from ramprig.yamlfile import shorten, suggestion

from . import commands as c
from .forms import Form, tokens_of

LINE_MAX = 400
"""Longest line that is read, in characters."""


@dataclass(frozen=True, slots=True)
class Filled:
    """The slots of a matched form as typed, read against a bench; each reading raises `UsageError`."""

    slots: Mapping[str, str]
    bench: Bench

    @property
    def motor(self) -> Motor:
        """MOTOR."""
        name = self.slots["MOTOR"]
        if any(servo.name == name for servo in self.bench.servos):
            raise UsageError(f"'{name}' is a servo; servos are led with 'move {name} ANGLE'")
        return self.bench.motor(name)

    @property
    def servo(self) -> Servo:
        """SERVO."""
        name = self.slots["SERVO"]
        if any(motor.name == name for motor in self.bench.motors):
            raise UsageError(f"'{name}' is a motor; motors are driven with 'jog {name}' or 'ramp {name} DUTY'")
        return self.bench.servo(name)

    @property
    def name(self) -> str:
        """NAME: a motor or a servo."""
        name = self.slots["NAME"]
        known = [motor.name for motor in self.bench.motors] + [servo.name for servo in self.bench.servos]
        if name not in known:
            raise UsageError(f"no motor or servo is called '{shorten(name)}'; {suggestion(name, known, 'there are')}")
        return name

    @property
    def duty(self) -> int:
        """DUTY, in 1/10000."""
        return duty_parts(parse(self.slots["DUTY"], DUTY))

    @property
    def time_s(self) -> float:
        """TIME, in s."""
        return parse(self.slots["TIME"], DURATION).to("s")

    @property
    def angle_deg(self) -> float:
        """ANGLE, in deg."""
        return parse(self.slots["ANGLE"], ANGLE).to("deg")

    @property
    def text(self) -> str:
        """TEXT."""
        return self.slots["TEXT"]

    @property
    def file(self) -> str:
        """FILE, without the quotes around it."""
        text = self.slots["FILE"]
        return text[1:-1] if len(text) > 2 and text[0] == text[-1] and text[0] in "'\"" else text


Build = Callable[[Filled], c.Command]


@dataclass(frozen=True, slots=True)
class Word:
    """One word: its forms with what each means, a sentence of help, more of it, and examples.

    In the examples `{motor}`, `{servo}` and `{low}` stand for names and an angle of the bench at hand.
    """

    name: str
    forms: tuple[tuple[Form, Build], ...]
    about: str
    more: tuple[str, ...] = ()
    examples: tuple[str, ...] = ()


def _word(about: str, *forms: tuple[str, Build], more: tuple[str, ...] = (), examples: tuple[str, ...] = ()) -> Word:
    name = forms[0][0].split()[0]
    return Word(name, tuple((Form(text), build) for text, build in forms), about, more, examples or (name,))


_STOP_MORE = ("Ctrl-C does the same during any command or paste; so do Ctrl-\\ and F12.",)

_TABLE = (
    _word(
        "tells of all words, or of one",
        ("help", lambda f: c.Help()),
        ("help WORD", lambda f: c.Help(f.slots["WORD"])),
        examples=("help", "help jog"),
    ),
    _word(
        "enables the outputs; nothing moves by this alone",
        ("arm", lambda f: c.Arm()),
        more=("The board stops by itself when it hears nothing for the lease that is told then.",),
    ),
    _word(
        "ends in order: outputs off, refused while a motor still turns under power",
        ("disarm", lambda f: c.Disarm()),
        examples=("disarm",),
    ),
    _word(
        "turns a motor while an arrow key is held, or for a time",
        ("jog MOTOR DUTY for TIME", lambda f: c.JogFor(f.motor, f.duty, f.time_s)),
        ("jog MOTOR", lambda f: c.JogHold(f.motor)),
        more=(
            "Held: Right is forward (positive duty), Left backward, Up and Down change the duty by 1 %.",
            "Letting go stops; so does any other key. q or Esc leaves. The other arrow stops first.",
            "A terminal does not tell when a key is let go: the first press runs for 0.6 s, and once the key",
            "repeats, the motor stops 0.15 s after the last repeat.",
        ),
        examples=("jog {motor} 20 % for 1 s", "jog {motor}"),
    ),
    _word(
        "leads a motor's duty to a value and leaves it there",
        ("ramp MOTOR DUTY in TIME", lambda f: c.RampTo(f.motor, f.duty, f.time_s)),
        ("ramp MOTOR DUTY", lambda f: c.RampTo(f.motor, f.duty)),
        more=("Without a time it goes as fast as the slew limit allows. The direction changes only at zero.",),
        examples=("ramp {motor} 15 %", "ramp {motor} 0 % in 500 ms"),
    ),
    _word(
        "lets a motor fall to zero and rest unpowered",
        ("coast MOTOR", lambda f: c.Release(f.motor, brake=False)),
        examples=("coast {motor}",),
    ),
    _word(
        "lets a motor fall to zero and rest shorted, which holds it back",
        ("brake MOTOR", lambda f: c.Release(f.motor, brake=True)),
        examples=("brake {motor}",),
    ),
    _word(
        "leads a servo to an angle, or takes its pulses away",
        ("move SERVO off", lambda f: c.MoveOff(f.servo)),
        ("move SERVO ANGLE in TIME", lambda f: c.Move(f.servo, f.angle_deg, f.time_s)),
        ("move SERVO ANGLE", lambda f: c.Move(f.servo, f.angle_deg)),
        more=("A servo does not tell where it is: its first pulse sends it to its home at its own speed.",),
        examples=("move {servo} {low} deg", "move {servo} 0 deg in 2 s", "move {servo} off"),
    ),
    _word(
        "lets time pass before the next command; for lines that are piped in",
        ("wait TIME", lambda f: c.Wait(f.time_s)),
        examples=("wait 500 ms",),
    ),
    _word(
        "stops everything: duty falls to zero, then the outputs go off (category 1)",
        ("stop", lambda f: c.StopAll(1)),
        more=_STOP_MORE,
    ),
    _word(
        "cuts all outputs at once (category 0)",
        ("cut", lambda f: c.StopAll(0)),
        more=("Ctrl-C twice within a second does the same during any command or paste.",),
    ),
    _word("tells of the last trip and its figures", ("why", lambda f: c.Why())),
    _word(
        "ends the latch of a trip; refused while its cause persists",
        ("clear", lambda f: c.Clear()),
        more=("The outputs stay off until 'arm'. Look for the cause first: 'why' and 'trail'.",),
    ),
    _word("tells what the device does and measures now", ("state", lambda f: c.State())),
    _word(
        "tells the limits in force on the board",
        ("limits NAME", lambda f: c.Limits(f.name)),
        ("limits", lambda f: c.Limits()),
        examples=("limits", "limits {motor}"),
    ),
    _word(
        "writes samples and events into a run folder",
        ("log start", lambda f: c.LogStart()),
        ("log start TEXT", lambda f: c.LogStart(f.text)),
        ("log stop", lambda f: c.LogStop()),
        more=("TEXT names the run. Every sample is accounted for at the end.",),
        examples=("log start", "log stop", "log start bring-up", "log stop"),
    ),
    _word("writes a marked tick into the log", ("mark TEXT", lambda f: c.Mark(f.text)), examples=("mark vent open",)),
    _word(
        "writes a remark into the log",
        ("note TEXT", lambda f: c.Note(f.text)),
        examples=("note brush noise above 40 %",),
    ),
    _word(
        "tells of the fast record that the board keeps around a trip",
        ("trail MOTOR", lambda f: c.Trail(f.motor)),
        examples=("trail {motor}",),
    ),
    _word(
        "runs a sequence file; the outputs are off at its end",
        ("run FILE", lambda f: c.RunFile(f.file)),
        examples=("run vent_endurance.yaml",),
    ),
    _word(
        "prints the plan of a sequence file; nothing moves",
        ("check FILE", lambda f: c.CheckFile(f.file)),
        examples=("check vent_endurance.yaml",),
    ),
    _word("tells the counters of the link, on both ends", ("counters", lambda f: c.Counts())),
    _word("tells which board answers", ("who", lambda f: c.Who())),
    _word(
        "opens the device anew after a restart, a lost link or a stop that was not confirmed",
        ("reopen", lambda f: c.Reopen()),
    ),
    _word(
        "ends the shell once the outputs are off and confirmed",
        ("leave", lambda f: c.Leave()),
        more=("Ctrl-D on an empty line does the same.",),
    ),
)

WORDS: Mapping[str, Word] = {word.name: word for word in _TABLE}
"""Every word by its name, in the order of the help."""


def read_line(line: str, bench: Bench) -> c.Command | None:
    """The command that a line means, None for an empty one or a comment (`#` and what follows).

    Raises `UsageError` that says what was found and what would be right; no other exception, whatever the text.
    """
    text = line.strip()
    if not text or text.startswith("#"):
        return None
    if len(text) > LINE_MAX:
        raise UsageError(f"the line has {len(text)} characters; at most {LINE_MAX} are read")
    if any(not (sign.isprintable() or sign == "\t") for sign in text):
        raise UsageError("the line has signs that cannot be printed; nothing was done with it")
    name = tokens_of(text)[0].text
    if name not in WORDS:
        raise UsageError(f"no word is called '{shorten(name)}'; {suggestion(name, WORDS, 'the words are')}")
    return _matched(WORDS[name], text, bench)


def _matched(word: Word, text: str, bench: Bench) -> c.Command:
    found = [(form.literals, build, slots) for form, build in word.forms if (slots := form.match(text)) is not None]
    if not found:
        forms = " or ".join(f"'{form.text}'" for form, _ in word.forms)
        example = filled_example(word.examples[0], bench)
        raise UsageError(f"found '{shorten(text)}'; write {forms}, such as '{example}'")
    _, build, slots = max(found, key=lambda entry: entry[0])
    return build(Filled(slots, bench))


def filled_example(example: str, bench: Bench) -> str:
    """An example with the names of this bench."""
    motor = bench.motors[0].name if bench.motors else "MOTOR"
    servo = bench.servos[0] if bench.servos else None
    low = Fraction(0) if servo is None else Fraction(round(servo.low_deg / 2))
    return example.format(motor=motor, servo=servo.name if servo else "SERVO", low=low)


def help_lines(word_name: str, bench: Bench) -> list[str]:
    """What `help` says: all words, or one with its forms and examples. Raises `UsageError` for an unknown word."""
    if not word_name:
        width = max(map(len, WORDS))
        lines = [f"  {word.name:{width}}  {word.about}" for word in WORDS.values()]
        return [*lines, "'help WORD' tells how to write it. Ctrl-C stops, twice within a second cuts."]
    if word_name not in WORDS:
        raise UsageError(f"no word is called '{shorten(word_name)}'; {suggestion(word_name, WORDS, 'the words are')}")
    word = WORDS[word_name]
    lines = [f"{word.name} {word.about}.", *(f"  {form.text}" for form, _ in word.forms)]
    lines += [f"  {sentence}" for sentence in word.more]
    return [*lines, "For example:", *(f"  {filled_example(example, bench)}" for example in word.examples)]
