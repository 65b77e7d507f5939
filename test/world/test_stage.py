"""The floor that the simulator shows: walls that hold where nothing puts the robot back."""

from __future__ import annotations

import math

import pytest

from fieldnav_ros.model import Layout, Pose
from fieldnav_ros.resources import config_path
from fieldnav_ros.world.plant import STEP
from fieldnav_ros.world.stage import GIVE, Stage
from fieldnav_ros.yard import load_yard

YARD = load_yard(config_path("yards/parcel_yard.yaml"))
REACH = YARD.robot.radius - GIVE


def stage(yaw: float, walls_hold: bool) -> Stage:
    start = Pose(x=1.2, y=0.8, yaw=yaw)
    return Stage(YARD, Layout(start=start, goal=start), 10.0, walls_hold)


@pytest.mark.parametrize("yaw", [0.0, 0.7, math.pi / 2, 2.5, math.pi, -1.2])
def test_a_wall_holds_the_robot_and_lets_it_go_again(yaw: float) -> None:
    held = stage(yaw, walls_hold=True)
    held.command(1.0, 0.0)
    for _ in range(400):
        held.step()
        shown = held.show()
        assert YARD.floor.x[0] + REACH - 1e-12 <= shown.x <= YARD.floor.x[1] - REACH + 1e-12
        assert YARD.floor.y[0] + REACH - 1e-12 <= shown.y <= YARD.floor.y[1] - REACH + 1e-12
    stuck = held.show()
    held.command(-0.5, 0.0)
    for _ in range(100):
        held.step()
    assert math.dist((stuck.x, stuck.y), (held.show().x, held.show().y)) > 0.2


def test_away_from_walls_it_is_the_same_floor() -> None:
    held, free = stage(0.3, walls_hold=True), stage(0.3, walls_hold=False)
    for number in range(round(0.5 / STEP)):
        for floor in (held, free):
            floor.command(0.8, 0.5 * math.sin(number))
            floor.step()
    assert held.show()[:4] == free.show()[:4]
