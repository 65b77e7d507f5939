"""What is shown on the floor: which episodes, and whether the built-in simulator can say where they went."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from fieldnav_ros.guide import MODELS
from fieldnav_ros.model import Layout, OutcomeKind
from fieldnav_ros.report.facts import Episode, Facts, NamedValues
from fieldnav_ros.report.floor import Failure
from fieldnav_ros.report.replay import FloorTrack, replay
from fieldnav_ros.world.plant import STEP
from fieldnav_ros.yard import Yard

MOST_FAILURES = 200
MOST_CHECKS = 30
LEAST_CHECKS = 3
AGREEMENT = 0.95
TIME_SLACK = 2.1 * STEP
OTHER_STARTS = 5

Tracks = Mapping[int, FloorTrack]
"""Tracks of a record (from bags) by episode id."""


@dataclass(frozen=True)
class Ground:
    """What episodes are run again on; ``model`` is None where the field that guided is not known here."""

    yard: Yard | None
    model: str | None

    @classmethod
    def of(cls, facts: Facts) -> Ground:
        """Return the ground of a session."""
        about = facts.about
        return cls(about.yard, about.model if about.model in MODELS else None)

    def run(
        self, layouts: Sequence[Layout], sets: Sequence[NamedValues], time_limits: Sequence[float]
    ) -> list[FloorTrack]:
        """Run sets on layouts; nothing where that cannot be done."""
        if self.yard is None or self.model is None or not layouts:
            return []
        return replay(self.yard, layouts, [item.values for item in sets], self.model, time_limits)


@dataclass(frozen=True)
class FailureScene:
    """Failed episodes to show, ``shown`` of ``total``; ``agreed`` of ``checked`` were repeated by the simulator."""

    items: tuple[Failure, ...]
    total: int
    checked: int
    agreed: int
    measured: int

    @property
    def repeated(self) -> bool:
        """Whether the simulator repeats the record, which no robot's episodes would let it do."""
        return self.checked >= LEAST_CHECKS and self.agreed >= AGREEMENT * self.checked


def failure_scene(facts: Facts, ground: Ground, tracks: Tracks) -> FailureScene:
    """Choose failed episodes, evenly over the session, and find where they ended.

    A measured track says it. Else the episodes are run again, with arrivals as a check: an arrival or contact
    that ends within two steps of the recorded time is repeated. Timeouts check nothing, as each ends at the limit.
    """
    chosen = _evenly(facts.failures, MOST_FAILURES)
    checks = _evenly([item for item in facts.episodes if item.kind is not OutcomeKind.TIMEOUT], MOST_CHECKS)
    agreed = len(_repeated(checks, ground))
    scene = FailureScene((), len(facts.failures), len(checks), agreed, sum(item.id in tracks for item in chosen))
    known = {**_repeated(chosen, ground), **tracks} if scene.repeated else tracks
    items = tuple(Failure(item.kind, item.layout, known.get(item.id)) for item in chosen)
    return FailureScene(items, scene.total, scene.checked, scene.agreed, scene.measured)


def _repeated(episodes: Sequence[Episode], ground: Ground) -> dict[int, FloorTrack]:
    """Return the tracks of those episodes that the simulator repeats."""
    again = ground.run(
        [item.layout for item in episodes], [item.set for item in episodes], [item.time_limit for item in episodes]
    )
    return {item.id: run for item, run in zip(episodes, again) if _repeats(item, run)}


def _repeats(item: Episode, run: FloorTrack) -> bool:
    return item.kind is run.kind and abs(item.time - run.time) <= TIME_SLACK


def _evenly(items: Sequence[Episode], most: int) -> list[Episode]:
    if len(items) <= most:
        return list(items)
    return [items[round(index * (len(items) - 1) / (most - 1))] for index in range(most)]


@dataclass(frozen=True)
class View:
    """One set over the scene's layout: its tracks, and whether the main one was measured."""

    set: NamedValues
    main: FloorTrack | None
    others: tuple[FloorTrack, ...]
    measured: bool


@dataclass(frozen=True)
class FieldScene:
    """One layout of the record with the sets to compare; ``from_verdict``: the last verdict's first."""

    layout: Layout
    views: tuple[View, ...]
    from_verdict: bool


def field_scene(facts: Facts, ground: Ground, tracks: Tracks) -> FieldScene | None:
    """Return what the fields are shown on; None where floor or field are not known, or nothing was run."""
    if ground.yard is None or ground.model is None or not facts.episodes or facts.before is None or facts.after is None:
        return None
    shown = [facts.before]
    other = facts.after if facts.changed else facts.rival
    if other is not None:
        shown.append(other)
    verdict = [item for item in facts.episodes if item.phase == "verdict"]
    last = [item for item in verdict if facts.rounds and item.set.id == facts.rounds[-1].challenger.id]
    shown_on = _best_measured(last or verdict or list(facts.episodes), facts, shown, tracks)
    layout = shown_on.layout
    seen = [item.layout for item in (verdict or facts.episodes)]
    around = _other_starts(ground.yard, layout, seen)
    views = []
    for chosen in shown:
        ids = [item.id for item in facts.episodes if item.layout == layout and item.set.id == chosen.id]
        real = next((tracks[number] for number in ids if number in tracks), None)
        count = 1 + len(around)
        runs = ground.run([layout, *around], [chosen] * count, [shown_on.time_limit] * count)
        views.append(View(chosen, real or runs[0], tuple(runs[1:]), real is not None))
    return FieldScene(layout, tuple(views), bool(verdict))


def _best_measured(
    candidates: Sequence[Episode], facts: Facts, shown: Sequence[NamedValues], tracks: Tracks
) -> Episode:
    """Return the first candidate with the most of the sets measured on its layout."""
    measured = {(item.layout, item.set.id) for item in facts.episodes if item.id in tracks}
    return max(candidates, key=lambda item: sum((item.layout, chosen.id) in measured for chosen in shown))


def _other_starts(yard: Yard, layout: Layout, seen: Sequence[Layout]) -> list[Layout]:
    """Return the layout begun from other recorded starts that are clear of its carts."""
    result, starts = list[Layout](), {layout.start}
    for item in seen:
        start = item.start
        clear = all(
            math.hypot(start.x - cart.x, start.y - cart.y) >= yard.robot.radius + cart.radius + yard.spacing
            for cart in layout.obstacles
        )
        if clear and start not in starts and len(result) < OTHER_STARTS:
            result.append(layout.model_copy(update={"start": start}))
        starts.add(start)
    return result
