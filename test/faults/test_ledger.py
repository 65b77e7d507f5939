"""The ledger where power fails, and where others have had their hands on it."""

from __future__ import annotations

import multiprocessing
import os
import shutil
import sqlite3
from pathlib import Path

import pytest
from faults.conftest import Tell
from faults.crash import Moment, Transaction, events_of, journal_of, notes, watched, with_small_pages
from tuning.synthetic_floor import RESET_S, finish, replayed, run, started

from fieldnav_ros.errors import FieldnavError, WorkError
from fieldnav_ros.tuning.events import Event, Noted, SessionConfig
from fieldnav_ros.tuning.ledger import Ledger

CONFIG = SessionConfig(seed=1, floor_time_s=300.0)
THOROUGH = "FIELDNAV_FUZZ" in os.environ


# -- power loss


def transactions(folder: Path) -> list[tuple[list[Event], Transaction]]:
    """Return the last three transactions of a small ledger, each with the events that stood before it."""
    path = folder / "made.ledger"
    with_small_pages(path)
    with Ledger.open(path) as ledger:
        for number in range(0, 9, 3):
            ledger.append(notes(number, number + 3))
    found = []
    for first, last in ((9, 10), (10, 13), (13, 14)):
        found.append((notes(0, first), watched(path, notes(first, last))))
    return found


def test_power_lost_at_any_byte_of_a_transaction_loses_nothing_acknowledged_and_nothing_comes_twice(
    fast: Path, tell: Tell
) -> None:
    """Each of the last transactions is cut at every byte of its journal and of the pages that it changes.

    In the suite that holds for the last one, and for those before it at every eleventh byte; with
    ``FIELDNAV_FUZZ`` set, for all.

    What was acknowledged before is there, the transaction is there as a whole or not at all, the chain of hashes
    holds, and the next event can be written.
    """
    path, tried, whole = fast / "cut.ledger", 0, 0
    for before, transaction in transactions(fast):
        after = notes(0, 10 if len(before) == 9 else 13 if len(before) == 10 else 14)
        last = before == notes(0, 13)
        for moment in transaction.moments():
            if not THOROUGH and moment.offset % (1 if last and moment.what != "journal cut before its sync" else 11):
                continue
            moment.lay(path)
            with Ledger.open(path) as ledger:
                found = list(ledger.events())
                assert found in (before, after), (moment.what, moment.offset)
                assert moment.what != "committed" or found == after, "the acknowledged transaction is lost"
                if tried % 50 == 0:
                    ledger.append(notes(90, 91))
                    assert list(ledger.events()) == [*found, *notes(90, 91)]
            assert not journal_of(path).exists() or moment.what.startswith("journal cut")
            tried, whole = tried + 1, whole + (found == after)
    assert whole >= 3
    assert tried > 2000
    tell("ledger: power lost at every byte of a transaction", tried, "all acknowledged events there, none twice")


