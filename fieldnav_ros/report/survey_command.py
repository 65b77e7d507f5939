"""``fieldnav survey``: the field drawn with its faults marked, and how often a robot does not arrive."""

from __future__ import annotations

import argparse
import io
import math
from collections import Counter
from importlib.util import find_spec
from pathlib import Path
from typing import TYPE_CHECKING, Any

from fieldnav_ros.arguments import number
from fieldnav_ros.errors import InputError, WorkError
from fieldnav_ros.guide import DEFAULT_MODEL, MODELS
from fieldnav_ros.model import Obstacle, Pose
from fieldnav_ros.parameters import DEFAULTS
from fieldnav_ros.params_file import read_model, read_parameters, write_bytes
from fieldnav_ros.report.command import check_place
from fieldnav_ros.survey.scene import Scene, middle_of_goal
from fieldnav_ros.yard import FARTHEST, load_yard

if TYPE_CHECKING:
    from fieldnav_ros.survey.survey import Survey

SHARE = 0.02
DOTS = 200
"""Dots per inch of the picture."""
NAMED = 5
"""Places of each kind of fault that are named in words; the picture has all."""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add the verb's arguments to its parser."""
    parser.add_argument("--yard", type=Path, required=True, metavar="YAML", help="the floor, its robot and its grades")
    parser.add_argument(
        "--params", type=Path, metavar="YAML", help="ROS parameter file with the set (default: the defaults)"
    )
    parser.add_argument("--out", type=Path, required=True, metavar="PNG", help="where to write the picture")
    parser.add_argument(
        "--model", choices=MODELS, help=f"which field (default: what the file of --params says, else {DEFAULT_MODEL})"
    )
    parser.add_argument(
        "--goal", type=number("--goal", -FARTHEST, FARTHEST), nargs=3, metavar=("X", "Y", "YAW"),
        help="goal in m and rad (default: the middle of the yard's goal region)",
    )  # fmt: skip
    parser.add_argument(
        "--obstacle", type=number("--obstacle", -FARTHEST, FARTHEST), nargs=2, action="append", default=[],
        metavar=("X", "Y"), help="a parked cart, in m; may be given again",
    )  # fmt: skip
    parser.add_argument(
        "--share", type=number("--share", 0, 1), default=SHARE,
        help="largest share of starts that may fail before the exit code is 1 (default: %(default)s)",
    )  # fmt: skip


def run(arguments: argparse.Namespace) -> tuple[list[str], dict[str, Any]]:
    """Survey, write the picture, and return lines to print and the summary.

    InputError on bad input; WorkError where the extra ``report`` is not installed or the picture cannot be written.
    """
    if find_spec("matplotlib") is None:
        raise WorkError("matplotlib is not installed; install fieldnav_ros with its extra 'report'")
    scene = _scene(arguments)
    check_place(arguments.out)
    from fieldnav_ros.survey.survey import survey  # SciPy, and below matplotlib, take a second to import

    found = survey(scene)
    write_bytes(arguments.out, _picture(found))
    summary = {
        "ok": found.share_failed <= arguments.share,
        "cancelling_points": len(found.cancelling),
        "loops": len(found.loops),
        "flips": len(found.flips),
        "starts": len(found.starts),
        "failed_starts": len(found.failed),
        "failed_as": _kinds(found),
        "share_failed": found.share_failed,
        "picture": str(arguments.out),
    }
    return [*lines(found), f"picture: {arguments.out}"], summary


def _scene(arguments: argparse.Namespace) -> Scene:
    yard = load_yard(arguments.yard)
    parameters, model = DEFAULTS, arguments.model
    if arguments.params is not None:
        parameters = read_parameters(arguments.params)
        model = model or read_model(arguments.params)
        if model is not None and model not in MODELS:
            raise InputError.of(f"{arguments.params}: field.model", model, "one of " + ", ".join(MODELS))
    goal = middle_of_goal(yard)
    if arguments.goal is not None:
        x, y, yaw = arguments.goal
        goal = Pose(x=x, y=y, yaw=math.remainder(yaw, 2.0 * math.pi))
    carts = tuple(Obstacle(x=x, y=y, radius=yard.cart_radius) for x, y in arguments.obstacle)
    return Scene(yard, parameters, model or DEFAULT_MODEL, goal, carts).check()


def _picture(found: Survey) -> bytes:
    from fieldnav_ros.report.style import fix_layout, styled
    from fieldnav_ros.report.survey_picture import survey_figure

    figure, stream = survey_figure(found), io.BytesIO()
    with styled():
        fix_layout(figure)
        figure.savefig(stream, format="png", dpi=DOTS, facecolor="white", metadata={"Software": None})
    return stream.getvalue()


def _kinds(found: Survey) -> dict[str, int]:
    return dict(sorted(Counter(start.kind.value for start in found.failed).items()))


def lines(found: Survey) -> list[str]:
    """Return what was found in plain words."""
    scene, goal = found.scene, found.scene.goal
    kinds = ", ".join(f"{count} {kind}" for kind, count in _kinds(found).items())
    points = [f"{x:.3f} {y:.3f}" for x, y in found.cancelling]
    loops = [f"about {loop.x.mean():.3f} {loop.y.mean():.3f} (paths: {loop.paths})" for loop in found.loops]
    flips = [
        f"{flip.x:.3f} {flip.y:.3f} ({math.degrees(flip.angle):.0f} degrees, paths: {flip.paths})"
        for flip in found.flips
    ]
    return [
        f"{scene.yard.name}: field {scene.model}, goal {goal.x:g} {goal.y:g} {goal.yaw:g}, "
        f"{len(scene.obstacles)} parked, {found.time_limit:g} s",
        f"cancelling points: {_some(points)}",
        f"closed loops: {_some(loops)}",
        f"flips: {_some(flips)}",
        f"failed starts: {len(found.failed)} of {len(found.starts)} ({100.0 * found.share_failed:.1f} %)"
        + (f": {kinds}" if kinds else ""),
    ]


def _some(items: list[str]) -> str:
    if not items:
        return "0"
    more = f"; and {len(items) - NAMED} more" if len(items) > NAMED else ""
    return f"{len(items)}: " + "; ".join(items[:NAMED]) + more
