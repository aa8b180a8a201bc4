"""The shell on a terminal: one long-lived application with an input line and status lines under it.

Everything said goes above the input line, which keeps what is half typed. The application never runs a command itself:
it posts to the worker and goes on reading keys.
"""

from __future__ import annotations

import asyncio
import contextlib
import time
from collections.abc import Callable, Iterable
from functools import partial
from pathlib import Path

from prompt_toolkit.application import Application, get_app, run_in_terminal
from prompt_toolkit.auto_suggest import AutoSuggestFromHistory
from prompt_toolkit.buffer import Buffer
from prompt_toolkit.completion import CompleteEvent, Completer, Completion, PathCompleter
from prompt_toolkit.document import Document
from prompt_toolkit.filters import Condition
from prompt_toolkit.formatted_text import StyleAndTextTuples
from prompt_toolkit.history import History, InMemoryHistory
from prompt_toolkit.input.base import Input
from prompt_toolkit.key_binding import KeyBindings, KeyPressEvent
from prompt_toolkit.key_binding.bindings.cpr import load_cpr_bindings
from prompt_toolkit.keys import Keys
from prompt_toolkit.layout import ConditionalContainer, Float, FloatContainer, HSplit, Layout, Window
from prompt_toolkit.layout.controls import BufferControl, FormattedTextControl
from prompt_toolkit.layout.dimension import Dimension
from prompt_toolkit.layout.menus import CompletionsMenu
from prompt_toolkit.layout.processors import BeforeInput
from prompt_toolkit.output import Output
from prompt_toolkit.styles import Style

from ramprig.bench import Bench
from ramprig.errors import UsageError
from ramprig.quantity import format_duty
from ramprig.wrapping import wrapped
from ramprig.yamlfile import shorten

from . import commands as c
from .completing import begun_word, choices, wants_file
from .hold import Hold
from .keeper import NO_LINK
from .outbox import Outbox
from .remembered import Remembered
from .statusline import LINES_MAX, prompt_of, status_lines
from .stopkeys import StopKey
from .taps import TappedInput
from .words import LINE_MAX, read_line
from .worker import Worker

REFRESH_S = 0.1
"""How often the status lines are drawn."""
PRINT_EVERY_S = 0.05
"""How often what was said is printed."""
PRINT_MAX = 100
"""Most lines printed at a time, so that a flood leaves room for keys."""
ESCAPE_WAIT_S = 0.05
"""A lone Esc is told from an arrow key after so long."""

UNSENT = (
    "NOT SENT: there is no link to the board. It stops by itself when its lease is over; if anything still turns, cut "
    "the power."
)

STYLE = Style.from_dict({"status": "reverse", "status.tripped": "reverse bold", "prompt": "bold"})


class Words(Completer):
    """Completion from the table of words and the bench's names; file names after `run` and `check`."""

    def __init__(self, bench: Bench) -> None:
        self._bench = bench
        self._paths = PathCompleter(file_filter=lambda name: Path(name).is_dir() or name.endswith((".yaml", ".yml")))

    def get_completions(self, document: Document, complete_event: CompleteEvent) -> Iterable[Completion]:
        """What the word at the cursor may become."""
        line = document.text_before_cursor
        file = wants_file(line)
        if file is not None:
            yield from self._paths.get_completions(Document(file), complete_event)
            return
        for choice in choices(line, self._bench):
            yield Completion(choice.text, start_position=-len(begun_word(line)), display_meta=choice.about)


def _echo(text: str) -> str:
    """What was entered, as it is shown above the line: of a paste that is refused its first line, shortened."""
    first, _, more = text.partition("\n")
    shown = first if len(first) <= LINE_MAX else shorten(first)
    return f"{shown} ..." if more.strip() else shown


