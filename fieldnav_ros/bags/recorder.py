"""Writing bags beside a session that must not wait for a disk: a thread of its own behind a bounded queue.

Whoever hands messages over never waits. What the queue has no room for is dropped and counted; a bag that cannot be
written is given up, and the next one is begun as if nothing had been.
"""

from __future__ import annotations

import threading
import time
from collections import deque
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from fieldnav_ros.bags.bag import Bag, Channel
from fieldnav_ros.errors import FieldnavError, clipped

PERIOD = 0.05
"""Seconds between two looks into the queue: many small wakes would cost more than the writing."""
FLUSH_PERIOD = 0.25
"""Seconds of recording that a killed process may lose."""
MOST_MESSAGES = 20_000
MOST_BYTES = 64 * 1024 * 1024
Open = Callable[[Path, str, Sequence[Channel], Mapping[str, str]], Bag]


@dataclass
class Tally:
    """What has become of the messages. Each number is written by one thread alone."""

    accepted: int = 0
    accepted_bytes: int = 0
    dropped: int = 0
    done: int = 0
    done_bytes: int = 0
    written: int = 0
    lost: int = 0
    bags: int = 0
    failed_bags: int = 0
    failures: deque[str] = field(default_factory=lambda: deque(maxlen=100))


class _Begin(tuple[Any, ...]):
    """A word to the writing thread: name, channels and what to know of a bag to begin."""


class _End(tuple[Any, ...]):
    """A word to the writing thread: the bag is complete."""


class Recorder:
    """Takes messages from one thread and writes them in another; ``begin``, ``put`` and ``end`` come from the first."""

    def __init__(
        self,
        folder: Path,
        most_messages: int = MOST_MESSAGES,
        most_bytes: int = MOST_BYTES,
        open_bag: Open = Bag,
    ) -> None:
        self._folder, self._open = folder, open_bag
        self._most_messages, self._most_bytes = most_messages, most_bytes
        self._queue: deque[Any] = deque()
        self._stop = threading.Event()
        self._bag: Bag | None = None
        self._name = ""
        self._flushed = 0.0
        self._unflushed = False
        self.tally = Tally()
        self._thread = threading.Thread(target=self._work, name="bags", daemon=True)
        self._thread.start()

    def begin(self, name: str, channels: Sequence[Channel], about: Mapping[str, str]) -> None:
        """Begin a bag; one that is open is completed first."""
        self._queue.append(_Begin((name, tuple(channels), dict(about))))

    def put(self, channel: int, log_time: int, publish_time: int, data: bytes) -> bool:
        """Hand over a serialised message for the bag begun last; False where it is dropped for want of room."""
        tally = self.tally
        if (
            tally.accepted - tally.done >= self._most_messages
            or tally.accepted_bytes - tally.done_bytes + len(data) > self._most_bytes
        ):
            tally.dropped += 1
            return False
        tally.accepted += 1
        tally.accepted_bytes += len(data)
        self._queue.append((channel, log_time, publish_time, data))
        return True

    def end(self) -> None:
        """Complete the bag."""
        self._queue.append(_End())

    def close(self, seconds: float) -> bool:
        """Complete what is open and end the thread; False where the disk has not let it in so many seconds."""
        self.end()
        self._stop.set()
        self._thread.join(seconds)
        return not self._thread.is_alive()

    @property
    def waiting(self) -> int:
        """Messages in the queue."""
        return self.tally.accepted - self.tally.done

    def _work(self) -> None:
        while True:
            last = self._stop.wait(PERIOD)
            while self._queue:
                self._take(self._queue.popleft())
            self._flush()
            if last:
                return

    def _take(self, item: Any) -> None:
        if isinstance(item, _Begin):
            self._complete()
            self._guarded(lambda: self._begin(*item))
        elif isinstance(item, _End):
            self._complete()
        else:
            self.tally.done += 1
            self.tally.done_bytes += len(item[3])
            if self._bag is None:
                self.tally.lost += 1
                return
            bag, self._unflushed = self._bag, True
            if self._guarded(lambda: bag.write(*item)):
                self.tally.written += 1
            else:
                self.tally.lost += 1

    def _begin(self, name: str, channels: Sequence[Channel], about: Mapping[str, str]) -> None:
        self._name = name
        self._bag = self._open(self._folder, name, channels, about)
        self._flushed = time.monotonic()

    def _complete(self) -> None:
        if self._bag is not None and self._guarded(self._bag.close):
            self.tally.bags += 1
        self._bag, self._unflushed = None, False

    def _flush(self) -> None:
        now = time.monotonic()
        if self._bag is not None and self._unflushed and now - self._flushed >= FLUSH_PERIOD:
            self._guarded(self._bag.flush)
            self._flushed, self._unflushed = now, False

    def _guarded(self, act: Callable[[], None]) -> bool:
        """Do something with the bag; where that fails the bag is given up, whatever the reason."""
        try:
            act()
        except FieldnavError as error:
            self._give_up(str(error))
        except Exception as error:  # noqa: BLE001  (whatever a disk or a library comes up with ends this bag alone)
            self._give_up(getattr(error, "strerror", None) or f"{type(error).__name__}: {error}")
        else:
            return True
        return False

    def _give_up(self, why: str) -> None:
        bag, self._bag = self._bag, None
        self.tally.failed_bags += 1
        self.tally.failures.append(f"bag {clipped(self._name)}: {why}")
        if bag is not None:
            bag.abandon()
