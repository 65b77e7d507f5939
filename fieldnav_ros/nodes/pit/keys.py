"""Single keys from a terminal, and leaving it as it was found."""

from __future__ import annotations

import os
import select
import signal
import sys
import termios
import tty
from types import FrameType, TracebackType
from typing import Any


class Keys:
    """A context manager: keys come one by one, without Enter. Where standard input is no terminal there are none."""

    def __init__(self, wanted: bool = True) -> None:
        """``wanted`` false: leave the terminal alone and read nothing."""
        self._fd = sys.stdin.fileno() if wanted and sys.stdin is not None and sys.stdin.isatty() else None
        self._before: list[Any] | None = None
        self.lost = False
        """Whether the terminal has gone."""

    def __enter__(self) -> Keys:
        if self._fd is not None:
            self._before = termios.tcgetattr(self._fd)
            self._take()
            signal.signal(signal.SIGCONT, self._on_continue)
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._fd is not None and self._before is not None:
            signal.signal(signal.SIGCONT, signal.SIG_DFL)
            try:
                termios.tcsetattr(self._fd, termios.TCSADRAIN, self._before)
            except termios.error:
                self.lost = True

    def read(self) -> str:
        """Return the key pressed since the last look, or an empty text."""
        if self._fd is None or self.lost or not select.select([self._fd], [], [], 0.0)[0]:
            return ""
        try:
            pressed = os.read(self._fd, 256)
        except OSError:
            pressed = b""
        if not pressed:
            self.lost = True
        return key_in(pressed)

    def _take(self) -> None:
        if self._fd is not None:
            tty.setcbreak(self._fd)

    def _on_continue(self, _number: int, _frame: FrameType | None) -> None:
        self._take()  # the shell had the terminal meanwhile


def key_in(pressed: bytes) -> str:
    """Return the one key, in lower case, that ``pressed`` holds; empty where it is not one key alone.

    Arrow keys end in letters, and a pasted text is full of them: neither may report an outcome.
    """
    letters = set(pressed.decode("ascii", "replace").lower())
    only = letters.pop() if len(letters) == 1 else ""
    return only if only.isalpha() and only.isascii() else ""
