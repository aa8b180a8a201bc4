"""The lines typed so far, kept in a file from one shell to the next, or in memory alone where the file cannot be."""

from __future__ import annotations

from collections.abc import Callable, Iterable

from prompt_toolkit.history import FileHistory


class Remembered(FileHistory):
    """Never raises: a full disk or a file of another user must not come between a typed line and what it does.

    `say` is told once why lines are not kept.
    """

    def __init__(self, file: str, say: Callable[[str], None]) -> None:
        super().__init__(file)
        self._say = say
        self._told = False

    def load_history_strings(self) -> Iterable[str]:
        """What the file has, newest first; nothing where it cannot be read."""
        try:
            return list(super().load_history_strings())
        except OSError as error:
            self._tell(error)
            return []

    def store_string(self, string: str) -> None:
        """Append a line to the file, where that can be."""
        try:
            super().store_string(string)
        except OSError as error:
            self._tell(error)

    def _tell(self, error: OSError) -> None:
        if not self._told:
            self._told = True
            self._say(f"typed lines are kept for this shell only: {self.filename!r}: {error.strerror or error}")
