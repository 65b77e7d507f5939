"""``fieldnav pit``: shows where the session stands and passes single keys on. Losing this terminal loses nothing."""

from __future__ import annotations

import os
import signal
import sys
import time
from collections.abc import Callable
from types import FrameType
from typing import Any, Protocol

from rclpy.context import Context

from fieldnav_ros.errors import WorkError
from fieldnav_ros.nodes.pit.keys import Keys
from fieldnav_ros.nodes.pit.link import PitLink
from fieldnav_ros.nodes.pit.view import OUTCOME_KEYS, SERVICE_KEYS, Heard, line_of, view_of

REDRAW = 0.25
"""Seconds after which the picture is made anew although nothing came."""
ANSWER_SHOWN = 12.0
LINE_EVERY = 10.0
"""Seconds after which a terminal without a screen gets a line although nothing changed."""
LEFT = "Left; the session goes on without this terminal. Match call: fieldnav pit, key r."


class Show(Protocol):
    """Somewhere to show things."""

    def __call__(self, heard: Heard) -> None:
        """Show what was heard."""


def run(
    namespace: str, tuner: str, watch_only: bool, check: Callable[[], None] = lambda: None, farewell: str = LEFT
) -> dict[str, Any]:
    """Run until q, a lost terminal or a signal; return the summary. ``check`` is called now and then."""
    try:
        from rich.console import Console
        from rich.live import Live
        from rich.text import Text

        from fieldnav_ros.nodes.pit.screen import picture
    except ModuleNotFoundError as error:
        raise WorkError(f"the terminal needs {error.name}: python3 -m pip install rich") from error
    console = Console(highlight=False)
    if not console.is_terminal or console.is_dumb_terminal:
        return _loop(namespace, tuner, watch_only, Lines(), check)
    block = "█" if (console.encoding or "").lower().startswith("utf") else "#"
    live = Live(Text(""), console=console, screen=True, auto_refresh=False)

    def show(heard: Heard) -> None:
        live.update(picture(view_of(heard), console.width, console.height, block), refresh=True)

    try:
        with live:
            summary = _loop(namespace, tuner, watch_only, show, check)
        print(farewell, flush=True)
    except OSError:  # the terminal went away and could not be tidied up
        _leave_terminal()
    return summary


class Lines:
    """Lines instead of a picture, for terminals that cannot move the cursor and for pipes."""

    def __init__(self) -> None:
        self._said: tuple[object, ...] = ()
        self._when = 0.0
        self._warned: tuple[str, ...] = ()

    def __call__(self, heard: Heard) -> None:
        """Print what is new."""
        view, status = view_of(heard), heard.status
        now = time.monotonic()
        news = (view.banner, heard.answer, status.episodes_done if status else 0, status.episode if status else None)
        if news != self._said or now - self._when > LINE_EVERY:
            self._say(line_of(heard))
            if not self._said or news[0] != self._said[0]:
                self._say(f"  {view.todo}")
                self._say(f"  keys: {view.keys}")
            if heard.answer and (not self._said or heard.answer != self._said[1]):
                self._say(f"> {heard.answer}")
            self._said, self._when = news, now
        for warning in view.warnings:
            if warning not in self._warned:
                self._say(f"! {warning}")
        self._warned = view.warnings

    def _say(self, line: str) -> None:
        print(line, flush=True)


class Pit:
    """Keys in, calls out, and the answer to the last key."""

    def __init__(self, link: PitLink, watch_only: bool) -> None:
        self._link, self._watch_only = link, watch_only
        self._answer, self._when = "", 0.0
        self.left = False

    def press(self, key: str) -> None:
        """Do what a key stands for."""
        if key == "q":
            self.left = True
        elif self._watch_only or not key:
            return
        elif key in SERVICE_KEYS:
            self._say("MATCH CALL ..." if key == "r" else f"{SERVICE_KEYS[key]} ...")
            self._link.ask_for(SERVICE_KEYS[key], self._say)
        elif key in OUTCOME_KEYS:
            status = self._link.status
            if status is None or status.outcomes != "operator":
                self._say("outcomes are not the operator's in this session (tuner parameter outcomes)")
            else:
                self._say(self._link.report(OUTCOME_KEYS[key]))

    def heard(self) -> Heard:
        """Return what there is to show."""
        answer = self._answer if time.monotonic() - self._when < ANSWER_SHOWN else ""
        link = self._link
        return Heard(link.status, link.age, link.troubles, answer, link.release_wanted, self._watch_only)

    def _say(self, sentence: str) -> None:
        self._answer, self._when = sentence, time.monotonic()


def _loop(namespace: str, tuner: str, watch_only: bool, show: Show, check: Callable[[], None]) -> dict[str, Any]:
    stop: list[int] = []

    def on_signal(number: int, _frame: FrameType | None) -> None:
        stop.append(number)

    numbers = (signal.SIGTERM, signal.SIGHUP, signal.SIGINT)
    before = {number: signal.signal(number, on_signal) for number in numbers}
    link = PitLink(Context(), tuner, namespace)
    try:
        with Keys() as keys:
            pit, shown = Pit(link, watch_only), 0.0
            while not (stop or pit.left or keys.lost):
                fresh = link.spin(0.05)
                pit.press(keys.read())
                link.look()
                if fresh or time.monotonic() - shown > REDRAW:
                    check()
                    show(pit.heard())
                    shown = time.monotonic()
    except OSError:
        _leave_terminal()  # it went away while something was written to it
    finally:
        link.close()
        for number, handler in before.items():
            signal.signal(number, handler)
    return _summary(link)


def _leave_terminal() -> None:
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _summary(link: PitLink) -> dict[str, Any]:
    status = link.status
    if status is None:
        return {"state": None, "champion": None, "champion_confirmed": False, "episodes": 0}
    return {
        "state": status.state, "champion": status.champion, "episodes": status.episodes_done,
        "champion_confirmed": status.in_service == status.champion,
    }  # fmt: skip
