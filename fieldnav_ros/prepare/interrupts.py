"""Stopping on a signal, but never between what is in the ledger and what has been made of it."""

from __future__ import annotations

import signal
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any


class Stopped(BaseException):
    """SIGINT or SIGTERM came. No error, so that nothing that handles errors takes it for one."""


class Stop:
    """Turns SIGINT and SIGTERM into ``Stopped``, raised only where ``open``: never between a file and the state."""

    def __init__(self) -> None:
        self._asked = False
        self._open = False
        self._before: dict[int, Any] = {}

    def __enter__(self) -> Stop:
        self._before = {number: signal.signal(number, self._take) for number in (signal.SIGINT, signal.SIGTERM)}
        return self

    def __exit__(self, *_: object) -> None:
        for number, handler in self._before.items():
            signal.signal(number, handler)

    def _take(self, *_: object) -> None:
        self._asked = True
        if self._open:
            self._open = False  # a second signal must not break into what the first one has begun to end
            raise Stopped

    @contextmanager
    def open(self) -> Iterator[None]:
        """Let a signal break in, also one that came before."""
        self._open = True
        try:
            if self._asked:
                raise Stopped
            yield
        finally:
            self._open = False
