"""Writing one bag: a folder with one MCAP file (https://mcap.dev/spec) and rosbag2's metadata.yaml, version 9.

Chunks are closed at each ``flush``, so that a file cut off at any moment can be read up to the last of them.
"""

from __future__ import annotations

import contextlib
import os
import re
from collections.abc import Mapping, Sequence
from io import BufferedWriter, FileIO
from pathlib import Path
from typing import Any, NamedTuple

import yaml

from fieldnav_ros.bags.definitions import definition
from fieldnav_ros.errors import InputError, shown

NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]{0,79}\Z")
ROLE = "fieldnav_role"
"""Key in a channel's metadata: what the topic is to this package, whatever it was remapped to."""
ABOUT = "fieldnav_ros"
"""Name of the MCAP metadata record with what a reader must know of the recording."""
METADATA = "metadata.yaml"
CHUNK = 1 << 16
"""Bytes after which a chunk is closed in any case: so much at most is lost with a process or to a full disk."""
VERSION = 9
"""Of rosbag2's metadata.yaml, as Jazzy and Kilted write it."""


class Channel(NamedTuple):
    """A topic of the bag: its role here (``pose``), full name, type, and what its publishers offer (rosbag2's keys)."""

    role: str
    topic: str
    kind: str
    qos: tuple[Mapping[str, Any], ...] = ()


class Bag:
    """One bag being written. Raises OSError where the disk does not bear it; then ``abandon`` it."""

    def __init__(self, folder: Path, name: str, channels: Sequence[Channel], about: Mapping[str, str]) -> None:
        """Make ``folder/name``; InputError where that exists already or would not lie in the folder."""
        if not NAME.match(name):
            raise InputError.of("name of a bag", name, "letters, digits, . _ - and begin with a letter or digit")
        from mcap.writer import CompressionType, Writer  # an extra of the package

        self.name, self._channels = name, tuple(channels)
        self._counts = [0] * len(self._channels)
        self._first: int | None = None
        self._last = 0
        self._file = f"{name}_0.mcap"
        self._folder = _make_folder(folder, name)
        try:
            # no name is followed twice: everything is made inside the folder that was just made
            self._raw = FileIO(
                os.open(self._file, os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_NOFOLLOW, 0o644, dir_fd=self._folder),
                "wb",
            )
        except BaseException:
            os.close(self._folder)
            raise
        self._stream = BufferedWriter(self._raw, CHUNK)
        self._writer: Any = Writer(self._stream, chunk_size=CHUNK, compression=CompressionType.NONE)
        try:
            self._begin(about)
        except BaseException:
            self.abandon()
            raise

    def _begin(self, about: Mapping[str, str]) -> None:
        self._writer.start(profile="ros2", library="fieldnav_ros")
        self._writer.add_metadata(ABOUT, dict(about))
        schemas: dict[str, int] = {}
        for channel in self._channels:
            text, digest = definition(channel.kind)
            if channel.kind not in schemas:
                schemas[channel.kind] = self._writer.register_schema(channel.kind, "ros2msg", text.encode())
            metadata = {
                "offered_qos_profiles": yaml.safe_dump([dict(item) for item in channel.qos], sort_keys=False),
                "topic_type_hash": digest,
                ROLE: channel.role,
            }
            self._writer.register_channel(channel.topic, "cdr", schemas[channel.kind], metadata)
        self._stream.flush()
        self._write_metadata()

    def write(self, channel: int, log_time: int, publish_time: int, data: bytes) -> None:
        """Add a serialised message of the channel with this index; times in ns since the epoch."""
        self._writer.add_message(channel + 1, log_time, data, publish_time, self._counts[channel])
        self._first = log_time if self._first is None else min(self._first, log_time)
        self._last = max(self._last, log_time)
        self._counts[channel] += 1

    def flush(self) -> None:
        """Hand everything to the system: from here on it survives the end of this process."""
        self._writer.flush()

    def close(self) -> None:
        """Complete the file and its metadata, and see to it that they reach the disk."""
        self._writer.finish()
        self._stream.flush()
        os.fsync(self._raw.fileno())
        self._stream.close()
        self._write_metadata()
        os.fsync(self._folder)
        os.close(self._folder)

    def abandon(self) -> None:
        """Let go of a bag that cannot be written further; what has reached the file can be read."""
        with contextlib.suppress(OSError):
            self._raw.close()
        with contextlib.suppress(OSError, ValueError):
            self._stream.close()
        with contextlib.suppress(OSError):
            os.close(self._folder)

    def _write_metadata(self) -> None:
        part = METADATA + ".part"
        text = yaml.safe_dump({"rosbag2_bagfile_information": self._information()}, sort_keys=False)
        file = os.open(part, os.O_WRONLY | os.O_CREAT | os.O_TRUNC | os.O_NOFOLLOW, 0o644, dir_fd=self._folder)
        with open(file, "w", encoding="utf-8") as stream:
            stream.write(text)
            stream.flush()
            os.fsync(file)
        os.rename(part, METADATA, src_dir_fd=self._folder, dst_dir_fd=self._folder)

    def _information(self) -> dict[str, Any]:
        total = sum(self._counts)
        first = self._first or 0
        span, start = {"nanoseconds": self._last - first}, {"nanoseconds_since_epoch": first}
        return {
            "version": VERSION,
            "storage_identifier": "mcap",
            "duration": dict(span),
            "starting_time": dict(start),
            "message_count": total,
            "topics_with_message_count": [
                {"topic_metadata": _topic(channel), "message_count": count}
                for channel, count in zip(self._channels, self._counts)
            ],
            "compression_format": "",
            "compression_mode": "",
            "relative_file_paths": [self._file],
            "files": [{"path": self._file, "starting_time": start, "duration": span, "message_count": total}],
            "custom_data": None,
            "ros_distro": os.environ.get("ROS_DISTRO", ""),
        }


def _topic(channel: Channel) -> dict[str, Any]:
    return {
        "name": channel.topic,
        "type": channel.kind,
        "serialization_format": "cdr",
        "offered_qos_profiles": [dict(item) for item in channel.qos],
        "type_description_hash": definition(channel.kind).digest,
    }


def _make_folder(folder: Path, name: str) -> int:
    """Make a folder that was not there and return it open; a link of that name counts as there."""
    parent = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.mkdir(name, 0o755, dir_fd=parent)
        return os.open(name, os.O_RDONLY | os.O_DIRECTORY | os.O_NOFOLLOW, dir_fd=parent)
    except FileExistsError:
        raise InputError(f"{shown(name)} exists already in {folder} and is not written over") from None
    finally:
        os.close(parent)
