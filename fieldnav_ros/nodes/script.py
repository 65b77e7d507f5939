"""Steps that wait for futures, written as one generator and run by callbacks.

rclpy runs a suspended coroutine again in every turn of the executor, at full load while it waits. A ``Script``
is resumed only when what it waits for has come or its time is up.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Generator
from dataclasses import dataclass
from typing import Any

from rclpy.task import Future


class LateError(Exception):
    """What a step waited for did not come in time."""


@dataclass(frozen=True)
class Wait:
    """What a step yields: a future, and how long to wait for it (s); none: for ever."""

    future: Future
    seconds: float | None = None


Steps = Generator[Wait, Any, None]


class Script:
    """Runs a generator of ``Wait``s; each yield gives the future's result or raises LateError in the generator."""

    def __init__(self, on_fault: Callable[[Exception], None]) -> None:
        """``on_fault`` is told of an exception that leaves the generator."""
        self._on_fault = on_fault
        self._steps: Steps | None = None
        self._future: Future | None = None
        self._deadline: float | None = None
        self._inside = False

    @property
    def running(self) -> bool:
        """Whether there are steps left to do."""
        return self._steps is not None

    def start(self, steps: Steps) -> None:
        """Drop what was being done, without another word to it, and begin these steps."""
        self.drop()
        self._steps = steps
        self._resume(steps, None, None)

    def drop(self) -> None:
        """Abandon the steps; they may do so themselves, and then end at their next wait."""
        steps, self._steps, self._future = self._steps, None, None
        if steps is not None and not self._inside:
            steps.close()

    def tick(self) -> None:
        """Look at the clock; call this some times a second."""
        if self._steps is not None and self._deadline is not None and time.monotonic() > self._deadline:
            self._resume(self._steps, None, LateError())

    def _resume(self, steps: Steps, value: Any, error: Exception | None) -> None:
        self._future, self._deadline = None, None
        while (wait := self._next_wait(steps, value, error)) is not None:
            if not wait.future.done():
                self._future = wait.future
                self._deadline = None if wait.seconds is None else time.monotonic() + wait.seconds
                wait.future.add_done_callback(self._on_done)
                return
            value, error = _ending(wait.future)

    def _next_wait(self, steps: Steps, value: Any, error: Exception | None) -> Wait | None:
        """Run the steps up to their next wait; None where they ended, failed or were replaced."""
        wait = None
        outer, self._inside = self._inside, True
        try:
            wait = steps.send(value) if error is None else steps.throw(error)
        except StopIteration:
            pass
        except Exception as fault:  # noqa: BLE001  (whatever it is, the owner decides what a fault in its steps means)
            self._on_fault(fault)
        finally:
            self._inside = outer
        if self._steps is not steps:  # the steps themselves started others
            return None
        if wait is None:
            self._steps = None
        return wait

    def _on_done(self, future: Future) -> None:
        if self._steps is not None and future is self._future:
            self._resume(self._steps, *_ending(future))


def _ending(future: Future) -> tuple[Any, Exception | None]:
    """Return a future's result, or what it failed with."""
    failure = future.exception()
    if failure is None:
        return future.result(), None
    return None, failure if isinstance(failure, Exception) else RuntimeError(str(failure))
