"""Reading a bag of an episode back, whole or cut off. What comes from a file is bounded and checked here.

A bag is untrusted: sizes it states take no memory, and whatever is wrong with it is an InputError in one sentence.
A file that ends in the middle is read up to there; a public reader that does so is ``mcap``'s NonSeekingReader, and
``mcap recover`` (https://mcap.dev/guides/cli) makes a whole file of it.
"""

from __future__ import annotations

import stat
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from io import BufferedReader
from pathlib import Path
from typing import Any, NamedTuple

from fieldnav_ros.bags.bag import ABOUT, ROLE
from fieldnav_ros.bags.definitions import check_installed, typestore
from fieldnav_ros.errors import InputError, clipped, shown

LARGEST_FILE = 256 * 1024 * 1024
LARGEST_RECORD = 8 * 1024 * 1024
"""Bytes of a record or chunk; rosbag2 and this package close a chunk at 1 MiB at most."""
MOST_MESSAGES = 1_000_000
MOST_CHANNELS = 1000
STRING = "std_msgs/msg/String"
READ: Mapping[str, tuple[str, ...]] = {
    "episode/request": (STRING,),
    "episode/outcome": (STRING,),
    "pose": tuple(
        f"{package}/msg/{name}"
        for package, name in (
            ("geometry_msgs", "PoseStamped"), ("geometry_msgs", "PoseWithCovarianceStamped"), ("nav_msgs", "Odometry"),
        )
    ),
    "obstacles": ("geometry_msgs/msg/PoseArray",),
}  # fmt: skip
"""Roles that are decoded, and the types that each may have."""


class Entry(NamedTuple):
    """A message of the bag: its role ("" where it is of no use here), when it was logged (ns), itself decoded."""

    role: str
    logged: int
    message: Any


@dataclass(frozen=True)
class Content:
    """What a bag holds, in the order in which it was written; ``complete`` is false where the file was cut off."""

    path: Path
    about: Mapping[str, str]
    entries: tuple[Entry, ...]
    complete: bool


def find_bags(paths: Iterable[Path]) -> list[Path]:
    """Return the MCAP files of bags: files themselves, folders of one bag, or folders of such folders.

    InputError where one is none of these.
    """
    found: list[Path] = []
    for path in paths:
        if path.is_dir():
            inside = _files_of(path) or [
                file for folder in sorted(path.iterdir()) if folder.is_dir() for file in _files_of(folder)
            ]
            if not inside:
                raise InputError(f"{path}: holds no bag")
            found += inside
        elif path.exists():
            found.append(path)
        else:
            raise InputError(f"{path}: there is no such bag")
    return found


def _files_of(folder: Path) -> list[Path]:
    return sorted(file for file in folder.glob("*.mcap") if file.is_file())


def read_bag(path: Path) -> Content:
    """Read one MCAP file; WorkError where the libraries are missing, InputError where the file is unusable."""
    check_installed()
    with _opened(path) as file:
        reader = _Reader(path)
        try:
            complete = reader.run(file)
        except InputError:
            raise
        except Exception as error:  # noqa: BLE001  (libraries that are fed forged bytes raise whatever they like)
            why = f"{type(error).__name__} {clipped(str(error))}".rstrip()
            raise InputError(f"{path}: is no bag that can be read: {why}") from None
    return Content(path, reader.about, tuple(reader.entries), complete)


def _opened(path: Path) -> BufferedReader:
    try:
        found = path.stat()
        if not stat.S_ISREG(found.st_mode):
            raise InputError(f"{path}: is no file")  # a named pipe would be waited for, for ever
        if found.st_size > LARGEST_FILE:
            raise InputError.of(f"{path}: size", found.st_size, f"at most {LARGEST_FILE} bytes")
        return path.open("rb")
    except OSError as error:
        raise InputError(f"{path}: cannot be read: {error.strerror}") from error


class _Bounded:
    """A file that ends where less is left than is asked for: a stated length reserves nothing."""

    def __init__(self, file: BufferedReader, end: type[Exception]) -> None:
        self._file, self._end = file, end
        self._left = file.seek(0, 2)
        file.seek(0)

    def read(self, length: int) -> bytes:
        if length > self._left:
            raise self._end
        self._left -= length
        return self._file.read(length)


class _Reader:
    def __init__(self, path: Path) -> None:
        self._path = path
        self._schemas: dict[int, tuple[str, str]] = {}
        self._channels: dict[int, tuple[str, str]] = {}
        self._count = 0
        self.about: dict[str, str] = {}
        self.entries: list[Entry] = []

    def run(self, file: BufferedReader) -> bool:
        """Take in the data section; tell whether its end was seen."""
        from mcap.exceptions import EndOfFile
        from mcap.records import Chunk, DataEnd, Header
        from mcap.stream_reader import StreamReader, breakup_chunk

        stream: Any = _Bounded(file, EndOfFile)
        records = iter(StreamReader(stream, emit_chunks=True, record_size_limit=LARGEST_RECORD).records)
        for record in _up_to_the_cut(records, EndOfFile):
            if isinstance(record, DataEnd):
                return True
            if isinstance(record, Chunk):
                if record.compression:
                    raise InputError(
                        f"{self._path}: is compressed ({shown(record.compression)}), must not be; 'mcap decompress'"
                        " makes a plain one"
                    )
                for inner in breakup_chunk(record, validate_crc=True):
                    self._take(inner)
            elif isinstance(record, Header) and record.profile != "ros2":
                raise InputError.of(f"{self._path}: profile", record.profile, "'ros2'")
            else:
                self._take(record)
        return False

    def _take(self, record: Any) -> None:
        kind = type(record).__name__
        if kind == "Message":
            self._message(record)
        elif kind == "Schema":
            self._schemas[record.id] = (record.name, record.encoding)
        elif kind == "Channel":
            self._channel(record)
        elif kind == "Metadata" and record.name == ABOUT:
            self.about = dict(record.metadata)
        if len(self._schemas) > MOST_CHANNELS or len(self._channels) > MOST_CHANNELS:
            raise InputError(f"{self._path}: holds more than {MOST_CHANNELS} topics")

    def _channel(self, record: Any) -> None:
        kind, _ = self._schemas.get(record.schema_id, ("", ""))
        role = record.metadata.get(ROLE) or _role_of(record.topic)
        known = role in READ and record.message_encoding == "cdr"
        if known and kind not in READ[role]:
            raise InputError.of(f"{self._path}: type of {role}", kind, "one of " + ", ".join(READ[role]))
        self._channels[record.id] = (role if known else "", kind)

    def _message(self, record: Any) -> None:
        self._count += 1
        if self._count > MOST_MESSAGES:
            raise InputError(f"{self._path}: holds more than {MOST_MESSAGES} messages")
        role, kind = self._channels[record.channel_id]
        if not role:
            self.entries.append(Entry("", record.log_time, None))
            return
        try:
            message = typestore().deserialize_cdr(record.data, kind)
        except Exception as error:  # noqa: BLE001  (see above)
            raise InputError(f"{self._path}: a message of {role} cannot be decoded ({type(error).__name__})") from None
        self.entries.append(Entry(role, record.log_time, message))


def _up_to_the_cut(records: Iterator[Any], end: type[Exception]) -> Iterator[Any]:
    while True:
        try:
            record = next(records)
        except (end, StopIteration):
            return
        yield record


def _role_of(topic: str) -> str:
    """Return the role of a topic in a bag of rosbag2's own, where the name says it."""
    return next((role for role in READ if topic == f"/{role}" or topic.endswith(f"/{role}")), "")
