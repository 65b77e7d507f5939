"""The picture of a survey: the field all over the floor, with its faults marked."""

from __future__ import annotations

import math
import textwrap
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Circle, Rectangle

from fieldnav_ros.model import OutcomeKind
from fieldnav_ros.report.floor import draw_arrows, draw_cart, draw_floor, draw_pose, floor_height
from fieldnav_ros.report.style import AFTER, BEFORE, INK, LOOKS, SOFT, WIDTH, WORDS, key_above, new_figure, styled
from fieldnav_ros.survey.scene import Scene, clear, grid, headings
from fieldnav_ros.survey.survey import Survey

SIZE = 8.4
"""Width in inches."""
ARROWS = 20
"""Arrows along the longer side of the floor: fewer than on the page, as there are lines and marks beside them."""
CELLS = 120
"""Places along the longer side from which lines are drawn."""
LINES, ZONE = "#8fa9ba", "#e4e7e9"
ZONE_LOOK: Any = {"facecolor": ZONE, "edgecolor": SOFT, "linewidth": 0.8, "linestyle": (0, (3, 2))}
AWAY = 0.9
"""How far from its place the mark of a failed start stands, in radii of the robot."""
COLUMNS = 124
"""Characters of a line below the picture."""


def survey_figure(found: Survey) -> Figure:
    """Return arrows, streamlines, guard zones and walls, and over them what the survey found."""
    scene, yard = found.scene, found.scene.yard
    with styled():
        figure, axes = new_figure(floor_height(yard.floor.x, yard.floor.y) * SIZE / WIDTH + 0.9, SIZE)
        _zones(axes, scene)
        _streamlines(axes, scene)
        draw_arrows(axes, scene, ARROWS)
        draw_floor(axes, yard, yard.floor.x, yard.floor.y)
        for item in scene.obstacles:
            draw_cart(axes, yard, item)
        draw_pose(axes, scene.goal, yard.robot.radius, INK, INK)
        _key(axes, scene)
        _failed(axes, found)
        _faults(axes, found)
        key_above(figure, axes, 5)
        axes.xaxis.labelpad = 6.0
        figure.supxlabel("\n" + caption(found), x=0.01, ha="left", fontsize=9.0)
    return figure


def caption(found: Survey) -> str:
    """Return what is shown, for whom the headings hold, and how marks are to be read."""
    scene, goal = found.scene, found.scene.goal
    text = (
        f"{scene.yard.name}, field {scene.model}, goal {goal.x:.4g}, {goal.y:.4g} m at {math.degrees(goal.yaw):.4g}°: "
        f"from {len(found.failed)} of {len(found.starts)} starts ({100.0 * found.share_failed:.1f}\u00a0%) it is not "
        f"reached within {found.time_limit:g}\u00a0s. Arrows and streamlines: heading for a robot at rest that faces "
        "along it and remembers nothing. Flips, loops and failed starts: as driven in simulation; the mark of a failed "
        "start stands off its place towards the heading at the start."
    )
    return "\n".join(textwrap.wrap(text, COLUMNS))


def _zones(axes: Axes, scene: Scene) -> None:
    """Draw where avoidance alone counts, for the centre of the robot: about obstacles, and along walls that count."""
    yard, guard = scene.yard, scene.parameters.guard_distance
    if scene.model != "published":  # which heeds no wall
        (x0, x1), (y0, y1) = yard.floor.x, yard.floor.y
        gap = min(max(guard - yard.robot.radius, 0.0), 0.5 * (x1 - x0), 0.5 * (y1 - y0))
        axes.add_patch(Rectangle((x0, y0), x1 - x0, y1 - y0, facecolor=ZONE, edgecolor="none", zorder=0.1))
        axes.add_patch(
            Rectangle((x0 + gap, y0 + gap), x1 - x0 - 2 * gap, y1 - y0 - 2 * gap, zorder=0.2,
                      **{**ZONE_LOOK, "facecolor": "white"})
        )  # fmt: skip
    for item in scene.obstacles:
        grown = 0.0 if scene.model == "published" else item.radius - yard.robot.radius
        radius = max(guard + grown, 0.0)
        # edges above all zones, so that none hides another's
        axes.add_patch(Circle((item.x, item.y), radius, zorder=0.3, **{**ZONE_LOOK, "edgecolor": "none"}))
        axes.add_patch(Circle((item.x, item.y), radius, zorder=0.4, **{**ZONE_LOOK, "facecolor": "none"}))


