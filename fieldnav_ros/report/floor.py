"""Pictures of the floor: where episodes failed, and what the field says with tracks over it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Circle, Rectangle

from fieldnav_ros.model import Layout, Obstacle, OutcomeKind, Pose
from fieldnav_ros.parameters import ParameterSet
from fieldnav_ros.report.replay import FloorTrack
from fieldnav_ros.report.style import AFTER, BEFORE, INK, LOOKS, SOFT, WORDS, key_above, new_figure, styled
from fieldnav_ros.survey.scene import Scene, clear, grid, headings
from fieldnav_ros.yard import Yard

ARROWS = 26
"""Arrows along the longer side of the floor."""
AHEAD = 0.5
"""Seconds of a cart's way that its arrow shows."""


@dataclass(frozen=True)
class Failure:
    """A failed episode on the floor: its layout, and where it ended if that is known."""

    kind: OutcomeKind
    layout: Layout
    track: FloorTrack | None


def failures(yard: Yard | None, items: Sequence[Failure]) -> Figure:
    """Where failed episodes began and, where known, ended."""
    with styled():
        x, y = _extent(yard, [item.layout for item in items])
        figure, axes = new_figure(floor_height(x, y) + 0.3)
        draw_floor(axes, yard, x, y)
        known = [item for item in items if item.track is not None]
        for item in known:
            track = item.track
            if track is not None:
                axes.plot(track.x[::10], track.y[::10], color=SOFT, linewidth=0.5, alpha=_faint(len(known)))
        starts = [(item.layout.start.x, item.layout.start.y) for item in known]
        if starts:
            axes.plot(*zip(*starts), ".", color=SOFT, markersize=4, label="start")
        for kind in (OutcomeKind.TIMEOUT, OutcomeKind.CONTACT, OutcomeKind.OFF_FLOOR):
            _ends(axes, kind, [item for item in items if item.kind is kind])
        key_above(figure, axes, 4)
    return figure


def _ends(axes: Axes, kind: OutcomeKind, items: Sequence[Failure]) -> None:
    look = LOOKS[kind]
    ends = [(float(item.track.x[-1]), float(item.track.y[-1])) for item in items if item.track is not None]
    starts = [(item.layout.start.x, item.layout.start.y) for item in items if item.track is None]
    unknown = "+" if look.marker == "x" else look.marker  # a cross cannot be drawn hollow
    for points, marker, face, label in (
        (ends, look.marker, look.edge, f"{WORDS[kind]}: end"),
        (starts, unknown, "none", f"{WORDS[kind]}: start"),
    ):
        if points:
            axes.plot(
                *zip(*points),
                marker,
                color=look.edge,
                markerfacecolor=face,
                markersize=5.5 if len(items) < 25 else 4.0,
                markeredgewidth=1.1,
                label=label,
            )


def field(
    yard: Yard,
    layout: Layout,
    parameters: ParameterSet,
    model: str,
    main: FloorTrack | None = None,
    others: Sequence[FloorTrack] = (),
    after: bool = False,
) -> Figure:
    """Headings all over the floor at the layout's start, for a robot at rest that faces along them, and tracks."""
    with styled():
        x, y = _extent(yard, [layout])
        figure, axes = new_figure(floor_height(x, y) + 0.3)
        draw_floor(axes, yard, x, y)
        draw_arrows(axes, Scene(yard, parameters, model, layout.goal, layout.obstacles))
        colour, dashes = (AFTER, "-") if after else (BEFORE, (0, (5, 1.2)))
        for track in others:
            axes.plot(track.x, track.y, color=colour, linewidth=0.9, linestyle=dashes)
            _end(axes, track, 4.0)
        if main is not None:
            axes.plot(main.x, main.y, color="white", linewidth=4.5)
            axes.plot(main.x, main.y, color=colour, linewidth=2.6, linestyle=dashes, label="track")
            _end(axes, main, 7.0)
        for cart in layout.obstacles:
            draw_cart(axes, yard, cart)
        draw_pose(axes, layout.start, yard.robot.radius, INK, "white")
        draw_pose(axes, layout.goal, yard.robot.radius, INK, INK)
    return figure


def draw_cart(axes: Axes, yard: Yard, cart: Obstacle) -> None:
    """Draw a cart as a disc and, where it moves, an arrow to where it heads."""
    axes.add_patch(Circle((cart.x, cart.y), cart.radius, facecolor="#c9ced2", edgecolor=INK, linewidth=0.9))
    axes.annotate(
        "",
        _ahead(cart, yard),
        (cart.x, cart.y),
        annotation_clip=False,
        arrowprops={"arrowstyle": "->", "color": INK, "linewidth": 1.0, "shrinkA": 0, "shrinkB": 0},
    )


