"""The session's record: an SQLite file of append-only events, and the only source of the session's state.

Durable: each ``append`` is one transaction, and when it returns its events have reached the disk. A rollback
journal with ``synchronous=EXTRA`` (https://www.sqlite.org/pragma.html#pragma_synchronous) and not a write-ahead
log: between transactions the whole ledger is one file, so copying that file to a stick takes everything, and it
needs no shared memory, which some file systems do not have.

Append-only: triggers refuse changes, and each row carries the SHA-256 of the row before it and itself, so that a
hand-edited row is found. Rows cut off at the end leave no trace in the chain.
"""

from __future__ import annotations

import fcntl
import hashlib
import os
import socket
import sqlite3
from collections.abc import Callable, Iterator, Sequence
from datetime import datetime, timezone
from pathlib import Path
from types import TracebackType
from typing import NamedTuple

from fieldnav_ros.errors import InputError, WorkError
from fieldnav_ros.tuning.events import Event, dump_event, parse_event

APPLICATION_ID = 0x464E4C47  # in the file's header; tells a ledger from any other SQLite file
SCHEMA = 1
GENESIS = "0" * 64
WAIT_S = 5.0  # for a reader to finish, before a write is given up
CHUNK = 500
_TABLES = (
    """CREATE TABLE events (
        seq INTEGER PRIMARY KEY, wall_time TEXT NOT NULL, kind TEXT NOT NULL, payload TEXT NOT NULL, hash TEXT NOT NULL
    )""",
    """CREATE TRIGGER no_update BEFORE UPDATE ON events
        BEGIN SELECT RAISE(ABORT, 'events are append-only'); END""",
    """CREATE TRIGGER no_delete BEFORE DELETE ON events
        BEGIN SELECT RAISE(ABORT, 'events are append-only'); END""",
    """CREATE TRIGGER in_order BEFORE INSERT ON events WHEN NEW.seq <> (SELECT COALESCE(MAX(seq), 0) + 1 FROM events)
        BEGIN SELECT RAISE(ABORT, 'events are append-only'); END""",
)


class Entry(NamedTuple):
    """An event as it stands in the ledger: its number from 1, when it was written (UTC, ISO 8601), itself."""

    seq: int
    wall_time: str
    event: Event


def chain_hash(previous: str, seq: int, wall_time: str, kind: str, payload: str) -> str:
    """Return a row's hash: SHA-256 over the row before's hash and the row, one per line, in hexadecimal."""
    return hashlib.sha256(f"{previous}\n{seq}\n{wall_time}\n{kind}\n{payload}".encode()).hexdigest()


def _now() -> str:
    return datetime.now(timezone.utc).isoformat(timespec="milliseconds")