def _streamlines(axes: Axes, scene: Scene) -> None:
    floor = scene.yard.floor
    side = max(floor.x[1] - floor.x[0], floor.y[1] - floor.y[0])
    columns, rows = grid(scene.yard, side / CELLS)
    if min(len(columns), len(rows)) < 2:
        return
    x, y = np.meshgrid(columns, rows)
    heading = headings(scene, x.ravel(), y.ravel()).reshape(x.shape)
    blocked = ~clear(scene, x, y)
    along, across = (np.ma.masked_array(part, blocked) for part in (np.cos(heading), np.sin(heading)))
    axes.streamplot(x, y, along, across, density=1.1, color=LINES, linewidth=0.7, arrowstyle="-", zorder=0.9)


def _key(axes: Axes, scene: Scene) -> None:
    """Name in the legend what is no mark of a fault."""
    axes.plot([], [], linestyle="none", marker=r"$\rightarrow$", markersize=15, color=SOFT, label="heading")
    axes.plot([], [], color=LINES, linewidth=0.9, label="streamline")
    axes.plot([], [], "o", markersize=9, markerfacecolor="white", markeredgecolor=INK, label="goal")
    if scene.model != "published" or scene.obstacles:
        axes.add_patch(Rectangle((0, 0), 0, 0, label="guard zone", **ZONE_LOOK))
    if scene.obstacles:
        axes.plot([], [], "o", markersize=9, markerfacecolor="#c9ced2", markeredgecolor=INK, label="parked cart")


def _failed(axes: Axes, found: Survey) -> None:
    off = AWAY * found.scene.yard.robot.radius
    for kind in (OutcomeKind.TIMEOUT, OutcomeKind.CONTACT, OutcomeKind.OFF_FLOOR):
        poses = [start.pose for start in found.failed if start.kind is kind]
        if not poses:
            continue
        look = LOOKS[kind]
        x, y = ([getattr(pose, axis) for pose in poses] for axis in ("x", "y"))
        tips = (
            [pose.x + off * math.cos(pose.yaw) for pose in poses],
            [pose.y + off * math.sin(pose.yaw) for pose in poses],
        )
        axes.plot([x, tips[0]], [y, tips[1]], color=look.edge, linewidth=0.7, zorder=4)
        axes.plot(
            *tips, look.marker, color=look.edge, markersize=3.6, markeredgewidth=1.1, zorder=4,
            label=f"start of {WORDS[kind]} ({len(poses)})",
        )  # fmt: skip


def _faults(axes: Axes, found: Survey) -> None:
    for number, loop in enumerate(found.loops):
        label = None if number else f"closed loop ({len(found.loops)})"
        axes.plot(loop.x, loop.y, color="white", linewidth=4.2, zorder=5)
        axes.plot(loop.x, loop.y, color=AFTER, linewidth=2.4, zorder=5.1, label=label)
    for points, marker, face, size, label in (
        ([(flip.x, flip.y) for flip in found.flips], "D", BEFORE, 6.5, "flip"),
        (list(found.cancelling), "X", INK, 10.5, "cancelling point"),
    ):
        if points:
            axes.plot(
                *zip(*points), marker, color=face, markeredgecolor=INK if face != INK else "white",
                markeredgewidth=1.0, markersize=size, zorder=6, label=f"{label} ({len(points)})",
            )  # fmt: skip