def test_the_model_of_power_loss_is_one_that_can_lose_events(fast: Path) -> None:
    """The same states without the journal do break the file: the test above would see a ledger that has none."""
    path, hurt = fast / "cut.ledger", 0
    (before, transaction), *_ = transactions(fast)
    torn = [moment for moment in transaction.moments() if moment.what.startswith("file half")]
    for what, offset, file, _ in torn[:: max(1, len(torn) // 60)]:
        Moment(what, offset, file, None).lay(path)
        try:
            hurt += events_of(path) not in (before, notes(0, 10))
        except FieldnavError:
            hurt += 1
    assert hurt > 10


def test_cut_anywhere_without_its_journal_a_ledger_gives_whole_transactions_or_is_refused(
    fast: Path, tell: Tell
) -> None:
    """A file cut short anywhere in its last pages, as a broken copy is: no half event, no traceback."""
    path, refused = fast / "cut.ledger", 0
    _, last = transactions(fast)[-1]
    lengths = range(len(last.after) - 4 * 512, len(last.after), 1 if THOROUGH else 5)
    for length in lengths:
        Moment("", length, last.after[:length], None).lay(path)
        try:
            found = events_of(path)
        except FieldnavError as error:
            assert str(error).startswith(str(path))
            refused += 1
        else:
            assert found == notes(0, len(found))
    assert refused > 0
    tell("ledger: a copy cut short in its last pages", len(lengths), f"refused in a sentence {refused} times")


def test_after_a_loss_of_power_the_session_goes_on_to_the_same_end(fast: Path, tell: Tell) -> None:
    """In lockstep: the same episodes, verdict and champion as in a session that nothing disturbed."""
    undisturbed, want = started(CONFIG)
    finish(undisturbed, want)
    assert undisturbed.ended
    session, log = started(CONFIG)
    finish(session, log, at_most=6)
    path, tried = fast / "session.ledger", 0
    with Ledger.open(path) as ledger:
        ledger.append(log)
    episode = session.pending()[0]
    outcome = run(episode)
    transaction = watched(path, session.record(episode.id, outcome, outcome.time + RESET_S))
    moments = list(transaction.moments())
    for moment in moments[:: len(moments) // 6]:
        moment.lay(path)
        with Ledger.open(path) as ledger:
            found = list(ledger.events())
            assert found[: len(log)] == log
            again = replayed(found)
            while not again.ended:
                length = len(found)
                finish(again, found, at_most=1)
                ledger.append(found[length:])
        assert replayed(events_of(path)).state == undisturbed.state
        tried += 1
    tell("ledger: session resumed after a loss of power", tried, "the same end as undisturbed")


# -- others' hands


def test_a_hand_edited_copy_of_a_real_session_is_refused_until_told(fast: Path, tell: Tell) -> None:
    """Each row's payload is changed in turn to another that would be read without complaint."""
    session, log = started(CONFIG)
    finish(session, log, at_most=8)
    path, whole = fast / "edited.ledger", fast / "whole.ledger"
    with Ledger.open(whole) as ledger:
        ledger.append(log)
    for row in range(1, len(log) + 1):
        shutil.copy(whole, path)
        connection = sqlite3.connect(path)
        connection.execute("DROP TRIGGER no_update")
        other = log[0] if row > 1 else log[1]
        values = (other.model_dump_json(), other.kind, row)
        connection.execute("UPDATE events SET payload = ?, kind = ? WHERE seq = ?", values)
        connection.commit()
        connection.close()
        for how in (Ledger.open, Ledger.read):
            with pytest.raises(FieldnavError, match=f"event {row} or the one before it was changed"):
                how(path)
        with Ledger.open(path, trust_broken_chain=True) as ledger:
            ledger.append([Noted(source="test", text="read all the same")])
        with pytest.raises(FieldnavError, match=f"event {row} or"):  # trusting mends nothing
            Ledger.read(path)
    tell("ledger: a row edited by hand", len(log), "found and said; read only when told")


def test_two_writers_that_start_together_never_both_get_in(fast: Path, tell: Tell) -> None:
    """Processes race for one ledger; each that gets in holds it alone for a moment and appends what it saw."""
    path = fast / "raced.ledger"
    Ledger.open(path).close()
    context = multiprocessing.get_context("fork")
    reading, writing = os.pipe()
    racers = [context.Process(target=_race, args=(str(path), writing)) for _ in range(4)]
    for racer in racers:
        racer.start()
    os.close(writing)
    with os.fdopen(reading) as pipe:
        lines = pipe.read().splitlines()
    for racer in racers:
        racer.join(60)
        assert racer.exitcode == 0
    got_in, refused = lines.count("in"), sum("writes to this ledger already" in line for line in lines)
    assert got_in + refused == len(lines) == 4 * 40
    assert refused > 0
    assert len(events_of(path)) == 2 * got_in
    tell("ledger: writers racing for it", len(lines), f"never two at once; {refused} refused by name")


def _race(path: str, answers: int) -> None:
    for _ in range(40):
        try:
            with Ledger.open(path) as ledger:
                count = sum(1 for _ in ledger.events())
                ledger.append(notes(count, count + 1))
                ledger.append(notes(count + 1, count + 2))
                word = "in" if list(ledger.events()) == notes(0, count + 2) else "torn"
        except WorkError as error:
            word = str(error)
        os.write(answers, f"{word}\n".encode())
