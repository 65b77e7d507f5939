"""Floor time: what has gone by since the last booking, by the wall, by the poses, or by episodes alone."""

from __future__ import annotations

import pytest

from fieldnav_ros.crowd import NANO
from fieldnav_ros.nodes import floor_clock as module
from fieldnav_ros.nodes.floor_clock import FloorClock


class Wall:
    """A clock that stands until it is set."""

    now = 50.0

    def monotonic(self) -> float:
        return self.now


@pytest.fixture
def wall(monkeypatch: pytest.MonkeyPatch) -> Wall:
    wall = Wall()
    monkeypatch.setattr(module, "time", wall)
    return wall


def test_nothing_counts_before_the_start_and_after_the_stop(wall: Wall) -> None:
    clock = FloorClock("wall", 2.0)
    wall.now += 10.0
    assert clock.since() == 0.0
    clock.start()
    wall.now += 3.0
    clock.start()  # a second word to begin is none
    assert clock.since() == 3.0
    assert clock.book(1.0) == 3.0
    wall.now += 4.0
    assert clock.stop() == 4.0
    wall.now += 5.0
    assert clock.since() == clock.stop() == 0.0


def test_the_poses_time_counts_whatever_the_wall_says(wall: Wall) -> None:
    clock = FloorClock("pose", 2.0)
    clock.hear(100 * NANO)
    clock.start()
    for stamp in (101, 102, 104):
        clock.hear(stamp * NANO)
    assert clock.book() == 4.0
    wall.now += 100.0
    assert clock.since() == 0.0


@pytest.mark.parametrize("jump", [-50, 50, 10_000])
def test_a_jump_of_the_poses_clock_takes_no_floor_time(wall: Wall, jump: int) -> None:
    clock = FloorClock("pose", 2.0)
    clock.hear(100 * NANO)
    clock.start()
    clock.hear((100 + jump) * NANO)
    clock.hear((101 + jump) * NANO)
    assert clock.since() == 1.0


def test_by_episodes_each_counts_with_the_yards_reset(wall: Wall) -> None:
    clock = FloorClock("episode", 2.0)
    clock.start()
    wall.now += 100.0
    assert clock.since() == 0.0
    assert clock.book(3.5) == 5.5
    assert clock.stop() == 0.0
