"""Ledgers from outside are data: spoilt, forged or hostile, they are read or refused in one sentence.

``FIELDNAV_FUZZ=5000 pytest test/faults/test_ledger_files.py`` tries so many of each kind; 40 in the suite.
"""

from __future__ import annotations

import json
import signal
import sqlite3
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from faults.conftest import Tell
from faults.spoil import spoilt_bytes, spoilt_tree
from faults.test_files import EXAMPLES, fuzzed, held
from hypothesis import given
from hypothesis import strategies as st
from tuning.synthetic_floor import draw, finish, started

from fieldnav_ros.errors import FieldnavError
from fieldnav_ros.report.record import read_record
from fieldnav_ros.tuning.events import SessionConfig
from fieldnav_ros.tuning.ledger import GENESIS, Ledger, chain_hash
from fieldnav_ros.tuning.session import Session


def go_on(path: Path) -> None:
    """Read a ledger as the tuner does, and ask what it asks before anything is run."""
    session = Session(draw)
    with Ledger.open(path) as ledger:
        session.apply(*ledger.events())
    if session.begun:
        session.advance()
        session.pending()
        session.summary()


def look(path: Path) -> None:
    """Read a ledger as the report does."""
    read_record(path)


def real_events() -> list[dict[str, Any]]:
    """Return the events of a whole session with a verdict in plain values."""
    session, log = started(SessionConfig(seed=1, floor_time_s=400.0))
    finish(session, log)
    return [event.model_dump(mode="json") for event in log]


EVENTS = real_events()
SHORT = [EVENTS[0], EVENTS[1], *EVENTS[2:5]]


@pytest.fixture(scope="module")
def empty(tmp_path_factory: pytest.TempPathFactory) -> bytes:
    """The bytes of a ledger without events."""
    path = tmp_path_factory.mktemp("ledger") / "empty.ledger"
    Ledger.open(path).close()
    return path.read_bytes()


def forge(path: Path, empty: bytes, rows: list[tuple[str, str]]) -> None:
    """Write a ledger whose chain of hashes holds, whatever stands in its rows (kind, payload)."""
    path.write_bytes(empty)
    connection = sqlite3.connect(path)
    previous = GENESIS
    for seq, (kind, payload) in enumerate(rows, 1):
        previous = chain_hash(previous, seq, "now", kind, payload)
        connection.execute("INSERT INTO events VALUES (?, ?, ?, ?, ?)", (seq, "now", kind, payload, previous))
    connection.commit()
    connection.close()


def refused(taken: list[bool]) -> str:
    return f"{taken.count(False)} refused in a sentence"


def rows_of(events: list[Any]) -> list[tuple[str, str]]:
    return [(str(event.get("kind")) if isinstance(event, dict) else "", json.dumps(event)) for event in events]


def _too_long(*_: object) -> None:
    raise TimeoutError("reading took too long")


