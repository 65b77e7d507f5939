"""What guidance sees and means to do, drawn for a 3D viewer: floor, goal, obstacles with lead, guard zones, arrows."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from geometry_msgs.msg import Point
from std_msgs.msg import ColorRGBA
from visualization_msgs.msg import Marker, MarkerArray

from fieldnav_ros.drive import wrap
from fieldnav_ros.field.avoidance import Obstacles
from fieldnav_ros.guide import Memory, Senses, guide
from fieldnav_ros.model import Pose, Robot
from fieldnav_ros.nodes.convert import quaternion_of, stamp_of
from fieldnav_ros.parameters import FloatArray, Numbers
from fieldnav_ros.yard import Arrival, Floor

MOST_OBSTACLES = 50
ARROW_SHARE = 0.7
ASIDE = 0.05
"""Angle (rad) between heading and approach from which on an arrow counts as turned aside."""
SLOWED = 0.8
"""Share of the approach's speed below which an arrow counts as slowed down."""
LONG = 1.0
"""Seconds in which any speed is reached: what is shown is what is wanted."""
CRUISE = 0.6
"""Share of its largest speed at which the robot is assumed to come along where an arrow stands."""
FLAT = 0.005
"""Height in m of what lies on the floor."""
_GREY, _GREEN, _RED, _AMBER, _BLUE = (0.6, 0.6, 0.6), (0.1, 0.7, 0.2), (0.8, 0.2, 0.1), (0.9, 0.6, 0.1), (0.2, 0.4, 0.9)


class Picture(NamedTuple):
    """What is drawn; positions in ``frame``, ``columns`` arrows along the floor's longer side."""

    frame: str
    stamp: int
    floor: Floor
    robot: Robot
    arrival: Arrival
    goal: Pose | None
    obstacles: Obstacles
    numbers: Numbers
    model: str
    columns: int


def draw(picture: Picture) -> MarkerArray:
    """Return the picture as markers; the first of them clears what was drawn before."""
    wipe = Marker(action=Marker.DELETEALL)
    wipe.header.frame_id = picture.frame
    markers = [wipe, _outline(picture)]
    for index in range(min(picture.obstacles.x.shape[0], MOST_OBSTACLES)):
        markers += _obstacle(picture, index)
    if picture.goal is not None:
        goal = picture.goal
        markers.append(_disc(picture, "goal", 0, goal.x, goal.y, picture.arrival.position, _GREEN, 0.6))
        arrow = _marker(picture, "goal", 1, Marker.ARROW, _GREEN, 0.9)
        arrow.pose.position = _point(goal.x, goal.y)
        arrow.pose.orientation = quaternion_of(goal.yaw)
        arrow.scale.x, arrow.scale.y, arrow.scale.z = 0.15, 0.02, 0.02
        markers += [arrow, _arrows(picture, goal)]
    return MarkerArray(markers=markers)


def _marker(picture: Picture, space: str, number: int, kind: int, colour: tuple[float, ...], opaque: float) -> Marker:
    marker = Marker(ns=space, id=number, type=kind, action=Marker.ADD)
    marker.header.frame_id, marker.header.stamp = picture.frame, stamp_of(picture.stamp)
    marker.color = _colour(colour, opaque)
    marker.pose.orientation.w = 1.0
    return marker


def _colour(colour: tuple[float, ...], opaque: float) -> ColorRGBA:
    red, green, blue = colour
    return ColorRGBA(r=red, g=green, b=blue, a=opaque)


def _point(x: float, y: float) -> Point:
    return Point(x=float(x), y=float(y), z=0.0)


def _disc(
    picture: Picture,
    space: str,
    number: int,
    x: float,
    y: float,
    radius: float,
    colour: tuple[float, ...],
    opaque: float,
) -> Marker:
    marker = _marker(picture, space, number, Marker.CYLINDER, colour, opaque)
    marker.pose.position = _point(x, y)
    marker.scale.x = marker.scale.y = 2.0 * float(radius)
    marker.scale.z = FLAT
    return marker


def _outline(picture: Picture) -> Marker:
    marker = _marker(picture, "floor", 0, Marker.LINE_STRIP, _GREY, 1.0)
    marker.scale.x = 0.02
    (x0, x1), (y0, y1) = picture.floor.x, picture.floor.y
    marker.points = [_point(*corner) for corner in ((x0, y0), (x1, y0), (x1, y1), (x0, y1), (x0, y0))]
    return marker


