"""The session's record: an SQLite file of append-only events, and the only source of the session's state."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from pathlib import Path
from types import TracebackType

from fieldnav_ros.tuning.events import Event


class Ledger:
    """``Ledger.open(path)`` to write (one writer at a time), ``Ledger.read(path)`` to look."""

    @classmethod
    def open(cls, path: str | Path, *, trust_broken_chain: bool = False) -> Ledger:
        raise NotImplementedError

    @classmethod
    def read(cls, path: str | Path, *, trust_broken_chain: bool = False) -> Ledger:
        raise NotImplementedError

    def append(self, events: Sequence[Event]) -> None:
        """Store events in one transaction; when it returns they are on the disk."""

    def events(self) -> Iterator[Event]:
        """All events in order."""
        raise NotImplementedError

    def close(self) -> None: ...

    def __enter__(self) -> Ledger: ...  # type: ignore[empty-body]
    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None: ...