class Ledger:
    """``Ledger.open(path)`` to write (one writer at a time), ``Ledger.read(path)`` to look."""

    def __init__(self, path: Path, connection: sqlite3.Connection, lock: _Lock | None, now: Callable[[], str]) -> None:
        """Use ``open`` or ``read``."""
        self.path = path
        self._connection = connection
        self._lock = lock
        self._now = now

    @classmethod
    def open(cls, path: str | Path, *, trust_broken_chain: bool = False, now: Callable[[], str] = _now) -> Ledger:
        """Open or make a ledger to write to.

        WorkError where another process writes to it (it is named) or the place cannot be written; InputError
        where the file is no ledger, from a newer version, or changed by hand and ``trust_broken_chain`` is false.
        """
        path = Path(path).resolve()
        if not path.parent.is_dir():
            raise InputError(f"{path}: the folder {path.parent} does not exist")
        lock = _Lock(path)
        try:
            connection = _connect(path, "rwc")
            try:
                _prepare(path, connection, new=path.stat().st_size == 0)
                return cls(path, connection, lock, now)._checked(trust_broken_chain)
            except BaseException:
                connection.close()
                raise
        except BaseException:
            lock.free()
            raise

    @classmethod
    def read(cls, path: str | Path, *, trust_broken_chain: bool = False) -> Ledger:
        """Open a ledger to look at, also while another process writes to it. InputError as for ``open``."""
        path = Path(path).resolve()
        if not path.is_file():
            raise InputError(f"{path}: there is no such ledger")
        # a writer killed in a transaction leaves a journal that has to be played back, which takes write access
        connection = _connect(path, "rw" if os.access(path, os.W_OK) and os.access(path.parent, os.W_OK) else "ro")
        try:
            _guarded(path, connection, "PRAGMA query_only=ON")
            _prepare(path, connection, new=False)
            return cls(path, connection, None, _now)._checked(trust_broken_chain)
        except BaseException:
            connection.close()
            raise

    def append(self, events: Sequence[Event]) -> None:
        """Store events in one transaction; when it returns they are on the disk, when it raises none is."""
        if self._lock is None:
            raise WorkError(f"{self.path}: opened to read, cannot be written")
        if not events:
            return
        try:
            self._connection.execute("BEGIN IMMEDIATE")
            try:
                seq, previous = self._tail()
                for event in events:
                    seq, wall_time, payload = seq + 1, self._now(), dump_event(event)
                    previous = chain_hash(previous, seq, wall_time, event.kind, payload)
                    row = (seq, wall_time, event.kind, payload, previous)
                    self._connection.execute("INSERT INTO events VALUES (?, ?, ?, ?, ?)", row)
                self._connection.execute("COMMIT")
            except BaseException:
                if self._connection.in_transaction:
                    self._connection.execute("ROLLBACK")
                raise
        except sqlite3.Error as error:
            raise WorkError(f"{self.path}: could not be written: {error}") from error

    def events(self) -> Iterator[Event]:
        """All events in order."""
        return (entry.event for entry in self.entries())

    def entries(self, after: int = 0) -> Iterator[Entry]:
        """Entries numbered above ``after``, in order; a watcher asks again with the last number it saw."""
        for seq, wall_time, kind, payload, _ in self._rows(after):
            event = parse_event(payload, f"{self.path}: event {seq}")
            if event.kind != kind:
                raise InputError.of(f"{self.path}: kind of event {seq}", kind, repr(event.kind))
            yield Entry(seq, wall_time, event)

    def close(self) -> None:
        """Close the file and let another writer in. Closing twice does no harm."""
        self._connection.close()
        if self._lock is not None:
            self._lock.free()

    def __enter__(self) -> Ledger:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def _tail(self) -> tuple[int, str]:
        row = self._connection.execute("SELECT seq, hash FROM events ORDER BY seq DESC LIMIT 1").fetchone()
        return (int(row[0]), str(row[1])) if row else (0, GENESIS)

    def _rows(self, after: int = 0) -> Iterator[tuple[int, str, str, str, str]]:
        """Read in chunks, each its own statement: a slow reader must not hold up the writer's commit."""
        while True:
            query = "SELECT seq, wall_time, kind, payload, hash FROM events WHERE seq > ? ORDER BY seq LIMIT ?"
            rows = _guarded(self.path, self._connection, query, (after, CHUNK))
            yield from rows
            if len(rows) < CHUNK:
                return
            after = rows[-1][0]

    def _checked(self, trust_broken_chain: bool) -> Ledger:
        previous, expected = GENESIS, 1
        for seq, wall_time, kind, payload, stored in self._rows():
            sound = seq == expected and stored == chain_hash(previous, seq, wall_time, kind, payload)
            if not sound and not trust_broken_chain:
                raise InputError(
                    f"{self.path}: event {seq} or the one before it was changed after it was written"
                    " (the chain of hashes breaks there)"
                )
            previous, expected = stored, seq + 1
        return self


