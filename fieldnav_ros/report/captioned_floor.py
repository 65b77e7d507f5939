"""The page's pictures of the floor, with their words."""

from __future__ import annotations

from typing import Any

from fieldnav_ros.report import floor
from fieldnav_ros.report.captioned import Picture, picture
from fieldnav_ros.report.facts import Facts
from fieldnav_ros.report.scenes import FailureScene, FieldScene, Ground
from fieldnav_ros.report.style import WORDS
from fieldnav_ros.report.values import Name, Sentence, seconds, whole


def failure_picture(ground: Ground, scene: FailureScene) -> Picture | None:
    """Return the map of failed episodes; None where none failed."""
    if not scene.items:
        return None
    known = sum(item.track is not None for item in scene.items)
    caption: list[Any] = [
        whole("failures_shown", len(scene.items)),
        " of ",
        whole("failures", scene.total),
        " failures are shown. ",
    ]
    if known:
        how: Sentence = ["as the simulator repeats them"]
        if scene.measured == known:
            how = ["as measured"]
        elif scene.measured:
            how = [whole("failures_measured", scene.measured), " as measured, the others as the simulator repeats them"]
        caption += [
            "For ",
            whole("failures_with_track", known),
            " of them the track is known (",
            *how,
            "): grey from the start, the mark is where it ended. Look for marks that crowd at a wall or before a goal.",
        ]
    else:
        caption += [
            "The record holds where they began, not where they ended, and so does the picture. "
            "Look for a part of the floor from which many fail."
        ]
    kinds = ", ".join(sorted({WORDS[item.kind] for item in scene.items}))
    return picture(
        "failures",
        floor.failures(ground.yard, scene.items),
        f"Map of the floor with {len(scene.items)} failed episodes: {kinds}.",
        caption,
    )


def field_pictures(ground: Ground, scene: FieldScene | None, found: Facts) -> list[Picture]:
    """Return the field under each set of the scene, before first."""
    if scene is None or ground.yard is None or ground.model is None:
        return []
    result = []
    for index, view in enumerate(scene.views):
        word = "before" if index == 0 else "after" if found.changed else "challenger, not accepted"
        main = view.main
        figure = floor.field(
            ground.yard, scene.layout, view.set.values, ground.model, main, view.others, after=index > 0
        )
        ends = f" Its track ends with {WORDS[main.kind]}." if main else ""
        caption: Sentence = []
        if main is not None:
            caption = [
                "Thick track: ",
                WORDS[main.kind],
                " after ",
                seconds(f"track.{index}.time", main.time),
                ", measured." if view.measured else ", in simulation.",
            ]
        result.append(
            picture(
                f"field-{index}",
                figure,
                f"Headings over the floor under {view.set.id} ({word}).{ends}",
                caption,
                [f"{word}: ", Name(view.set.id)],
            )
        )
    return result
