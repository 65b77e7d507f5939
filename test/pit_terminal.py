"""An operator at a real pseudo-terminal: reads the screen, presses keys, and can lose the terminal."""

from __future__ import annotations

import fcntl
import os
import pty
import re
import select
import struct
import subprocess
import sys
import termios
import time
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
DEADLINE = 300.0
# ECMA-48: control sequences, and the private ones of common terminals in the same form
CONTROL = re.compile(r"\x1b\[[0-9;?]*[A-Za-z]|\x1b[()=>][0-9A-B]?|\x1b\][^\x07]*\x07")
HOME = "\x1b[H"


class PitTerminal:
    """``fieldnav pit`` on a pseudo-terminal of its own; a context manager that leaves nothing behind."""

    def __init__(
        self,
        words: Sequence[str] = (),
        rows: int = 24,
        columns: int = 80,
        environment: Mapping[str, str] | None = None,
        verb: str = "pit",
    ) -> None:
        self._master, slave = pty.openpty()
        fcntl.ioctl(slave, termios.TIOCSWINSZ, struct.pack("HHHH", rows, columns, 0, 0))
        variables = {"TERM": "xterm", "PYTHONUTF8": "1", **(environment or {})}
        kept = {name: value for name, value in os.environ.items() if name not in ("NO_COLOR", "COLUMNS", "LINES")}
        self.child = subprocess.Popen(
            [sys.executable, "-m", "fieldnav_ros.cli", verb, *words], stdin=slave, stdout=slave, stderr=slave,
            cwd=ROOT, env={**kept, **variables}, start_new_session=True,
        )  # fmt: skip
        os.close(slave)
        self._text = ""

    def __enter__(self) -> PitTerminal:
        return self

    def __exit__(self, *_: object) -> None:
        self.lose()
        if self.child.poll() is None:
            self.child.terminate()
            try:
                self.child.wait(15.0)
            except subprocess.TimeoutExpired:
                self.child.kill()
        self.child.wait()

    def press(self, key: str) -> None:
        """Press a key."""
        os.write(self._master, key.encode())

    def lose(self) -> None:
        """Take the terminal away, as a broken connection does."""
        if self._master >= 0:
            os.close(self._master)
            self._master = -1

    def look(self, seconds: float = 0.1) -> str:
        """Take in what is written within ``seconds`` and return the newest whole screen, or in a dumb one all text."""
        end = time.monotonic() + seconds
        while (left := end - time.monotonic()) > 0.0 and select.select([self._master], [], [], left)[0]:
            try:
                read = os.read(self._master, 65536)
            except OSError:
                break  # the other side has gone
            self._text += read.decode("utf-8", "replace")
        frames = self._text.split(HOME)
        if len(frames) > 2:
            frames = frames[-2:]
            self._text = HOME.join(["", *frames])
        return CONTROL.sub("", frames[-2] if len(frames) > 1 else frames[-1]).replace("\r", "")

    @property
    def raw(self) -> str:
        """What was written lately, control sequences and all."""
        return self._text

    def until(self, found: Callable[[str], object], doing: Callable[[str], None] = lambda screen: None) -> str:
        """Look until ``found``; ``doing`` something with each screen meanwhile. Return the screen."""
        end = time.monotonic() + DEADLINE
        while not found(screen := self.look()):
            assert time.monotonic() < end, f"waited too long; the screen shows:\n{screen}"
            assert self.child.poll() is None, f"the terminal's program has ended:\n{screen}"
            doing(screen)
        return screen


def helped(terminal: PitTerminal) -> Callable[[str], None]:
    """Return what an operator does who has nobody to carry the robot: let it try again."""
    pressed = [0.0]

    def help_it(screen: str) -> None:
        if "PLACE THE ROBOT" in screen and time.monotonic() - pressed[0] > 2.0:
            pressed[0] = time.monotonic()
            terminal.press("b")

    return help_it