class _Lock:
    """The one writer's lock: a file beside the ledger that names it; the system frees it when the process dies."""

    def __init__(self, ledger: Path) -> None:
        self._path = ledger.with_name(ledger.name + ".lock")
        self._file: int | None = None
        try:
            while not self._take():
                pass  # the holder removed the file between our opening and locking it: take the new one
        except OSError as error:
            raise WorkError(f"{ledger}: cannot be locked for writing: {error.strerror or error}") from error

    def _take(self) -> bool:
        file = os.open(self._path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC | os.O_NOFOLLOW, 0o644)
        try:
            fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            holder = os.pread(file, 1000, 0).decode(errors="replace").strip()
            os.close(file)
            raise WorkError(f"{self._path}: {holder or 'another process'} writes to this ledger already") from None
        if not self._path.exists() or os.fstat(file).st_ino != self._path.stat().st_ino:
            os.close(file)
            return False
        self._file = file
        try:
            os.ftruncate(file, 0)
            os.pwrite(file, f"process {os.getpid()} on {socket.gethostname()}\n".encode(), 0)
        except OSError:  # a full disk: who cannot be named must not hold the lock
            self.free()
            raise
        return True

    def free(self) -> None:
        if self._file is not None:
            self._path.unlink(missing_ok=True)
            os.close(self._file)
            self._file = None


def _connect(path: Path, mode: str) -> sqlite3.Connection:
    try:
        connection = sqlite3.connect(f"{path.as_uri()}?mode={mode}", uri=True, timeout=WAIT_S, isolation_level=None)
    except sqlite3.Error as error:
        raise WorkError(f"{path}: cannot be opened: {error}") from error
    connection.execute("PRAGMA trusted_schema=OFF")  # a file from outside is data: no functions run from its schema
    return connection


def _guarded(
    path: Path, connection: sqlite3.Connection, statement: str, values: tuple[int, ...] = ()
) -> list[tuple[int, str, str, str, str]]:
    """Run one statement on a file that may hold anything; one sentence where it does not bear it."""
    try:
        return connection.execute(statement, values).fetchall()
    except sqlite3.OperationalError as error:
        raise WorkError(f"{path}: cannot be read as a ledger: {error}") from error
    except (sqlite3.DatabaseError, ValueError, OverflowError) as error:
        raise InputError(f"{path}: is no ledger: {error}") from error


def _prepare(path: Path, connection: sqlite3.Connection, new: bool) -> None:
    """Check that the file is a ledger of a known schema; make the tables in a new one."""
    try:
        if new:
            connection.execute("PRAGMA journal_mode=DELETE")
        connection.execute("PRAGMA synchronous=EXTRA")
        if new:
            connection.execute("BEGIN IMMEDIATE")
            for statement in _TABLES:
                connection.execute(statement)
            connection.execute(f"PRAGMA application_id={APPLICATION_ID}")
            connection.execute(f"PRAGMA user_version={SCHEMA}")
            connection.execute("COMMIT")
    except sqlite3.OperationalError as error:
        if "readonly" in str(error) and not new:
            raise WorkError(
                f"{path}: its last transaction was cut off and has to be taken back, which takes the right to write;"
                " copy it together with its -journal file to a folder of your own"
            ) from error
        raise WorkError(f"{path}: cannot be written: {error}") from error
    except (sqlite3.DatabaseError, ValueError) as error:  # ValueError: SQLite quotes what is no UTF-8
        raise InputError(f"{path}: is no ledger: {error}") from error
    [(application,)] = _guarded(path, connection, "PRAGMA application_id")  # type: ignore[misc]  # one column
    [(schema,)] = _guarded(path, connection, "PRAGMA user_version")  # type: ignore[misc]  # one column
    if application != APPLICATION_ID:
        raise InputError(f"{path}: is no ledger, but another kind of file")
    if schema > SCHEMA:
        raise InputError(f"{path}: has schema {schema}, must be at most {SCHEMA}: a newer version wrote it")
    # a view or a trigger of somebody else's in the table's place could compute without end
    made = {sql for (sql,) in _guarded(path, connection, "SELECT sql FROM sqlite_master")}  # type: ignore[misc]
    if _TABLES[0] not in made or not made <= set(_TABLES):
        raise InputError(f"{path}: is no ledger: its tables are not those that a ledger has")
