"""What the tuner tells of itself: one word for its state, and what whoever stands beside the floor should do now."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, Literal

from fieldnav_ros.nodes.payloads import PastEpisode, Source, TunerStatus

LARGEST_EVIDENCE = 1e12
FROM_SUMMARY = (
    "phase", "episodes_done", "episodes_left", "champion", "champion_cost", "challenger", "challenger_cost", "pairs",
)  # fmt: skip
CLEAR = "Clear the floor and take the hardware stop in hand"
SILENT_POSE = 1.0
"""Seconds without a pose after which the status warns of it."""


@dataclass(frozen=True)
class Scene:
    """What goes on in the tuner besides the session itself."""

    phase: str
    """The session's word: search, verdict, paused, released, ended."""
    mode: Literal["tune", "observe"] = "tune"
    wanted: bool = False
    """Whether episodes are to be run."""
    reachable: bool = True
    """Whether guidance is there."""
    running: bool = False
    """Whether an episode runs."""
    reset: str = ""
    """driving or placing, where the robot is awaited at its start; ``reset_words`` says where to put it."""
    reset_words: str = ""
    outcomes: Source = "judge"
    champion: str = "initial"
    confirmed: bool = False
    """Whether the champion was read back from guidance."""


def state_of(scene: Scene) -> str:
    """Return one word for what the tuner does."""
    if scene.mode == "observe":
        return "observing"
    if scene.phase in ("ended", "paused", "released"):
        return scene.phase
    if not scene.wanted:
        return "idle"
    if not scene.reachable:
        return "waiting"
    return scene.reset or "running"


def todo_of(scene: Scene) -> str:
    """Return what to do beside the floor, in a sentence or two."""
    state = state_of(scene)
    if state == "observing":
        return "Match: no number is changed; every new goal is judged and recorded as an episode."
    if state in ("ended", "released"):
        return _at_the_end(scene, state)
    if state in ("idle", "paused"):
        return f"{CLEAR}; then begin."
    if state == "waiting":
        return "Guidance cannot be reached: see whether guidance_node runs and the robot's network is there."
    if state == "placing":
        return scene.reset_words
    if state == "driving":
        return "Stay off the floor: the robot drives to its next start by itself."
    if scene.running and scene.outcomes == "operator":
        return "Stay off the floor, watch the episode and report how it ends."
    return "Stay off the floor: an episode is running." if scene.running else "Stay off the floor."


def _at_the_end(scene: Scene, state: str) -> str:
    if not scene.confirmed:
        return f"Champion {scene.champion} is NOT confirmed on the robot yet. It goes in as soon as guidance answers."
    over = "Session over" if state == "ended" else "Match"
    after = "" if state == "ended" else " Begin goes on after the match."
    return f"{over}: champion {scene.champion} is in service, read back.{after}"


def evidence_of(logarithm: float | None) -> float | None:
    """Return evidence on its plain scale, bounded so that it stays a number that any reader takes."""
    return None if logarithm is None else min(math.exp(min(logarithm, 700.0)), LARGEST_EVIDENCE)


def status_of(
    scene: Scene, summary: dict[str, Any], since_s: float, last: tuple[PastEpisode, ...], **more: Any
) -> TunerStatus:
    """Return the status; ``since_s`` is floor time that the session does not know of yet."""
    return TunerStatus(
        state=state_of(scene),
        todo=todo_of(scene)[:1000],
        floor_time_left=summary["floor_time_left_s"] - since_s,
        search_left=summary["search_episodes_left"],
        verdict_left=summary["verdict_episodes_left"],
        mean_episode=summary["mean_episode_s"],
        mean_reset=summary["mean_reset_s"],
        verdict=_verdict(summary),
        evidence=evidence_of(summary["log_evidence"]),
        threshold=evidence_of(summary["log_threshold"]),
        last=last,
        mode=scene.mode,
        outcomes=scene.outcomes,
        in_service=more.pop("in_service") or None,
        **more,
        **{name: summary[name] for name in FROM_SUMMARY},
    )


def _verdict(summary: dict[str, Any]) -> str:
    word, ended = summary["last_verdict"], summary["ended"]
    if word is None:
        return f"none ({ended})" if ended else ""
    kept = "the challenger is better and was accepted" if word == "accept" else "the champion was kept"
    return f"{kept} ({ended})" if ended else kept
