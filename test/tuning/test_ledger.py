from __future__ import annotations

import hashlib
import multiprocessing
import os
import signal
import socket
import sqlite3
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest
from tuning.synthetic_floor import finish, replayed, started

from fieldnav_ros.errors import FieldnavError, InputError, WorkError
from fieldnav_ros.tuning.events import Event, Noted, SessionConfig
from fieldnav_ros.tuning.ledger import Ledger


def notes(first: int, last: int) -> list[Event]:
    return [Noted(source="test", text=str(number)) for number in range(first, last)]


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "session.ledger"


@pytest.fixture
def filled(path: Path) -> Path:
    with Ledger.open(path) as ledger:
        ledger.append(notes(0, 3))
        ledger.append(notes(3, 5))
    return path


def edit(path: Path, *statements: str) -> None:
    connection = sqlite3.connect(path)
    for statement in statements:
        connection.execute(statement)
    connection.commit()
    connection.close()


def test_a_session_comes_back_from_its_ledger(path: Path) -> None:
    session, log = started(SessionConfig(seed=1, floor_time_s=400.0))
    finish(session, log)
    with Ledger.open(path) as ledger:
        ledger.append(log)
        assert list(ledger.events()) == log
    with Ledger.open(path) as ledger:
        assert replayed(list(ledger.events())).state == session.state


def test_entries_are_numbered_and_can_be_followed(filled: Path) -> None:
    with Ledger.read(filled) as ledger:
        assert [entry.seq for entry in ledger.entries()] == [1, 2, 3, 4, 5]
        assert [entry.seq for entry in ledger.entries(after=3)] == [4, 5]
        assert list(ledger.entries(after=5)) == []


def test_a_reader_follows_a_writer_at_work(path: Path) -> None:
    with Ledger.open(path) as writer, Ledger.read(path) as reader:
        assert list(reader.events()) == []
        for number in range(3):
            writer.append(notes(number, number + 1))
            assert list(reader.events()) == notes(0, number + 1)


def test_a_reader_in_the_middle_of_a_long_ledger_does_not_hold_up_the_writer(path: Path) -> None:
    with Ledger.open(path) as writer, Ledger.read(path) as reader:
        writer.append(notes(0, 1200))
        half_way = reader.events()
        for _ in range(600):
            next(half_way)
        writer.append(notes(1200, 1201))
        assert sum(1 for _ in half_way) == 601


def test_a_reader_cannot_write(filled: Path) -> None:
    with Ledger.read(filled) as ledger, pytest.raises(WorkError, match="opened to read"):
        ledger.append(notes(0, 1))


def test_the_chain_is_sha256_over_the_row_before_and_the_row(filled: Path) -> None:
    """Computed here anew with hashlib from the rows as plain SQLite shows them."""
    previous = "0" * 64
    connection = sqlite3.connect(filled)
    rows = connection.execute("SELECT seq, wall_time, kind, payload, hash FROM events").fetchall()
    connection.close()
    assert len(rows) == 5
    for *fields, stored in rows:
        previous = hashlib.sha256("\n".join([previous, *map(str, fields)]).encode()).hexdigest()
        assert stored == previous


@pytest.mark.parametrize(
    "statement",
    [
        "UPDATE events SET payload = 'x' WHERE seq = 2",
        "DELETE FROM events WHERE seq = 2",
        "INSERT INTO events VALUES (9, '', '', '', '')",
        "INSERT OR REPLACE INTO events VALUES (2, '', '', '', '')",
    ],
)
def test_the_file_itself_refuses_changes(filled: Path, statement: str) -> None:
    connection = sqlite3.connect(filled)
    with pytest.raises(sqlite3.IntegrityError, match="append-only"):
        connection.execute(statement)
    connection.close()


@pytest.mark.parametrize(
    "change",
    [
        "UPDATE events SET payload = replace(payload, '1', '7') WHERE seq = 2",
        "UPDATE events SET wall_time = '2000-01-01' WHERE seq = 4",
        "UPDATE events SET kind = 'paused' WHERE seq = 1",
        "UPDATE events SET hash = upper(hash) WHERE seq = 5",
        "DELETE FROM events WHERE seq = 3",
        "DELETE FROM events WHERE seq = 1",
    ],
)
@pytest.mark.parametrize("how", [Ledger.open, Ledger.read])
def test_a_hand_edited_row_is_found_unless_told(filled: Path, change: str, how: Callable[..., Ledger]) -> None:
    edit(filled, "DROP TRIGGER no_update", "DROP TRIGGER no_delete", change)
    with pytest.raises(InputError, match=r"event \d or the one before it was changed") as caught:
        how(filled)
    assert "\n" not in str(caught.value)
    with how(filled, trust_broken_chain=True) as ledger:
        assert ledger.path == filled


def test_a_second_writer_is_refused_and_the_first_named(filled: Path) -> None:
    program = f"import time; from fieldnav_ros.tuning.ledger import Ledger; l = Ledger.open({str(filled)!r}); " + (
        "print('open', flush=True); time.sleep(60)"
    )
    with subprocess.Popen([sys.executable, "-c", program], stdout=subprocess.PIPE, text=True) as first:
        try:
            assert first.stdout is not None
            assert first.stdout.readline() == "open\n"
            with pytest.raises(WorkError, match=f"process {first.pid} on {socket.gethostname()}"):
                Ledger.open(filled)
            with Ledger.read(filled) as reader:
                assert len(list(reader.events())) == 5
        finally:
            first.kill()
    with Ledger.open(filled) as ledger:  # the dead writer's lock is free
        ledger.append(notes(5, 6))
    assert [file.name for file in filled.parent.iterdir()] == [filled.name]


