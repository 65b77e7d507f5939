"""The ledger on disks that are full or must not be written to."""

from __future__ import annotations

import multiprocessing
import os
import resource
import shutil
import subprocess
import tempfile
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
from faults.conftest import Tell
from faults.crash import Moment, events_of, notes, watched

from fieldnav_ros.errors import FieldnavError, WorkError
from fieldnav_ros.parameters import DEFAULTS
from fieldnav_ros.params_file import write_parameters
from fieldnav_ros.tuning.ledger import Ledger

NOBODY = 65534


# -- a full disk


def _write_until_full(path: str, answers: int) -> None:
    """In a child: append under a limit of the file's size until that fails, then go on without the limit."""
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    ledger = Ledger.open(path)
    resource.setrlimit(resource.RLIMIT_FSIZE, (Path(path).stat().st_size + 30_000, hard))
    number = sum(1 for _ in ledger.events())
    said = ""
    while not said:
        try:
            ledger.append(notes(number, number + 3))
            number += 3
        except WorkError as error:
            said = str(error)
    there = list(ledger.events()) == notes(0, number)
    resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
    ledger.append(notes(number, number + 1))
    ledger.close()
    os.write(answers, f"{number}\n{there}\n{said}\n".encode())


def test_at_a_limit_of_file_size_the_ledger_says_so_keeps_what_it_has_and_goes_on_when_there_is_room(
    fast: Path, tell: Tell
) -> None:
    """``RLIMIT_FSIZE`` (setrlimit(2)), in a child process: a write beyond it fails with EFBIG."""
    path = fast / "full.ledger"
    for _ in range(3):
        reading, writing = os.pipe()
        child = multiprocessing.get_context("fork").Process(target=_write_until_full, args=(str(path), writing))
        child.start()
        os.close(writing)
        child.join(60)
        with os.fdopen(reading) as pipe:
            number, there, said = pipe.read().splitlines()
        assert child.exitcode == 0
        assert there == "True"
        assert "could not be written" in said
        assert events_of(path) == notes(0, int(number) + 1)
    tell("ledger: limit of file size reached", 3, "said; nothing lost; goes on when there is room")


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A file system of 256 KiB in memory; only who may mount gets one."""
    folder = tmp_path / "disk"
    folder.mkdir()
    mount = shutil.which("mount")
    if mount is None or subprocess.run(
        [mount, "-t", "tmpfs", "-o", "size=256k,mode=755", "none", str(folder)], capture_output=True, check=False
    ).returncode:  # fmt: skip
        pytest.skip("mounting a file system is not allowed here")
    yield folder
    subprocess.run(["umount", "--lazy", str(folder)], check=True)


def test_on_a_full_disk_the_ledger_says_so_keeps_what_it_has_and_goes_on_when_there_is_room(
    small_disk: Path, tell: Tell
) -> None:
    path, filler = small_disk / "session.ledger", small_disk / "filler"
    with Ledger.open(path) as ledger:
        ledger.append(notes(0, 10))
        filler.write_bytes(b"x" * 150_000)
        number, said = 10, ""
        while not said:
            try:
                ledger.append(notes(number, number + 1))
                number += 1
            except WorkError as error:
                said = str(error)
        assert "could not be written: database or disk is full" in said
        assert list(ledger.events()) == notes(0, number)
        with pytest.raises(WorkError, match="No space left"):
            write_parameters(small_disk / "champion.yaml", DEFAULTS, "x" * 200_000, "published")
        assert sorted(file.name for file in small_disk.iterdir() if file.name[0] != ".") == [
            "filler", "session.ledger", "session.ledger.lock"
        ]  # fmt: skip
        filler.unlink()
        ledger.append(notes(number, number + 1))
    assert events_of(path) == notes(0, number + 1)
    tell("ledger: disk full", 1, "said; nothing lost; goes on when there is room")


def test_a_disk_that_is_full_at_the_start_is_said(small_disk: Path, tell: Tell) -> None:
    try:
        with (small_disk / "filler").open("wb") as filler:
            while True:
                filler.write(b"x" * 4096)
                filler.flush()
    except OSError:
        pass
    with pytest.raises(WorkError) as caught:
        Ledger.open(small_disk / "new.ledger")
    assert str(caught.value).startswith(str(small_disk))
    (small_disk / "filler").unlink()
    Ledger.open(small_disk / "new.ledger").close()
    tell("ledger: disk full at the start", 1, "said; opens when there is room")


# -- no writing


def test_on_a_read_only_disk_a_ledger_can_be_read_and_not_opened_to_write(small_disk: Path, tell: Tell) -> None:
    path = small_disk / "session.ledger"
    with Ledger.open(path) as ledger:
        ledger.append(notes(0, 5))
    transaction = watched(path, notes(5, 6))
    subprocess.run(["mount", "-o", "remount,ro", str(small_disk)], check=True)
    with pytest.raises(WorkError, match="Read-only"):
        Ledger.open(path)
    with Ledger.read(path) as reader:
        assert list(reader.events()) == notes(0, 6)
    subprocess.run(["mount", "-o", "remount,rw", str(small_disk)], check=True)
    Moment("", 0, transaction.after, transaction.journal).lay(path)
    subprocess.run(["mount", "-o", "remount,ro", str(small_disk)], check=True)
    with pytest.raises(FieldnavError, match="its last transaction was cut off and has to be taken back") as caught:
        Ledger.read(path)
    assert "\n" not in str(caught.value)
    tell("ledger: read-only disk", 3, "readable; writing refused; an unfinished transaction is said")


def _as_nobody(act: Callable[[], str], answers: int) -> None:
    if os.geteuid() == 0:
        os.setgroups([])
        os.setresgid(NOBODY, NOBODY, NOBODY)
        os.setresuid(NOBODY, NOBODY, NOBODY)
    try:
        answer = act()
    except FieldnavError as error:
        answer = f"{type(error).__name__}: {error}"
    os.write(answers, answer.encode())


def without_rights(act: Callable[[], str]) -> str:
    """Return what a process answers for which permissions count, also where the tests run as root."""
    reading, writing = os.pipe()
    child = multiprocessing.get_context("fork").Process(target=_as_nobody, args=(act, writing))
    child.start()
    os.close(writing)
    child.join(60)
    with os.fdopen(reading) as pipe:
        return pipe.read()


@pytest.fixture
def public() -> Iterator[Path]:
    """A folder that every user of the machine may enter."""
    folder = Path(tempfile.mkdtemp(prefix="fieldnav-test-"))
    folder.chmod(0o755)
    yield folder
    folder.chmod(0o755)
    shutil.rmtree(folder)


@pytest.mark.parametrize(
    ("file", "folder", "lock", "read"),
    [
        (0o444, 0o555, None, "5 events"),
        (0o444, 0o777, None, "5 events"),
        (0o666, 0o555, None, "5 events"),
        (0o444, 0o777, 0o444, "5 events"),
        (0o000, 0o777, None, "WorkError"),
    ],
    ids=["file and folder", "file", "folder", "lock", "not readable"],
)
def test_without_the_right_to_write_a_ledger_can_be_read_and_writing_is_refused(
    public: Path, tell: Tell, request: pytest.FixtureRequest, file: int, folder: int, lock: int | None, read: str
) -> None:
    path = public / "session.ledger"
    with Ledger.open(path) as ledger:
        ledger.append(notes(0, 5))
    if lock is not None:
        (public / "session.ledger.lock").touch(lock)
    path.chmod(file)
    public.chmod(folder)

    def write() -> str:
        with Ledger.open(path) as ledger:
            ledger.append(notes(5, 6))
        return "written"

    def count() -> str:
        with Ledger.read(path) as ledger:
            return f"{sum(1 for _ in ledger.events())} events"

    before = path.read_bytes()
    refused = without_rights(write)
    assert refused.startswith(f"WorkError: {path}"), refused
    assert "\n" not in refused
    assert without_rights(count).startswith(read)
    assert path.read_bytes() == before
    name = request.node.callspec.id
    tell(f"ledger: no right to write, {name}", 2, "writing refused in a sentence, the file untouched")
