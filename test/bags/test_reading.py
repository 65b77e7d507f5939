"""Bags from outside: whole ones, cut ones, and ones that somebody has tampered with."""

from __future__ import annotations

import os
import random
import struct
import tracemalloc
from collections.abc import Iterator
from pathlib import Path

import pytest
from bags.recordings import BEGAN, asked, lines_of, pose, recorded, text, write
from episodes import YARD
from mcap.reader import make_reader
from mcap_ros2.decoder import DecoderFactory

from fieldnav_ros.bags import reading as module
from fieldnav_ros.bags.reading import find_bags, read_bag
from fieldnav_ros.bags.scoring import score_bag
from fieldnav_ros.crowd import Reading
from fieldnav_ros.errors import InputError
from fieldnav_ros.model import Layout, Pose
from fieldnav_ros.nodes.payloads import decode_request

NEAR = Layout(start=Pose(x=0.5, y=0.8, yaw=0.0), goal=Pose(x=1.1, y=0.8, yaw=0.0))
MUTATIONS = 400
MOST_MEMORY = 8 * 1024 * 1024


@pytest.fixture(scope="module")
def bag(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A short recording, chunks of ten messages."""
    readings = [Reading(n * 20_000_000, 0.5 + 0.01 * n, 0.8, 0.0) for n in range(1, 40)]
    request = asked("1.a.1", NEAR, 8.0)
    lines = [(0, BEGAN, text(request)), *((2, BEGAN + item.stamp, pose(item)) for item in readings)]
    return write(tmp_path_factory.mktemp("bags"), "1.a.1", lines, flush_every=10)


def test_what_is_read_is_what_foxgloves_reader_reads(bag: Path) -> None:
    found = read_bag(bag)
    assert found.complete
    assert found.about["episode"] == "1.a.1"
    with bag.open("rb") as file:
        theirs = list(make_reader(file, decoder_factories=[DecoderFactory()]).iter_decoded_messages())
    assert len(theirs) == len(found.entries) == 40
    for entry, (_, _, raw, message) in zip(found.entries, theirs):
        assert entry.logged == raw.log_time
        if entry.role == "pose":
            assert entry.message.pose.position.x == message.pose.position.x
            assert entry.message.header.stamp.nanosec == message.header.stamp.nanosec
        else:
            assert entry.message.data == message.data


def test_a_bag_cut_anywhere_is_read_up_to_the_last_chunk_before(bag: Path, tmp_path: Path) -> None:
    content, whole = bag.read_bytes(), read_bag(bag).entries
    counts = []
    for size in range(9, len(content), 131):
        cut = tmp_path / "cut.mcap"
        cut.write_bytes(content[:size])
        found = read_bag(cut)
        counts.append(len(found.entries))
        assert [entry.logged for entry in found.entries] == [entry.logged for entry in whole[: len(found.entries)]]
        assert found.complete <= (size > 0.5 * len(content))
    assert counts == sorted(counts)
    assert set(counts) == {0, 10, 20, 30, 40}


def mutated(content: bytes, random_state: random.Random) -> bytes:
    """Do to a file what a bad disk or a bad mind does: bits, runs, lengths, cuts, repeats."""
    data = bytearray(content)
    for _ in range(random_state.choice((1, 1, 2, 5, 20))):
        place = random_state.randrange(len(data))
        kind = random_state.randrange(6)
        if kind == 0:
            data[place] ^= 1 << random_state.randrange(8)
        elif kind == 1:
            data[place : place + 8] = struct.pack("<Q", random_state.choice((0, 2**31, 2**62, 2**64 - 1)))
        elif kind == 2:
            data[place : place + 4] = struct.pack("<I", random_state.choice((0, 2**31 - 1, 2**32 - 1)))
        elif kind == 3:
            del data[place : place + random_state.randrange(1, 40)]
        elif kind == 4:
            data[place:place] = random_state.randbytes(random_state.randrange(1, 40))
        else:
            data[place:place] = data[: random_state.randrange(1, 400)]
    return bytes(data)


def test_a_tampered_bag_is_read_or_refused_in_one_sentence_and_takes_no_memory(bag: Path, tmp_path: Path) -> None:
    content, path = bag.read_bytes(), tmp_path / "tampered.mcap"
    score_bag(bag, YARD, decode_request)
    refused, random_state = 0, random.Random(1)
    tracemalloc.start()
    try:
        for _ in range(MUTATIONS):
            path.write_bytes(mutated(content, random_state))
            try:
                score_bag(path, YARD, decode_request)
            except InputError as error:
                refused += 1
                assert "\n" not in str(error)
                assert str(path) in str(error)
        assert tracemalloc.get_traced_memory()[1] < MOST_MEMORY
    finally:
        tracemalloc.stop()
    assert MUTATIONS / 4 < refused < MUTATIONS


def forged() -> Iterator[tuple[str, bytes]]:
    """Files whose stated lengths are far beyond their own, by the record layouts of the MCAP specification."""
    magic, header = b"\x89MCAP0\r\n", struct.pack("<BQI4sI", 1, 12, 4, b"ros2", 0)
    start = magic + header
    yield "record", start + struct.pack("<BQ", 6, 2**62)
    yield "record within the limit", start + struct.pack("<BQ", 6, module.LARGEST_RECORD) + b"x"
    yield "string in a schema", start + struct.pack("<BQHI", 3, 6, 1, 2**32 - 1)
    yield "map in a channel", start + struct.pack("<BQHHIII", 4, 16, 1, 0, 0, 0, 2**32 - 1)
    chunk = struct.pack("<QQQII", 0, 0, 2**62, 0, 0) + struct.pack("<Q", 2**62)
    yield "chunk", start + struct.pack("<BQ", 6, len(chunk)) + chunk
    zstd = struct.pack("<QQQII", 0, 0, 2**40, 0, 4) + b"zstd" + struct.pack("<Q", 4) + b"\x28\xb5\x2f\xfd"
    yield "compressed chunk", start + struct.pack("<BQ", 6, len(zstd)) + zstd
    yield "magic alone", magic
    yield "nothing", b""


@pytest.mark.parametrize(("name", "content"), list(forged()), ids=[name for name, _ in forged()])
def test_stated_lengths_reserve_no_memory(tmp_path: Path, name: str, content: bytes) -> None:
    path = tmp_path / "forged.mcap"
    path.write_bytes(content)
    tracemalloc.start()
    try:
        with pytest.raises(InputError) as caught:
            score_bag(path, YARD, decode_request)
        assert tracemalloc.get_traced_memory()[1] < MOST_MEMORY
    finally:
        tracemalloc.stop()
    assert "\n" not in str(caught.value)


def test_a_length_forged_inside_a_message_is_refused(tmp_path: Path) -> None:
    """CDR: a sequence of 2**32 - 1 poses, a text as long (OMG DDSI-RTPS 2.5, 10: serialized payload)."""
    request = (0, BEGAN, text(asked("1.a.1", NEAR, 8.0)))
    header = b"\x00\x01\x00\x00" + struct.pack("<iiI", 0, 0, 1) + b"\x00" * 4
    for name, line in (
        ("sequence", (3, BEGAN, header + struct.pack("<I", 2**32 - 1))),
        ("text", (0, BEGAN, b"\x00\x01\x00\x00" + struct.pack("<I", 2**32 - 1) + b"{}")),
        ("empty", (2, BEGAN, b"")),
    ):
        path = write(tmp_path, name, [request, line])
        with pytest.raises(InputError, match="cannot be decoded"):
            read_bag(path)


def test_limits_on_size_and_number_are_kept(bag: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(module, "MOST_MESSAGES", 39)
    with pytest.raises(InputError, match="more than 39 messages"):
        read_bag(bag)
    large = tmp_path / "large.mcap"
    with large.open("wb") as file:
        file.truncate(module.LARGEST_FILE + 1)  # a hole: takes no room
    with pytest.raises(InputError, match="size is"):
        read_bag(large)


def test_only_files_are_opened(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe.mcap")
    with pytest.raises(InputError, match="is no file"):
        read_bag(tmp_path / "pipe.mcap")
    with pytest.raises(InputError, match="cannot be read"):
        read_bag(tmp_path / "missing.mcap")


def test_bags_are_found_by_file_by_folder_and_by_folder_of_folders(bag: Path, tmp_path: Path) -> None:
    assert find_bags([bag]) == find_bags([bag.parent]) == find_bags([bag.parent.parent]) == [bag]
    with pytest.raises(InputError, match="holds no bag"):
        find_bags([tmp_path])
    with pytest.raises(InputError, match="there is no such bag"):
        find_bags([tmp_path / "missing"])


def test_a_topic_of_another_type_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("bags.recordings.CHANNELS", ())
    from fieldnav_ros.bags.bag import Bag, Channel

    bag = Bag(tmp_path, "odd", [Channel("pose", "/pose", "std_msgs/msg/String")], {})
    bag.write(0, 1, 1, text("x"))
    bag.close()
    with pytest.raises(InputError, match="type of pose is 'std_msgs/msg/String'"):
        read_bag(tmp_path / "odd" / "odd_0.mcap")


def test_helpers_make_what_the_recorder_makes(tmp_path: Path) -> None:
    """A whole simulated episode is as readable as the short one above."""
    path, outcome = recorded(tmp_path, "000003.ab.1", NEAR, 8.0)
    assert len(read_bag(path).entries) == len(lines_of(asked("x", NEAR, 8.0), [], outcome, 0.0)) + 2 * len(
        score_bag(path, YARD, decode_request).t
    )
