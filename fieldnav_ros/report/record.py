"""Reads a ledger for the page: its facts, and where they come from."""

from __future__ import annotations

import hashlib
import sqlite3
from dataclasses import dataclass
from pathlib import Path

from fieldnav_ros.report.facts import Facts
from fieldnav_ros.report.gather import facts
from fieldnav_ros.tuning.ledger import Ledger


@dataclass(frozen=True)
class Origin:
    """Which file a record is. ``head`` is the hash of its last event, "" without one; times are UTC, ISO 8601."""

    file: str
    sha256: str
    head: str
    events: int
    first: str
    last: str


@dataclass(frozen=True)
class Record:
    """A session's facts and their origin."""

    facts: Facts
    origin: Origin


def read_record(path: Path) -> Record:
    """Read and check a ledger; InputError or WorkError as ``Ledger.read``."""
    with Ledger.read(path) as ledger:
        entries = list(ledger.entries())
    found = facts(entry.event for entry in entries)
    origin = Origin(
        file=path.name,
        sha256=hashlib.sha256(path.read_bytes()).hexdigest(),
        head=_hash_of(path, entries[-1].seq) if entries else "",
        events=len(entries),
        first=entries[0].wall_time if entries else "",
        last=entries[-1].wall_time if entries else "",
    )
    return Record(found, origin)


def _hash_of(path: Path, seq: int) -> str:
    connection = sqlite3.connect(f"{path.resolve().as_uri()}?mode=ro", uri=True)
    try:
        row = connection.execute("SELECT hash FROM events WHERE seq = ?", (seq,)).fetchone()
    finally:
        connection.close()
    return str(row[0]) if row else ""