@pytest.fixture
def in_time() -> Iterator[None]:
    """Nothing here may hang: so much time ends the test."""
    signal.signal(signal.SIGALRM, _too_long)
    signal.alarm(90 * max(1, EXAMPLES // 100))
    yield
    signal.alarm(0)


@pytest.mark.usefixtures("in_time")
def test_a_real_ledger_with_spoilt_bytes_is_read_or_refused_in_a_sentence(
    fast: Path, empty: bytes, tell: Tell
) -> None:
    path, taken = fast / "a.ledger", []
    forge(path, empty, rows_of(SHORT))
    files = [path.read_bytes(), empty]

    @fuzzed
    @given(spoilt_bytes(files, [b"SQLite format 3\0", b"\0" * 100, b"\xff" * 100, b"\x7f\xff\xff\xff", b"SELECT"]))
    def check(data: bytes) -> None:
        path.write_bytes(data)
        path.with_name("a.ledger-journal").unlink(missing_ok=True)
        taken.append(held(go_on, path, locks=True))

    check()
    tell("ledger: bytes spoilt", len(taken), refused(taken))


json_values = st.recursive(
    st.one_of(st.none(), st.booleans(), st.integers(-(2**70), 2**70), st.integers(-2, 3), st.floats(allow_nan=True),
              st.text(max_size=9), st.sampled_from(["champion", "accept", "arrived", "void", 1e308, -1])),
    lambda inner: st.one_of(st.lists(inner, max_size=3), st.dictionaries(st.text(max_size=6), inner, max_size=2)),
    max_leaves=4,
)  # fmt: skip


@pytest.mark.usefixtures("in_time")
@pytest.mark.parametrize("reader", [go_on, look])
def test_a_forged_ledger_with_other_values_is_read_or_refused_in_a_sentence(
    fast: Path, empty: bytes, tell: Tell, reader: Any
) -> None:
    """The chain of hashes holds, as who forges a ledger can make it: only what the events say is wrong."""
    path, taken = fast / "a.ledger", []

    @fuzzed
    @given(st.one_of(spoilt_tree([SHORT], json_values), spoilt_tree([EVENTS], json_values)))
    def check(events: Any) -> None:
        forge(path, empty, rows_of(events if isinstance(events, list) else [events]))
        taken.append(held(reader, path, locks=True))

    check()
    tell(f"ledger forged, values replaced ({reader.__name__})", len(taken), refused(taken))


@pytest.mark.usefixtures("in_time")
@pytest.mark.parametrize("reader", [go_on, look])
def test_a_forged_ledger_with_events_in_another_order_is_read_or_refused_in_a_sentence(
    fast: Path, empty: bytes, tell: Tell, reader: Any
) -> None:
    path, taken = fast / "a.ledger", []
    one_of_each = list({event["kind"]: event for event in EVENTS}.values())
    events = st.one_of(st.sampled_from(one_of_each), st.sampled_from(EVENTS))

    @fuzzed
    @given(st.lists(events, max_size=8), st.integers(0, len(EVENTS)))
    def check(mixed: list[Any], start: int) -> None:
        forge(path, empty, rows_of([*EVENTS[:start], *mixed]))
        taken.append(held(reader, path, locks=True))

    check()
    tell(f"ledger forged, order changed ({reader.__name__})", len(taken), refused(taken))


ENDLESS = "WITH RECURSIVE c(x) AS (SELECT 1 UNION ALL SELECT x + 1 FROM c) "
HOSTILE = {
    "a view without end in the table's place": [
        "DROP TABLE events",
        f"CREATE VIEW events AS {ENDLESS}"
        " SELECT x AS seq, '' AS wall_time, '' AS kind, '' AS payload, '' AS hash FROM c",
    ],
    "a table of another shape": ["DROP TABLE events", "CREATE TABLE events (seq, payload)"],
    "a trigger that rewrites": [
        "CREATE TRIGGER more AFTER INSERT ON events BEGIN INSERT OR REPLACE INTO other VALUES (NEW.seq); END",
        "CREATE TABLE other (seq)",
    ],
    "a column that is computed": [
        "DROP TABLE events",
        "CREATE TABLE events (seq INTEGER PRIMARY KEY, wall_time TEXT, kind TEXT, payload TEXT"
        " GENERATED ALWAYS AS (hex(zeroblob(1000000))), hash TEXT)",
        "INSERT INTO events (seq, wall_time, kind, hash) VALUES (1, '', '', '')",
    ],
    "a write-ahead log": ["PRAGMA journal_mode=WAL", "INSERT INTO events VALUES (1, '', '', '', '')"],
    "blobs for texts": ["INSERT INTO events VALUES (1, x'00', x'ff', x'fffe', x'80')"],
    "a number for a text": ["INSERT INTO events VALUES (1, 1, 2, 3, 4)"],
    "text that is no UTF-8": ["INSERT INTO events VALUES (1, 'a', CAST(x'ff' AS TEXT), CAST(x'80' AS TEXT), 'b')"],
}  # fmt: skip


@pytest.mark.usefixtures("in_time")
@pytest.mark.parametrize("statements", HOSTILE.values(), ids=HOSTILE)
@pytest.mark.parametrize("how", [Ledger.open, Ledger.read])
def test_a_hostile_ledger_is_refused_in_a_sentence(
    fast: Path, empty: bytes, how: Any, statements: list[str]
) -> None:
    """SQLite's advice on files from outside: https://www.sqlite.org/security.html."""
    path = fast / "a.ledger"
    path.write_bytes(empty)
    connection = sqlite3.connect(path)
    for statement in statements:
        connection.execute(statement)
    connection.commit()
    connection.close()
    with pytest.raises(FieldnavError) as caught, how(path) as ledger:
        list(ledger.events())
    assert str(caught.value).startswith(str(path))
    assert str(caught.value).isprintable()


def test_a_schema_with_a_byte_that_is_no_text_is_refused_in_a_sentence(fast: Path, empty: bytes) -> None:
    """At every byte of the table's definition; SQLite quotes what it cannot read."""
    path, first = fast / "a.ledger", empty.index(b"CREATE TABLE events")
    for place in range(first, first + len(b"CREATE TABLE events (") + 60):
        path.write_bytes(empty[:place] + b"\xd6" + empty[place + 1 :])
        for how in (Ledger.open, Ledger.read):
            with pytest.raises(FieldnavError) as caught:
                how(path)
            assert str(caught.value).isprintable()