def _write_until_killed(path: str, acknowledged: int) -> None:
    with Ledger.open(path) as ledger:
        number = sum(1 for _ in ledger.events())
        while True:
            ledger.append(notes(number, number + 3))
            number += 3
            os.write(acknowledged, number.to_bytes(8, "big"))


def test_a_killed_writer_loses_nothing_acknowledged_and_leaves_no_half_transaction(path: Path) -> None:
    context = multiprocessing.get_context("fork")
    for round_number in range(8):
        reading, writing = os.pipe()
        writer = context.Process(target=_write_until_killed, args=(str(path), writing))
        writer.start()
        os.close(writing)
        last = 0
        for _ in range(1 + 2 * round_number):
            last = int.from_bytes(os.read(reading, 8), "big")
        os.kill(writer.pid or 0, signal.SIGKILL)
        writer.join(10)
        while tail := os.read(reading, 8):
            last = int.from_bytes(tail, "big")
        os.close(reading)
        with Ledger.read(path) as ledger:
            found = list(ledger.events())
        assert len(found) >= last > 0
        assert len(found) % 3 == 0
        assert found == notes(0, len(found))


def test_events_that_cannot_be_stored_leave_the_ledger_as_it_was(filled: Path) -> None:
    ticks = iter(["a", "b"])  # the clock breaks at the third event of the transaction

    with Ledger.open(filled, now=lambda: next(ticks)) as ledger:
        with pytest.raises(StopIteration):
            ledger.append(notes(5, 9))
        assert list(ledger.events()) == notes(0, 5)
    with Ledger.open(filled) as ledger:
        ledger.append(notes(5, 6))
        assert list(ledger.events()) == notes(0, 6)


def test_a_full_disk_is_said_and_the_ledger_goes_on_when_there_is_room(filled: Path) -> None:
    """SQLite's own page limit stands in for the disk: https://www.sqlite.org/pragma.html#pragma_max_page_count."""
    with Ledger.open(filled) as ledger:
        ledger._connection.execute("PRAGMA max_page_count=5")
        with pytest.raises(WorkError, match="full"):
            ledger.append(notes(5, 2000))
        ledger._connection.execute("PRAGMA max_page_count=5000")
        ledger.append(notes(5, 7))
        assert list(ledger.events()) == notes(0, 7)


def other_database(path: Path) -> None:
    edit(path, "CREATE TABLE events (seq INTEGER)")


def newer(path: Path) -> None:
    with Ledger.open(path) as ledger:
        ledger.append(notes(0, 1))
    edit(path, "PRAGMA user_version=99")


@pytest.mark.parametrize(
    ("make", "says"),
    [
        (lambda path: path.write_bytes(b"hello" * 1000), "is no ledger"),
        (lambda path: path.write_bytes(b"SQLite format 3\0" + b"x" * 5000), "is no ledger"),
        (other_database, "another kind of file"),
        (newer, "has schema 99, must be at most 1"),
    ],
)
@pytest.mark.parametrize("how", [Ledger.open, Ledger.read])
def test_what_is_no_ledger_of_ours_is_refused_and_left_alone(
    path: Path, make: Callable[[Path], object], says: str, how: Callable[..., Ledger]
) -> None:
    make(path)
    before = path.read_bytes()
    with pytest.raises(InputError, match=says) as caught:
        how(path)
    assert "\n" not in str(caught.value)
    assert path.read_bytes() == before
    assert [file.name for file in path.parent.iterdir()] == [path.name]


def test_missing_files_and_folders_are_named(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="there is no such ledger"):
        Ledger.read(tmp_path / "none")
    with pytest.raises(InputError, match=r"the folder .* does not exist"):
        Ledger.open(tmp_path / "none" / "a.ledger")
    (tmp_path / "empty").touch()
    with pytest.raises(InputError, match="another kind of file"):
        Ledger.read(tmp_path / "empty")
    with pytest.raises(FieldnavError):
        Ledger.open(tmp_path)


def test_an_event_that_this_version_does_not_know_is_named(filled: Path) -> None:
    with Ledger.open(filled) as ledger:
        payload = '{"kind": "unheard_of"}'
        values = (6, "now", "unheard_of", payload, "x")
        ledger._connection.execute("INSERT INTO events VALUES (?, ?, ?, ?, ?)", values)
    with Ledger.read(filled, trust_broken_chain=True) as ledger, pytest.raises(InputError, match="event 6"):
        list(ledger.events())


def test_cut_anywhere_the_file_opens_with_whole_transactions_or_is_refused_in_one_sentence(path: Path) -> None:
    with Ledger.open(path) as ledger:
        for number in range(0, 120, 3):
            ledger.append(notes(number, number + 3))
    whole = path.read_bytes()
    for length in range(1, len(whole), 509):
        path.write_bytes(whole[:length])
        try:
            with Ledger.open(path) as ledger:
                found = list(ledger.events())
        except FieldnavError as error:
            assert "\n" not in str(error)
        else:
            assert found == notes(0, len(found))
