"""Power loss modelled: what the disk may hold at any moment of a transaction of the ledger.

With a rollback journal (https://www.sqlite.org/atomiccommit.html, sections 3 and 4) a transaction writes the old pages
into the journal, syncs it, writes the number of pages into the journal's header, syncs it, writes the new pages into
the file, syncs it, and unlinks the journal, which is the commit. So a loss of power leaves one of

- the old file with any beginning of the journal, its header with or without the number of pages;
- the whole journal with any part of the file's pages new;
- the new file without a journal.
"""

from __future__ import annotations

import os
import sqlite3
import struct
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import NamedTuple

from fieldnav_ros.tuning.events import Event, Noted
from fieldnav_ros.tuning.ledger import Ledger

PAGES_IN_HEADER = slice(8, 12)
"""Where the journal's header holds the number of pages (https://www.sqlite.org/fileformat.html#the_rollback_journal)."""
SMALL_PAGE = 512
"""SQLite's smallest page, so that a transaction has few enough bytes to cut it at every one."""


class Moment(NamedTuple):
    """One state of the disk: the ledger's file and its journal, which may be gone."""

    what: str
    offset: int
    file: bytes
    journal: bytes | None

    def lay(self, path: Path) -> None:
        """Put this state at ``path``, over what is there."""
        journal = journal_of(path)
        path.write_bytes(self.file)
        if self.journal is None:
            journal.unlink(missing_ok=True)
        else:
            journal.write_bytes(self.journal)


class Transaction(NamedTuple):
    """The bytes of one transaction: the file before and after it, and the journal as it was when it was unlinked."""

    before: bytes
    after: bytes
    journal: bytes

    def moments(self) -> Iterator[Moment]:
        """Yield every state that a loss of power may leave, cut at every byte."""
        unsynced = self.journal[:8] + struct.pack(">I", 0) + self.journal[12:]
        for offset in range(len(self.journal) + 1):
            yield Moment("journal cut", offset, self.before, self.journal[:offset])
            if offset >= PAGES_IN_HEADER.stop:
                yield Moment("journal cut before its sync", offset, self.before, unsynced[:offset])
        long = self.before.ljust(len(self.after), b"\0")  # a file grown but not yet written reads as zeros
        for offset in range(len(self.after) + 1):
            if offset == 0 or self.after[offset - 1] != long[offset - 1]:
                torn = self.after[:offset] + long[offset:]
                yield Moment("file half written", offset, torn, self.journal)
                # pages need not reach the disk in order
                last_first = long[:offset] + self.after[offset:]
                yield Moment("file half written, last part first", offset, last_first, self.journal)
        for length in range(len(self.before), len(self.after) + 1):
            yield Moment("file half grown", length, self.after[:length], self.journal)
        yield Moment("committed", 0, self.after, None)


def journal_of(path: Path) -> Path:
    """Return where SQLite keeps the journal of a file."""
    return path.with_name(path.name + "-journal")


def with_small_pages(path: Path) -> None:
    """Make a ledger and give it the smallest pages; it stays a ledger in all else."""
    Ledger.open(path).close()
    connection = sqlite3.connect(path, isolation_level=None)
    connection.execute(f"PRAGMA page_size={SMALL_PAGE}")
    connection.execute("VACUUM")
    connection.close()


def watched(path: Path, events: Sequence[Event]) -> Transaction:
    """Append events in one transaction and keep what it did on the disk.

    A second link to the journal keeps its content when SQLite unlinks it at the commit.
    """
    before, kept = path.read_bytes(), path.with_name("kept")

    def look(statement: str) -> None:
        if statement == "COMMIT":
            os.link(journal_of(path), kept)

    with Ledger.open(path) as ledger:
        ledger._connection.set_trace_callback(look)
        ledger.append(events)
    journal = kept.read_bytes()
    kept.unlink()
    return Transaction(before, path.read_bytes(), journal)


def notes(first: int, last: int) -> list[Event]:
    """Return events that are told apart by their numbers."""
    return [Noted(source="test", text=f"{number} " + "x" * 40) for number in range(first, last)]


def events_of(path: Path) -> list[Event]:
    """Return what a ledger holds, opened to write: an unfinished transaction is taken back."""
    with Ledger.open(path) as ledger:
        return list(ledger.events())