def _ahead(cart: Obstacle, yard: Yard) -> tuple[float, float]:
    """Return where a cart heads in AHEAD seconds, at the farthest the wall."""
    (low_x, high_x), (low_y, high_y) = yard.floor.x, yard.floor.y
    x, y = cart.x + AHEAD * cart.vx, cart.y + AHEAD * cart.vy
    return min(max(x, low_x), high_x), min(max(y, low_y), high_y)


def draw_arrows(axes: Axes, scene: Scene, arrows: int = ARROWS) -> None:
    """Draw the headings of ``survey.scene.headings``, so many arrows along the longer side of the floor."""
    floor = scene.yard.floor
    side = max(_span(floor.x), _span(floor.y))
    x, y = (part.ravel() for part in np.meshgrid(*grid(scene.yard, side / arrows)))
    free = clear(scene, x, y)
    x, y = x[free], y[free]
    heading = headings(scene, x, y)
    axes.quiver(
        x,
        y,
        np.cos(heading),
        np.sin(heading),
        color=SOFT,
        pivot="mid",
        units="xy",
        angles="xy",
        scale_units="xy",
        scale=1.35 * arrows / side,
        width=0.0045 * side / 2.4,
        headwidth=4.5,
        headlength=4.5,
        headaxislength=4.0,
    )


def _end(axes: Axes, track: FloorTrack, size: float) -> None:
    look = LOOKS[track.kind]
    axes.plot(
        track.x[-1:],
        track.y[-1:],
        look.marker,
        color=INK,
        markerfacecolor="white" if track.kind is OutcomeKind.ARRIVED else INK,
        markersize=size,
        markeredgewidth=1.4,
        zorder=5,
    )


def draw_pose(axes: Axes, pose: Pose, radius: float, colour: str, fill: str) -> None:
    """Draw a robot's footprint as a disc with a nose."""
    axes.add_patch(Circle((pose.x, pose.y), radius, facecolor="white", edgecolor=colour, linewidth=1.2, zorder=3))
    ahead = (pose.x + 2.2 * radius * math.cos(pose.yaw), pose.y + 2.2 * radius * math.sin(pose.yaw))
    axes.annotate(
        "",
        ahead,
        (pose.x, pose.y),
        zorder=4,
        annotation_clip=False,
        arrowprops={
            "arrowstyle": "-|>",
            "edgecolor": colour,
            "facecolor": fill,
            "linewidth": 1.2,
            "shrinkA": 0,
            "shrinkB": 0,
        },
    )


def _span(side: tuple[float, float]) -> float:
    return max(side[1] - side[0], 1e-9)


def _extent(yard: Yard | None, layouts: Sequence[Layout]) -> tuple[tuple[float, float], tuple[float, float]]:
    """Return the floor's sides (m); without a yard a box around what the layouts name."""
    if yard is not None:
        return yard.floor.x, yard.floor.y
    poses = [pose for layout in layouts for pose in (layout.start, layout.goal)]
    xs, ys = [pose.x for pose in poses], [pose.y for pose in poses]
    return (min(xs) - 0.2, max(xs) + 0.2), (min(ys) - 0.2, max(ys) + 0.2)


def floor_height(x: tuple[float, float], y: tuple[float, float]) -> float:
    """Return the height (in) of a figure as wide as usual with a floor of these sides (m)."""
    return 0.5 + 4.2 * min(max(_span(y) / _span(x), 0.25), 1.6)


def draw_floor(axes: Axes, yard: Yard | None, x: tuple[float, float], y: tuple[float, float]) -> None:
    """Draw the edge of the floor, thick where it is a wall, and label the axes."""
    walled = yard is not None and yard.floor.walled
    axes.add_patch(
        Rectangle(
            (x[0], y[0]),
            _span(x),
            _span(y),
            fill=False,
            edgecolor=INK if yard else SOFT,
            clip_on=False,
            linewidth=2.2 if walled else 1.0,
            linestyle="-" if walled else "--",
        )
    )
    axes.set_xlim(x)
    axes.set_ylim(y)
    axes.set_aspect("equal")
    axes.spines[:].set_visible(False)
    axes.locator_params(nbins=5)
    axes.set_xlabel("x, m")
    axes.set_ylabel("y, m")


def _faint(count: int) -> float:
    return 0.8 if count < 40 else 0.35