def _obstacle(picture: Picture, index: int) -> list[Marker]:
    x, y, vx, vy, radius = (float(part[index, 0]) for part in picture.obstacles)
    lead = _marker(picture, "lead", index, Marker.LINE_STRIP, _AMBER, 0.9)
    lead.scale.x = 0.015
    ahead = float(picture.numbers.motion_lead)
    lead.points = [_point(x, y), _point(x + vx * ahead, y + vy * ahead)]
    guard = float(picture.numbers.guard_distance)
    return [
        _disc(picture, "obstacle", index, x, y, radius, _RED, 0.8),
        _disc(picture, "guard", index, x, y, guard, _RED, 0.15),
        lead,
    ]


def _arrows(picture: Picture, goal: Pose) -> Marker:
    """Return heading arrows on a grid as one list of lines, a short head to each; none where an obstacle is touched.

    Blue where the approach alone speaks, amber where obstacles or walls turn the robot aside, slow it down or send it
    back; for one that drives along the approach at CRUISE.
    """
    x, y = _grid(picture)
    nobody = Obstacles.none(x.size)
    way, freely = _advice(picture, goal, x, y, np.zeros(x.size), nobody, None)
    crowd = Obstacles(*(np.broadcast_to(part, (part.shape[0], x.size)) for part in picture.obstacles))
    heading, speed = _advice(picture, goal, x, y, way, crowd, picture.floor)
    aside = (np.abs(wrap(heading - way)) > ASIDE) | (speed < SLOWED * freely)
    marker = _marker(picture, "heading", 0, Marker.LINE_LIST, _BLUE, 0.8)
    marker.scale.x = 0.01
    length = ARROW_SHARE * _step(picture)
    for px, py, angle, turned in zip(x, y, heading, aside):
        lines = _arrow(px, py, angle, length)
        marker.points += lines
        marker.colors += [_colour(_AMBER if turned else _BLUE, 0.8)] * len(lines)
    return marker


def _step(picture: Picture) -> float:
    (x0, x1), (y0, y1) = picture.floor.x, picture.floor.y
    return max(x1 - x0, y1 - y0) / picture.columns


def _grid(picture: Picture) -> tuple[FloatArray, FloatArray]:
    """Return the places (m) of the arrows, each (N,): those at which the robot would touch no obstacle."""
    (x0, x1), (y0, y1), step = picture.floor.x, picture.floor.y, _step(picture)
    grid_x, grid_y = np.meshgrid(np.arange(x0 + step / 2, x1, step), np.arange(y0 + step / 2, y1, step))
    x, y, there = grid_x.ravel(), grid_y.ravel(), picture.obstacles
    free = (np.hypot(x - there.x, y - there.y) > there.radius + picture.robot.radius).all(axis=0)
    return x[free], y[free]


def _advice(
    picture: Picture, goal: Pose, x: FloatArray, y: FloatArray, yaw: FloatArray, crowd: Obstacles, floor: Floor | None
) -> tuple[FloatArray, FloatArray]:
    """Return heading (rad) and speed (m/s) that the field asks for, each (N,)."""
    wanted = [np.full(x.size, value) for value in (goal.x, goal.y, goal.yaw)]
    speed = np.full(x.size, CRUISE * picture.robot.wheel_speed)
    moving = Memory.start(x.size)._replace(left=speed, right=speed)
    senses = Senses._make([x, y, yaw, *wanted, crowd])
    advice = guide(senses, picture.numbers, picture.robot, floor, moving, LONG, picture.model)
    return advice.heading, advice.v


def _arrow(x: float, y: float, way: float, length: float) -> list[Point]:
    """Return an arrow about a place as three lines."""
    cos, sin = 0.5 * length * math.cos(way), 0.5 * length * math.sin(way)
    tip, lines = (x + cos, y + sin), [_point(x - cos, y - sin), _point(x + cos, y + sin)]
    for side in (-1.0, 1.0):
        back = way + math.pi + 0.5 * side
        lines += [
            _point(*tip), _point(tip[0] + 0.3 * length * math.cos(back), tip[1] + 0.3 * length * math.sin(back))
        ]  # fmt: skip
    return lines
