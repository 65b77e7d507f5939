"""Getting the robot to its start: it drives, and where that takes too long somebody is asked to carry it."""

from __future__ import annotations

from collections.abc import Callable, Generator
from typing import Any

import pytest

pytest.importorskip("rclpy", reason="futures are rclpy's")

from fieldnav_ros.crowd import NANO, Reading
from fieldnav_ros.model import Pose
from fieldnav_ros.nodes.payloads import DriveTo
from fieldnav_ros.nodes.resetting import Resetting
from fieldnav_ros.nodes.script import Script
from fieldnav_ros.resources import config_path
from fieldnav_ros.yard import load_yard

pytestmark = pytest.mark.ros
YARD = load_yard(config_path("yards/parcel_yard.yaml"))
MARK = YARD.marks[0]
START = Pose(x=MARK.x, y=MARK.y, yaw=MARK.yaw)


class Node:
    """Stands in for the tuner: settings, warnings, what was sent."""

    def __init__(self, way: str) -> None:
        self.settings = {
            "return": way, "start_slack": 0.1, "start_turn": 0.35, "start_rest": 1.0, "drive_limit": 15.0
        }  # fmt: skip
        self.warned: list[str] = []
        self.sent: list[str] = []
        self.ready = True

    def warn(self, kind: str, _sentence: str) -> None:
        self.warned.append(kind)

    def get_fully_qualified_name(self) -> str:
        return "/tuner_node"

    def put_champion(self) -> Generator[Any, Any, bool]:
        yield from ()
        self.sent.append("champion")
        return self.ready

    def send(self, request: DriveTo) -> None:
        self.sent.append(f"drive to {request.goal.x:g}")

    def stop(self) -> None:
        self.sent.append("stop")


class Reset:
    """One reset with its script; poses are given by hand."""

    def __init__(self, way: str) -> None:
        self.node = Node(way)
        node: Any = self.node
        self.resetting = Resetting(node, YARD, node, self.node.send, self.node.stop)
        self.result: list[bool] = []
        self.script = Script(lambda fault: pytest.fail(repr(fault)))

    def begin(self) -> None:
        def steps() -> Generator[Any, Any, None]:
            self.result.append((yield from self.resetting.to(START, "drive-1", lambda: None)))

        self.script.start(steps())

    def see(self, place: Callable[[float], tuple[float, float, float]], first: float, last: float) -> None:
        """Show the robot from one moment to another (s), ten poses a second."""
        for number in range(round(10 * first), round(10 * last) + 1):
            self.resetting.look(Reading(round(0.1 * number * NANO), *place(0.1 * number)))


def there(_seconds: float) -> tuple[float, float, float]:
    return START.x, START.y, START.yaw


def away(seconds: float) -> tuple[float, float, float]:
    return 1.5 + 0.01 * seconds, 0.8, 0.0


def test_a_robot_that_drives_goes_with_the_champion_and_is_stopped_when_it_stands() -> None:
    reset = Reset("drive")
    reset.begin()
    assert reset.resetting.phase == "driving"
    reset.see(away, 0.0, 3.0)
    assert reset.result == []
    reset.see(there, 3.1, 4.0)
    assert reset.result == [True]
    assert reset.node.sent == ["champion", f"drive to {START.x:g}", "stop"]
    assert reset.node.warned == []


def test_where_it_does_not_get_there_it_is_stopped_and_somebody_is_asked() -> None:
    reset = Reset("drive")
    reset.begin()
    reset.see(away, 0.0, 15.2)
    assert (reset.resetting.phase, reset.node.sent[-1], reset.node.warned) == ("placing", "stop", ["drives_failed"])
    assert f"mark {MARK.name}" in reset.resetting.words
    reset.see(there, 16.0, 16.5)
    assert reset.result == [], "a hand may still be near: it must stand for a second"
    reset.see(there, 16.6, 17.1)
    assert reset.result == [True]
    assert reset.resetting.phase == reset.resetting.words == ""


def test_nothing_moves_a_robot_that_is_carried() -> None:
    reset = Reset("operator")
    reset.begin()
    assert reset.resetting.phase == "placing"
    reset.see(away, 0.0, 60.0)
    reset.see(there, 60.1, 61.2)
    assert reset.result == [True]
    assert reset.node.sent == []


def test_it_does_not_drive_before_the_champion_is_in_service() -> None:
    reset = Reset("drive")
    reset.node.ready = False
    reset.begin()
    assert reset.result == [False]
    assert reset.node.sent == ["champion"]


def test_a_reset_that_is_dropped_asks_nobody_any_more() -> None:
    reset = Reset("operator")
    reset.begin()
    reset.script.drop()
    assert reset.resetting.words == ""
    reset.see(there, 0.0, 2.0)
    assert reset.result == []
