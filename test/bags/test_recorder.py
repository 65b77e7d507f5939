"""The writing thread: never waited for, bounded, and none the worse for a disk that is slow, full or gone."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from pathlib import Path

import pytest
import yaml
from bags.recordings import BEGAN, CHANNELS, asked, text
from mcap.reader import make_reader
from rosbags.rosbag2 import Reader

from fieldnav_ros.bags.bag import Bag, Channel
from fieldnav_ros.bags.recorder import Recorder
from fieldnav_ros.errors import InputError
from fieldnav_ros.model import Layout, Pose

DEADLINE = 30.0
REQUEST = text(asked("1.a.1", Layout(start=Pose(x=0, y=0, yaw=0), goal=Pose(x=1, y=0, yaw=0)), 5.0))


def until(condition: Callable[[], object]) -> None:
    end = time.monotonic() + DEADLINE
    while not condition():
        assert time.monotonic() < end, "waited too long"
        time.sleep(0.005)


class SlowBag(Bag):
    """A bag whose disk stands still until it is told to go on."""

    gate = threading.Event()

    def write(self, channel: int, log_time: int, publish_time: int, data: bytes) -> None:
        self.gate.wait(DEADLINE)
        super().write(channel, log_time, publish_time, data)


@pytest.fixture
def gate() -> Iterator[threading.Event]:
    SlowBag.gate.clear()
    yield SlowBag.gate
    SlowBag.gate.set()


def count_in(folder: Path) -> int:
    with (folder / f"{folder.name}_0.mcap").open("rb") as file:
        return sum(1 for _ in make_reader(file).iter_messages())


def test_a_slow_disk_costs_messages_and_no_time(tmp_path: Path, gate: threading.Event) -> None:
    recorder = Recorder(tmp_path, most_messages=100, open_bag=SlowBag)
    recorder.begin("1.a.1", CHANNELS, {})
    taken = [recorder.put(0, BEGAN + n, BEGAN + n, REQUEST) for n in range(1000)]  # returns though nothing is written
    assert taken[:100] == [True] * 100
    assert recorder.tally.dropped == taken.count(False) >= 890
    assert recorder.waiting <= 101
    gate.set()
    until(lambda: recorder.waiting == 0)
    assert recorder.put(0, BEGAN + 2000, BEGAN + 2000, REQUEST), "there is room again"
    assert recorder.close(DEADLINE)
    assert count_in(tmp_path / "1.a.1") == taken.count(True) + 1
    assert recorder.tally.written + recorder.tally.dropped == 1001


def test_the_queue_is_bounded_in_bytes_as_well(tmp_path: Path, gate: threading.Event) -> None:
    recorder = Recorder(tmp_path, most_bytes=10_000, open_bag=SlowBag)
    recorder.begin("1.a.1", CHANNELS, {})
    assert [recorder.put(0, 0, 0, bytes(4000)) for _ in range(4)] == [True, True, False, False]
    gate.set()
    assert recorder.close(DEADLINE)


def test_a_disk_that_never_comes_back_does_not_hold_up_the_end(tmp_path: Path, gate: threading.Event) -> None:
    recorder = Recorder(tmp_path, open_bag=SlowBag)
    recorder.begin("1.a.1", CHANNELS, {})
    recorder.put(0, 0, 0, REQUEST)
    assert not recorder.close(0.1)


def failing_at(count: int) -> Callable[[Path, str, Sequence[Channel], Mapping[str, str]], Bag]:
    """Return an opener whose first bag fails at this message, at its end (-1) or when it is opened (-2)."""
    opened: list[str] = []

    class Failing(Bag):
        def write(self, channel: int, log_time: int, publish_time: int, data: bytes) -> None:
            if len(opened) == 1 and sum(self._counts) == count:
                raise OSError(28, "No space left on device")
            super().write(channel, log_time, publish_time, data)

        def close(self) -> None:
            if len(opened) == 1 and count == -1:
                raise OSError(28, "No space left on device")
            super().close()

    def make(folder: Path, name: str, channels: Sequence[Channel], about: Mapping[str, str]) -> Bag:
        opened.append(name)
        if len(opened) == 1 and count == -2:
            raise OSError(5, "Input/output error")
        return Failing(folder, name, channels, about)

    return make


@pytest.mark.parametrize("count", [-2, -1, 0, 3])
def test_a_failing_disk_ends_one_bag_and_not_the_next(tmp_path: Path, count: int) -> None:
    recorder = Recorder(tmp_path, open_bag=failing_at(count))
    for name in ("1.a.1", "2.a.2"):
        recorder.begin(name, CHANNELS, {})
        for n in range(10):
            recorder.put(0, BEGAN + n, BEGAN + n, REQUEST)
        recorder.end()
    assert recorder.close(DEADLINE)
    assert count_in(tmp_path / "2.a.2") == 10
    tally = recorder.tally
    assert (tally.bags, tally.failed_bags) == (1, 1)
    [sentence] = tally.failures
    assert sentence.startswith("bag 1.a.1: ")
    assert "No space left" in sentence or "Input/output error" in sentence
    assert tally.written + tally.lost == tally.accepted == 20


def test_metadata_is_there_from_the_start_and_right_at_the_end(tmp_path: Path) -> None:
    """rosbag2's metadata.yaml, version 9, read by ``rosbags``."""
    bag = Bag(tmp_path, "1.a.1", CHANNELS, {"episode": "1.a.1"})
    early = yaml.safe_load((tmp_path / "1.a.1" / "metadata.yaml").read_text())["rosbag2_bagfile_information"]
    assert early["message_count"] == 0
    assert early["relative_file_paths"] == ["1.a.1_0.mcap"]
    for n in range(5):
        bag.write(0, BEGAN + n * 1000, BEGAN, REQUEST)
    bag.close()
    with Reader(tmp_path / "1.a.1") as reader:
        assert reader.message_count == 5
        assert (reader.start_time, reader.duration) == (BEGAN, 4001)
        assert {item.topic for item in reader.connections} == {channel.topic for channel in CHANNELS}
    assert sorted(path.name for path in (tmp_path / "1.a.1").iterdir()) == ["1.a.1_0.mcap", "metadata.yaml"]


@pytest.mark.parametrize("name", ["..", ".", "", ".a", "a/b", "../a", "/tmp/a", "a" * 81, "a\0", "a\n", "ä"])
def test_a_bag_never_leaves_its_folder(tmp_path: Path, name: str) -> None:
    (tmp_path / "bags").mkdir()
    with pytest.raises(InputError, match="name of a bag"):
        Bag(tmp_path / "bags", name, CHANNELS, {})
    assert not list((tmp_path / "bags").iterdir())


def test_nothing_is_written_over_or_through_a_link(tmp_path: Path) -> None:
    bags = tmp_path / "bags"
    (bags / "there").mkdir(parents=True)
    (bags / "link").symlink_to(tmp_path)
    (bags / "dangling").symlink_to(tmp_path / "nowhere")
    for name in ("there", "link", "dangling"):
        with pytest.raises(InputError, match="exists already"):
            Bag(bags, name, CHANNELS, {})
    assert [path.name for path in tmp_path.iterdir()] == ["bags"]