class Screen:
    """The application. `run` returns when the user has left or the terminal is gone; the worker still runs then."""

    def __init__(
        self,
        bench: Bench,
        worker: Worker,
        outbox: Outbox,
        stop_key: StopKey,
        *,
        keys: Input,
        output: Output | None = None,
        history_file: Path | None = None,
        over: Callable[[], bool] = lambda: False,
        now: Callable[[], float] = time.monotonic,
    ) -> None:
        self._bench = bench
        self._worker = worker
        self._outbox = outbox
        self._stop_key = stop_key
        self._keys = keys
        self._over = over
        self._now = now
        self._hold: Hold | None = None
        self._jog: c.JogHold | None = None
        self._dropped_bytes = 0
        self._pressed = stop_key.pressed
        history: History = InMemoryHistory()
        if history_file is not None:
            history = Remembered(str(history_file), outbox.say)
        self.buffer = Buffer(
            completer=Words(bench),
            history=history,
            auto_suggest=AutoSuggestFromHistory(),
            accept_handler=self._accept,
            complete_while_typing=False,
            multiline=False,
        )
        self.app: Application[None] = Application(
            layout=self._layout(),
            key_bindings=self._bindings(),
            style=STYLE,
            full_screen=False,
            mouse_support=False,
            refresh_interval=REFRESH_S,
            input=keys,
            output=output,
        )
        self.app.ttimeoutlen = ESCAPE_WAIT_S

    # ---- what is seen --------------------------------------------------------------------------------------------

    def _layout(self) -> Layout:
        line = Window(
            BufferControl(self.buffer, input_processors=[BeforeInput(self._prompt)]),
            dont_extend_height=True,
            wrap_lines=True,
        )
        jog = ConditionalContainer(
            Window(FormattedTextControl(self._jog_text), dont_extend_height=True, wrap_lines=True),
            Condition(lambda: self._hold is not None),
        )
        status = Window(
            FormattedTextControl(self._status),
            height=Dimension(min=1, max=LINES_MAX),
            dont_extend_height=True,
            style="class:status",
        )
        menu = Float(CompletionsMenu(max_height=8, scroll_offset=1), xcursor=True, ycursor=True)
        return Layout(FloatContainer(HSplit([line, jog, status]), [menu]), focused_element=line)

    def _prompt(self) -> StyleAndTextTuples:
        return [("class:prompt", prompt_of(self._worker.snapshot))]

    def _status(self) -> StyleAndTextTuples:
        snapshot = self._worker.snapshot
        style = "class:status.tripped" if snapshot.state == "tripped" else "class:status"
        return [(style, "\n".join(status_lines(snapshot, get_app().output.get_size().columns)))]

    def _jog_text(self) -> StyleAndTextTuples:
        hold, jog = self._hold, self._jog
        if hold is None or jog is None:
            return []
        wanted = hold.wanted(self._now())
        moving = "stopped" if wanted == 0 else "forward" if wanted > 0 else "backward"
        text = (
            f"jog {jog.motor.name} at {format_duty(hold.duty)}: {moving}.  Right/Left run while held, Up/Down 1 %, "
            "Space stops, q or Esc leaves"
        )
        return [("class:prompt", text)]

    # ---- keys ----------------------------------------------------------------------------------------------------

    def _bindings(self) -> KeyBindings:
        keys = KeyBindings()
        jogging = Condition(lambda: self._hold is not None)

        for name in ("c-c", "c-\\", "<sigint>"):
            keys.add(name, eager=True, is_global=True)(lambda event: self._stop_key.press())
        # F12 stops in the tap; where there is no tap it stops here.
        tapped = isinstance(self._keys, TappedInput)
        keys.add("f12", eager=True, is_global=True)(lambda event: None if tapped else self._stop_key.press())

        @keys.add("c-d", filter=~jogging)
        def _leave(event: KeyPressEvent) -> None:
            if not self.buffer.text:
                self._leave()

        @keys.add("tab", filter=~jogging)
        def _complete(event: KeyPressEvent) -> None:
            found = choices(self.buffer.document.text_before_cursor, self._bench)
            if self.buffer.complete_state:
                self.buffer.complete_next()
            elif len(found) == 1:  # at once, so that whoever types on fast finds it done
                self.buffer.insert_text(found[0].text[len(begun_word(self.buffer.document.text_before_cursor)) :] + " ")
            else:
                self.buffer.start_completion(insert_common_part=True)

        @keys.add("c-z", filter=~jogging)
        def _suspend(event: KeyPressEvent) -> None:
            self._outbox.say("Ctrl-Z does nothing here: a shell that is suspended renews no lease. Ctrl-D leaves.")

        @keys.add("c-j", filter=~jogging)
        @keys.add("enter", filter=~jogging)
        def _enter(event: KeyPressEvent) -> None:
            self.buffer.validate_and_handle()

        self._jog_bindings(keys, jogging)
        return keys

    def _jog_bindings(self, keys: KeyBindings, jogging: Condition) -> None:
        def bind(name: str, act: Callable[[Hold], None]) -> None:
            @keys.add(name, filter=jogging, eager=True)
            def _key(event: KeyPressEvent) -> None:
                if self._hold is not None:
                    act(self._hold)

        bind("right", lambda hold: hold.press(1, self._now()))
        bind("left", lambda hold: hold.press(-1, self._now()))
        bind("up", lambda hold: hold.change(1))
        bind("down", lambda hold: hold.change(-1))
        for name in ("q", "c-d"):
            bind(name, lambda hold: hold.leave())
        bind("escape", lambda hold: hold.leave())  # eager: it is told from an arrow key by the parser

        # Eager, or a key that edits the line would do that and leave the motor to its time.
        @keys.add(Keys.Any, filter=jogging, eager=True)
        @keys.add(Keys.BracketedPaste, filter=jogging, eager=True)
        @keys.add("enter", filter=jogging, eager=True)
        def _other(event: KeyPressEvent) -> None:
            if self._hold is not None:
                self._hold.release()

        # Among the keys comes what a terminal answers when it is asked where its cursor is: nobody has pressed that.
        for answer in load_cpr_bindings().bindings:
            keys.add(*answer.keys, filter=jogging, eager=True, save_before=answer.save_before)(answer.handler)

    # ---- lines ---------------------------------------------------------------------------------------------------

    def _accept(self, buffer: Buffer) -> bool:
        """A line was entered: it is in the history whatever becomes of it."""
        text = buffer.text
        if text.strip():
            self._outbox.say(prompt_of(self._worker.snapshot) + _echo(text))
            self._enter(text)
        return False  # and the line is emptied

    def _enter(self, text: str) -> None:
        lines = [line for line in text.splitlines() if line.strip()]
        if len(lines) > 1:
            self._outbox.say(
                f"{len(lines)} lines were pasted at once; nothing was done with them. Enter one at a time,"
            )
            self._outbox.say("or pipe them in: ramprig shell < FILE")
            return
        try:
            command = read_line(text, self._bench)
        except UsageError as error:
            self._outbox.say(str(error))
            return
        if command is not None:
            self._post(command, text.strip())

    def _post(self, command: c.Command, text: str) -> None:
        match command:
            case c.StopAll(category=category):
                self._worker.panic(category)
                self._tell_if_unsent()
                return
            case c.Leave():
                self._leave()
                return
            case c.JogHold(motor=motor):
                ceiling_duty = motor.limits(1000)["ceiling_duty"]
                hold = Hold(ceiling_duty=ceiling_duty)
                command = c.JogHold(motor, hold)
        job = self._worker.post(command, text)
        if job is None:
            busy = f"'{self._worker.busy}'" if self._worker.busy else "the last line"
            self._outbox.say(f"{busy} is still under way; nothing was done. Ctrl-C stops it.")
            return
        if isinstance(command, c.JogHold):
            self._hold, self._jog = command.hold, command
            self.app.create_background_task(self._until_jogged(job.done.is_set))

    async def _until_jogged(self, done: Callable[[], bool]) -> None:
        while not done():
            await asyncio.sleep(REFRESH_S / 2)
        self._hold = self._jog = None
        self.app.invalidate()

    def _tell_if_unsent(self) -> None:
        """Whoever asks for a stop hears of it at once where none can be sent; else the stop itself is told."""
        if self._worker.snapshot.state == NO_LINK:
            self._outbox.say(UNSENT)

    def _leave(self) -> None:
        if self.app.is_running and not self.app.is_done:
            self.app.exit()

    # ---- running -------------------------------------------------------------------------------------------------

    async def run(self) -> None:
        """Until the user leaves, the terminal is gone, `over` says so, or the worker has ended."""
        tasks = [asyncio.ensure_future(self._print()), asyncio.ensure_future(self._watch())]
        try:
            with contextlib.suppress(EOFError):
                await self.app.run_async(set_exception_handler=False, handle_sigint=False)
        finally:
            for task in tasks:
                task.cancel()
            await asyncio.gather(*tasks, return_exceptions=True)

    async def _print(self) -> None:
        """Put what was said above the input line, a bounded piece at a time."""
        waiting: list[str] = []
        while True:
            waiting += self._outbox.take()
            if waiting and self.app.is_running and not self.app.is_done:
                columns = self.app.output.get_size().columns
                text = "".join(f"{wrapped(line, columns)}\n" for line in waiting[:PRINT_MAX])
                del waiting[:PRINT_MAX]
                await run_in_terminal(partial(self._write, text))
            await asyncio.sleep(PRINT_EVERY_S)

    def _write(self, text: str) -> None:
        self.app.output.enable_autowrap()
        self.app.output.write(text)  # which takes the force out of escape sequences
        self.app.output.flush()

    async def _watch(self) -> None:
        while True:
            await asyncio.sleep(REFRESH_S)
            if self._over() or self._worker.ended:
                self._leave()
            if self._stop_key.pressed > self._pressed:
                self._pressed = self._stop_key.pressed
                self._tell_if_unsent()
            keys = self._keys
            if isinstance(keys, TappedInput):
                if keys.expire_paste():
                    self._outbox.say("a paste whose end did not come was given up")
                if keys.dropped_bytes > self._dropped_bytes:
                    self._outbox.say(f"{keys.dropped_bytes - self._dropped_bytes} bytes of a paste were dropped")
                    self._dropped_bytes = keys.dropped_bytes
