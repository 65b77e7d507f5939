"""How far preparing has come, for the person who waits."""

from __future__ import annotations

import sys
import time

from fieldnav_ros.tuning.session import Session

EVERY_S = 5.0


class Progress:
    """One line that is rewritten on a terminal; elsewhere a line now and then."""

    def __init__(self, session: Session) -> None:
        self._session = session
        self._live = sys.stdout.isatty()
        self._began = self._last = time.monotonic()
        self._first = session.state.times.episodes

    def __call__(self) -> bool:
        """Show where the session stands; tell whether it is time to save."""
        now = time.monotonic()
        if self._live:
            print(f"\r{self._line(now):<118}", end="", flush=True)
        due = now - self._last >= EVERY_S
        if due:
            self._last = now
            if not self._live:
                print(self._line(now), flush=True)
        return due

    def _line(self, now: float) -> str:
        state = self._session.state
        rate = (state.times.episodes - self._first) / max(now - self._began, 1e-9)
        cost = f"{min(state.generations[-1].costs):.2f} s" if state.generations else "-"
        return (
            f"{state.times.episodes:7d} of {self._session.config.episodes} episodes   {rate:6.0f} per s   "
            f"{state.stage.grade:8} {self._session.phase:8} generation {len(state.generations)}, best of it {cost}"
        )

    def finish(self) -> None:
        """Leave the last line standing."""
        line = self._line(time.monotonic())
        print(f"\r{line:<118}" if self._live else line, flush=True)
